/* SPDX-License-Identifier: MIT
 *
 * Results to files. A writer takes the run (everything that is known, read-only) and adds its files to an output set;
 * nothing appears under a final name before the whole set is published.
 *
 *   unseen     what is said of one unseen cell: estimate, interval, basis, whether --strict leaves it blank
 *   filled     the completed table in the shape it came in
 *   cells      one line an unseen cell
 *   factors    offsets and the low-rank part
 *   time_part  the laws of what is followed in time
 *   trace      one line an iteration of the final fit
 *   record     run.json: what is needed to repeat and to judge the run
 *   array      a dense Matrix Market file      field   a field of delimited text      json   a value of JSON
 *
 * All numbers that were computed are written as the shortest decimal that reads back as the same double. All bytes are
 * the same for any number of threads and any hour, but for the object "timing" of run.json.
 */
#ifndef FESCUE_WRITE_H
#define FESCUE_WRITE_H

#include "judge/judge.h"

/* Everything there is to write; a view, owned by the job. */
struct run {
    fescue_context *context;
    const fescue_table *table;
    const struct fescue_options *options;
    const struct time_axis *time; /* along none where there is no time axis */
    const struct model *model;
    const struct choice *choice;
    const struct solve_result *fit; /* of the final fit on all cells */
    const char *start;              /* of that fit: "grown", "spectral", a strategy of solve_recover, or "none" */
    double scale;                   /* of its problem: units of the table in one of the fit's */
    const struct determined *determined;
    const struct judgement *judgement;
    const struct nearness *near;               /* of the columns; count 0: nothing is known */
    const struct hole_shape *shape;            /* of what was hidden */
    double started, seconds_wall, seconds_cpu; /* started: Unix time */
    uint64_t hidden;                           /* cells held out while choosing */
    bool is_search_cut;                        /* the time limit ended the choosing */
    uint64_t filled[BASIS_COUNT];              /* unseen cells by basis, those left blank among them */
    uint64_t blank;                            /* cells left blank by --strict */
    bool writes_filled, writes_cells, writes_factors;
};

/* What is said of cell (row, column), which was not seen. */
struct unseen {
    double estimate, lower, upper; /* bounds applied; lower and upper NAN where there is no interval */
    enum basis basis;
    bool is_blank; /* left blank by --strict */
};
struct unseen run_unseen(const struct run *run, uint32_t row, uint32_t column);
/* The estimate of any cell. Without a ridge nothing but chance decides the low-rank part of a cell that the data do not
   determine: there it is left out. Else it is model_estimate. */
double run_estimate(const struct run *run, uint32_t row, uint32_t column);
/* Counts filled[] and blank of the run, in O(observed + rows + columns). */
void run_count(struct run *run);
/* Why a result is not written, for record and summary; NULL when it is. */
const char *run_why_left_out(const struct run *run, bool is_written);
/* Which bit of --write stands for which result: the order of its words in the list of options. */
enum { WRITE_FILLED = 1, WRITE_CELLS = 2, WRITE_FACTORS = 4 };
/* The words that go with every result that people read. */
extern const char *const run_caution;

const char *filled_name(const fescue_table *table); /* filled.mtx, filled.csv or filled.tsv */

fescue_status write_filled(const struct run *run, struct output *output);
fescue_status write_cells(const struct run *run, struct output *output);     /* cells.csv */
fescue_status write_factors(const struct run *run, struct output *output);   /* left, spectrum, right, offsets: .mtx */
fescue_status write_time_part(const struct run *run, struct output *output); /* time-part.csv, where there is one */
fescue_status write_trace(const struct run *run, struct output *output);     /* trace.csv */
fescue_status write_record(const struct run *run, struct output *output);    /* run.json, the seal */

fescue_status write_ranking(const struct ranking *ranking, struct output *output); /* rank.csv, the seal */

/* Pieces that sow uses too: a field of delimited text, quoted as RFC 4180 says when it has to be; a dense array file,
   with one line of comment or NULL. */
void write_field(struct outfile *file, const char *text, char separator);
fescue_status write_array(struct output *output, const char *name, struct matrix matrix, const char *comment);

/* A value of Jansson as text, and a line break. False when there was no memory for it (or the file has failed). */
struct json_t;
bool json_put(struct outfile *file, struct json_t *value);

#endif
