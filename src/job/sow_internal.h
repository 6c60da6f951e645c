/* SPDX-License-Identifier: MIT
 *
 * Sowing: synthetic tables with known truth.
 *
 *   sow         options to files: checks, the record, the summary
 *   sow_plain   random factors and a plain table
 *   sow_holes   which cells of a plain table are seen
 *   sow_faults  faults planted in a plain table
 *   sow_text    text to a file of the set, gzipped or not
 *   scene_fen, scene_cider   the two invented scenes
 *
 * Every number is a function of (seed, stream, index), so that a table does not depend on the order of work, and the
 * cells of one column are found without those of the others.
 */
#ifndef FESCUE_SOW_INTERNAL_H
#define FESCUE_SOW_INTERNAL_H

#include "base/base.h"

#include <zlib.h>

/* ---- faults ----------------------------------------------------------------------------------------------------- */

enum { ORPHAN_ROWS = 5, ORPHAN_COLUMNS = 4 };
/* Where faults are, from 0; all of them, whether they were asked for or not. */
struct fault_plan {
    uint64_t stuck_column, stuck_from, stuck_to; /* rows stuck_from .. stuck_to - 1 */
    uint64_t spike_column, spike_row;
    double spike;
    uint64_t copied_column, copy_column;
    uint64_t late_column, late_row;
    uint64_t orphan_row, orphan_column[ORPHAN_COLUMNS];
};

/* ---- what a sowing is, and what came of it ---------------------------------------------------------------------- */

struct sowing {
    fescue_context *context;
    const struct fescue_sow_options *options;
    struct output *output;
    /* set by the kind of table that is sown: */
    uint64_t rows, columns, observed;
    const char *table, *truth; /* names of the files, without ".gz"; truth as the summary calls it */
    struct fault_plan plan;
    const char *row_prefix, *column_prefix; /* of labels: "r" and "c", or nothing */
    double noise;                           /* standard deviation, in the table's own unit */
    double floor;                           /* about the best RMSE that unseen cells allow; NAN: not known */
};

fescue_status sow_plain(struct sowing *sowing);
fescue_status sow_fen(struct sowing *sowing);
fescue_status sow_cider(struct sowing *sowing);

enum { SOW_TEXT_SIZE = 8192 }; /* of the text of an option, the longest being a spectrum */

/* The streams of random numbers, so that no two uses share any. */
enum sow_stream {
    SOW_LEFT,
    SOW_RIGHT,
    SOW_ROW_OFFSETS,
    SOW_COLUMN_OFFSETS,
    SOW_HOLES,
    SOW_NOISE,
    SOW_FAULTS,
    SOW_HEAVY, /* the denominators of heavy noise */
    SOW_WANDER,
    SOW_FEN = 100,
    SOW_CIDER = 200
};
/* `index` is where the stream begins: give each column 2^32 numbers of its own with column << 32. */
struct random_stream sow_stream(const struct sowing *sowing, unsigned which, uint64_t index);

/* ---- holes ------------------------------------------------------------------------------------------------------ */

/* Walks the rows of one column that are seen, upwards. */
struct holes {
    int shape;           /* position in the words of the option --holes */
    uint64_t rows, next; /* next seen row; rows at the end */
    uint64_t stop;       /* runs: the end of the present stretch of seen rows */
    double share;        /* of the column's rows that are seen, on the average */
    struct random_stream stream;
};
/* share[j]: the share of column j that is seen, such that the mean is options->seen; columns numbers. */
void holes_shares(const struct fescue_sow_options *options, double *share);
void holes_open(const struct sowing *sowing, uint64_t column, double share, struct holes *holes);
void holes_step(struct holes *holes);

/* Chooses where the faults are; FESCUE_USAGE when the table is too small for them. */
fescue_status faults_plan(struct sowing *sowing, const double *share);
/* As holes_open and holes_step, for the table with its faults. */
void faults_open(const struct sowing *sowing, uint64_t column, const double *share, struct holes *holes);
void faults_step(const struct sowing *sowing, uint64_t column, struct holes *holes);
/* Turns a seen cell into the one whose value it has; returns what is added to that. */
double faults_source(const struct sowing *sowing, uint64_t *row, uint64_t *column);
/* The list for the record. */
void faults_write(const struct sowing *sowing, struct outfile *file);

/* ---- text ------------------------------------------------------------------------------------------------------- */

/* A text file of the output set, gzipped when the options say so. Failures are sticky, as in struct outfile. */
struct sink {
    fescue_context *context;
    struct outfile *file;
    fescue_status status;
    bool is_packed;
    z_stream packer;
    unsigned char *packed; /* SINK_BUFFER bytes of gzip on their way out */
    char *buffer;          /* SINK_BUFFER bytes of text on their way in */
    size_t used;
};
enum { SINK_BUFFER = 64 * 1024 };

/* New file `name`, with ".gz" when packed. The sink is an output: sink_close it whatever the result. */
fescue_status sink_open(const struct sowing *sowing, const char *name, struct sink *sink);
void sink_write(struct sink *sink, const char *bytes, size_t count);
void sink_text(struct sink *sink, const char *text);
void sink_count(struct sink *sink, uint64_t value);
void sink_real(struct sink *sink, double value);              /* the shortest that reads back */
void sink_fixed(struct sink *sink, double value, int places); /* at most 4 places; "-0.0" is "0.0" */
/* Ends the text when nothing failed so far, takes all back, and tells the first failure. */
fescue_status sink_close(struct sink *sink);

#endif
