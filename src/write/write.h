/* SPDX-License-Identifier: MIT
 *
 * Results to files. A writer takes the run (everything that is known, read-only) and adds its files to an output set;
 * nothing appears under a final name before the whole set is published.
 */
#ifndef FESCUE_WRITE_H
#define FESCUE_WRITE_H

#include "judge/judge.h"

/* Everything there is to write; a view, owned by the job. */
struct run {
    fescue_context *context;
    const fescue_table *table;
    const struct fescue_options *options;
    const struct model *model;
    const struct choice *choice;
    const struct solve_result *fit; /* of the final fit on all cells */
    const struct determined *determined;
    double halfwidth;                          /* NAN: intervals are left blank */
    double started, seconds_wall, seconds_cpu; /* started: Unix time */
    uint64_t hidden;                           /* cells held out while choosing */
    uint64_t filled[3];                        /* unseen cells by basis */
    uint64_t blank;                            /* cells left blank by --strict */
    bool writes_filled, writes_cells, writes_factors;
};

fescue_status write_filled(const struct run *run, struct output *output);  /* filled.mtx, filled.csv, filled.tsv */
fescue_status write_cells(const struct run *run, struct output *output);   /* cells.csv */
fescue_status write_factors(const struct run *run, struct output *output); /* left, spectrum, right, offsets: .mtx */
fescue_status write_trace(const struct run *run, struct output *output);   /* trace.csv */
fescue_status write_record(const struct run *run, struct output *output);  /* run.json, the seal */

/* Pieces that sow uses too: a field of delimited text, quoted as RFC 4180 says when it has to be; a dense array file.
 */
void write_field(struct outfile *file, const char *text, char separator);
fescue_status write_array(struct output *output, const char *name, struct matrix matrix, const char *comment);

#endif
