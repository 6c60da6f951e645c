/* SPDX-License-Identifier: MIT
 *
 * fescue.h: the public face of libfescue, which fills the missing cells of a table by low-rank completion and says how
 * wrong the filled cells are.
 *
 *     fescue_context *context;
 *     fescue_context_create(NULL, &context);
 *     fescue_table_read(context, "levels.csv", &options, &table);
 *     fescue_fill_table(table, &options, &fill);
 *     fescue_fill_write(fill, "filled-levels");
 *     double level = fescue_fill_estimate(fill, 17, 3);
 *
 * Every function that can fail returns a fescue_status and puts its outputs last; after a failure the outputs are NULL
 * or untouched, nothing is leaked, and fescue_failure_text gives one sentence that a person can act on. The library
 * never prints, exits or aborts. A context is used by one thread at a time (it has workers of its own); different
 * contexts are independent.
 *
 * Filled values are estimates, not measurements.
 */
#ifndef FESCUE_H
#define FESCUE_H

#include <stdbool.h>
#include <stddef.h>
#include <stdint.h>

#ifdef __cplusplus
extern "C" {
#endif

#define FESCUE_VERSION "0.1.0"

/* ---- status: one list gives the enum, the text and the exit status (sysexits.h) ---------------------------------- */

#define FESCUE_STATUS_LIST(X)                                                                                          \
    X(FESCUE_OK, 0, "done")                                                                                            \
    X(FESCUE_SOME_FAILED, 1, "some jobs of a night failed")                                                            \
    X(FESCUE_USAGE, 64, "the request is not one this program takes")                                                   \
    X(FESCUE_BAD_DATA, 65, "the data are malformed")                                                                   \
    X(FESCUE_NO_INPUT, 66, "the input cannot be read")                                                                 \
    X(FESCUE_DEFECT, 70, "a defect of this program")                                                                   \
    X(FESCUE_NO_MEMORY, 71, "not enough memory")                                                                       \
    X(FESCUE_CANNOT_CREATE, 73, "an output cannot be created")                                                         \
    X(FESCUE_CANNOT_WRITE, 74, "an output cannot be written")                                                          \
    X(FESCUE_STOPPED, 75, "stopped before the end")

typedef enum fescue_status {
#define FESCUE_STATUS_ENUM_(name, code, text) name,
    FESCUE_STATUS_LIST(FESCUE_STATUS_ENUM_)
#undef FESCUE_STATUS_ENUM_
} fescue_status;

const char *fescue_status_text(fescue_status status);
int fescue_status_exit_code(fescue_status status);

/* ---- context ------------------------------------------------------------------------------------------------------
 */

typedef struct fescue_context fescue_context;

/* What the library asks of its surroundings; any entry may be NULL, then the default in brackets is used. take and give
   may be called by several threads at once, progress and log only by the one that called us. */
struct fescue_hooks {
    void *data;                                                    /* handed back to each call below */
    void *(*take)(void *data, size_t size);                        /* [malloc] */
    void (*give)(void *data, void *block);                         /* [free] */
    bool (*progress)(void *data, const char *stage, double share); /* false asks to stop; share < 0: unknown [none] */
    void (*log)(void *data, const char *sentence);                 /* [none] */
};

fescue_status fescue_context_create(const struct fescue_hooks *hooks, fescue_context **out);
void fescue_context_destroy(fescue_context **context);
void fescue_context_cancel(fescue_context *context); /* async-signal-safe: asks the running call to stop */
/* The first failure since the context was made or cleared: its sentence, and "file.c:line" of the source. */
const char *fescue_failure_text(const fescue_context *context);
const char *fescue_failure_where(const fescue_context *context);
void fescue_failure_clear(fescue_context *context);
/* Memory accounting: blocks and bytes alive, the largest bytes ever alive, calls so far. */
struct fescue_memory {
    uint64_t blocks, bytes, peak_bytes, calls;
};
struct fescue_memory fescue_memory_usage(const fescue_context *context);

/* OpenBLAS takes its kernels by the model of the processor when it is loaded; the plainest, some five times slower,
   where it does not know the model. Then: what the environment variable OPENBLAS_CORETYPE should be before the program
   starts. NULL: it knows the processor, the variable is set, or there is nothing better. */
const char *fescue_openblas_kernels_missed(void);

/* ---- options: one table each; from it come defaults, bounds, parsing, help, manual and the run record --------------
 */

enum fescue_precision { FESCUE_DOUBLE, FESCUE_SINGLE };
enum fescue_duplicates {
    FESCUE_DUPLICATES_REFUSE,
    FESCUE_DUPLICATES_MEAN,
    FESCUE_DUPLICATES_LAST,
    FESCUE_DUPLICATES_FIRST
};
enum fescue_format { FESCUE_FORMAT_AUTO, FESCUE_FORMAT_MATRIX_MARKET, FESCUE_FORMAT_WIDE, FESCUE_FORMAT_LONG };
enum fescue_offsets {
    FESCUE_OFFSETS_AUTO,
    FESCUE_OFFSETS_BOTH,
    FESCUE_OFFSETS_ROWS,
    FESCUE_OFFSETS_COLUMNS,
    FESCUE_OFFSETS_MEAN,
    FESCUE_OFFSETS_NONE
};
enum fescue_time_axis { FESCUE_TIME_AUTO, FESCUE_TIME_ROWS, FESCUE_TIME_COLUMNS, FESCUE_TIME_NONE };
enum fescue_holdout_shape {
    FESCUE_HOLDOUT_AUTO,
    FESCUE_HOLDOUT_CELLS,
    FESCUE_HOLDOUT_GAPS,
    FESCUE_HOLDOUT_ROWS,
    FESCUE_HOLDOUT_COLUMNS
};
#define FESCUE_DENSE_MOST 20000000 /* cells of a table above which dense outputs are left out unless asked for */
#define FESCUE_AUTO (-1)           /* a count or real option left to the program */

enum fescue_option_kind {
    FESCUE_KIND_COUNT, /* int64_t */
    FESCUE_KIND_REAL,  /* double */
    FESCUE_KIND_WORD,  /* int: position in `words` */
    FESCUE_KIND_WORDS, /* unsigned: a comma-separated set out of `words`, bit by position */
    FESCUE_KIND_TEXT,  /* const char *, borrowed; NULL when not given */
    FESCUE_KIND_FLAG,  /* bool */
    FESCUE_KIND_RANGE, /* struct fescue_range: LO:HI */
    FESCUE_KIND_TIME,  /* double, seconds: 90, 15m, 2h */
    FESCUE_KIND_BYTES  /* int64_t: 500M, 2G */
};
struct fescue_range {
    double low, high; /* -inf, +inf when not given */
};
typedef int64_t fescue_count_value;
typedef double fescue_real_value;
typedef int fescue_word_value;
typedef unsigned fescue_words_value;
typedef const char *fescue_text_value;
typedef bool fescue_flag_value;
typedef struct fescue_range fescue_range_value;
typedef double fescue_time_value;
typedef int64_t fescue_bytes_value;

/* Commands an option belongs to; PLAN: the section [night] of a plan. */
enum {
    FESCUE_FOR_FILL = 1,
    FESCUE_FOR_SURVEY = 2,
    FESCUE_FOR_SOW = 4,
    FESCUE_FOR_NIGHT = 8,
    FESCUE_FOR_PLAN = 16,
    FESCUE_FOR_RANK = 32,
    FESCUE_FOR_PACK = 64
};

struct fescue_option {
    const char *name; /* "holdout": --holdout */
    char letter;      /* 'o' for -o, or 0 */
    enum fescue_option_kind kind;
    bool can_be_auto;     /* "auto" is taken, and stored as FESCUE_AUTO */
    const char *standard; /* the default, as text; NULL: not given */
    double least, most;   /* bounds of a number */
    const char *words;    /* "both|rows|columns" for words, else what the value is called in help: "SHARE" */
    unsigned commands;
    size_t position; /* of the field in its struct */
    const char *help;
};

struct fescue_options { /* for reading, surveying and filling */
#define OPTION(field, kind, name, letter, automatic, standard, least, most, words, commands, help)                     \
    fescue_##kind##_value field;
#include "fescue_options.def"
#undef OPTION
};
struct fescue_sow_options {
#define OPTION(field, kind, name, letter, automatic, standard, least, most, words, commands, help)                     \
    fescue_##kind##_value field;
#include "fescue_sow_options.def"
#undef OPTION
};
struct fescue_night_options {
#define OPTION(field, kind, name, letter, automatic, standard, least, most, words, commands, help)                     \
    fescue_##kind##_value field;
#include "fescue_night_options.def"
#undef OPTION
};

const struct fescue_option *fescue_option_table(size_t *count);
const struct fescue_option *fescue_sow_option_table(size_t *count);
const struct fescue_option *fescue_night_option_table(size_t *count);
void fescue_options_standard(struct fescue_options *options);
void fescue_sow_options_standard(struct fescue_sow_options *options);
void fescue_night_options_standard(struct fescue_night_options *options);
/* Sets the option `name` (without dashes) from text; a flag takes NULL, "yes" or "no". FESCUE_USAGE with a sentence
   that names option, value and what is taken. TEXT values are borrowed. */
fescue_status fescue_options_set(fescue_context *context, struct fescue_options *options, const char *name,
                                 const char *text);
fescue_status fescue_sow_options_set(fescue_context *context, struct fescue_sow_options *options, const char *name,
                                     const char *text);
fescue_status fescue_night_options_set(fescue_context *context, struct fescue_night_options *options, const char *name,
                                       const char *text);
/* How many letters must be put in, left out or changed to get from the first `length` bytes of `typed` to `name`: for
   guessing what was meant. A large number when `typed` is too long to be a slip. */
size_t fescue_slips(const char *typed, size_t length, const char *name);
/* The value of an option as text that fescue_options_set takes back, into text (at least 128 bytes). */
void fescue_option_text(const struct fescue_option *option, const void *options, char *text, size_t size);

/* ---- tables ---------------------------------------------------------------------------------------------------------
 */

typedef struct fescue_table fescue_table;

/* Reads options->precision, duplicates, format, threads, row_weights, column_weights. Path "-" is standard input. The
 * caller owns *out. */
fescue_status fescue_table_read(fescue_context *context, const char *path, const struct fescue_options *options,
                                fescue_table **out);
/* From numbers in memory, positions from 0, all copied. FESCUE_BAD_DATA: out of range, twice, not finite. */
fescue_status fescue_table_from_cells(fescue_context *context, uint32_t rows, uint32_t columns, uint64_t count,
                                      const uint32_t *row, const uint32_t *column, const double *value,
                                      const struct fescue_options *options, fescue_table **out);
void fescue_table_destroy(fescue_table **table);
/* Writes the table as a packed file, which fescue_table_read takes like any other and maps instead of reading it; a
   table filled from it gives the same results as one filled from its source. The file appears whole or not at all. It
   must not be changed in place while a table that was read from it lives. *text (owned by the caller, free with
   fescue_text_free) is the summary. */
fescue_status fescue_table_pack(const fescue_table *table, const char *path, char **text);

/* ---- survey
 * ------------------------------------------------------------------------------------------------------------ */

typedef struct fescue_survey fescue_survey;
fescue_status fescue_survey_table(const fescue_table *table, const struct fescue_options *options, fescue_survey **out);
/* The survey as plain text of several lines, owned by the survey. */
const char *fescue_survey_text(const fescue_survey *survey);
void fescue_survey_destroy(fescue_survey **survey);

/* ---- fill
 * -------------------------------------------------------------------------------------------------------------- */

typedef struct fescue_fill fescue_fill;
/* The whole main job: hold out, choose offsets, rank and ridge, measure the error, fit all cells. Borrows the table,
   which must outlive *out. Stopped by cancel, progress or --time-limit before a first fit: FESCUE_STOPPED. */
fescue_status fescue_fill_table(const fescue_table *table, const struct fescue_options *options, fescue_fill **out);
/* The estimate of cell (row, column), positions from 0, whether it was seen or not; clamped to --bounds. */
double fescue_fill_estimate(const fescue_fill *fill, uint32_t row, uint32_t column);
/* Writes the files of the run into `directory`: all of them or none; run.json appears last. */
fescue_status fescue_fill_write(fescue_fill *fill, const char *directory);
/* What a person wants to know, plain text of several lines, owned by the fill. */
const char *fescue_fill_text(const fescue_fill *fill);
void fescue_fill_destroy(fescue_fill **fill);

/* A hold on a directory for results: two runs on one directory are refused, in this process or another. Makes the
   directory when it is not there; waits up to `patience` seconds for another holder. FESCUE_CANNOT_CREATE. A directory
   that was made and stayed empty goes with the hold. */
typedef struct fescue_hold fescue_hold;
fescue_status fescue_place_hold(fescue_context *context, const char *directory, double patience, fescue_hold **out);
void fescue_place_release(fescue_hold **hold);

/* ---- rank
 * -------------------------------------------------------------------------------------------------------------- */

typedef struct fescue_ranking fescue_ranking;
/* Which rank, ridge and offsets a table supports, by cross-validation. Borrows the table, which must outlive *out. */
fescue_status fescue_rank_table(const fescue_table *table, const struct fescue_options *options, fescue_ranking **out);
/* The curve over ranks as a small chart and what follows from it, plain text, owned by the ranking. */
const char *fescue_ranking_text(const fescue_ranking *ranking);
/* The rank that was chosen. */
uint32_t fescue_ranking_rank(const fescue_ranking *ranking);
/* Writes rank.csv into `directory`. */
fescue_status fescue_ranking_write(const fescue_ranking *ranking, const char *directory);
void fescue_ranking_destroy(fescue_ranking **ranking);

/* ---- sow
 * ---------------------------------------------------------------------------------------------------------------- */

/* Writes a synthetic table and its truth into `directory`; *text (owned by the caller, free with fescue_text_free) is
   the summary. */
fescue_status fescue_sow(fescue_context *context, const struct fescue_sow_options *options, const char *directory,
                         char **text);
void fescue_text_free(fescue_context *context, char **text);

/* ---- night
 * ------------------------------------------------------------------------------------------------------------- */

/* Many jobs of fill, unattended: a plan (an INI file), a ledger of all nights beside it, a summary in the morning. Jobs
   run in child processes, so the calling program should have no threads of its own while a night runs. */
typedef struct fescue_night fescue_night;
/* Reads the plan; what `given` sets goes before what the plan says. FESCUE_NO_INPUT; FESCUE_USAGE with one sentence
   that names file, line and key. The caller owns *out. */
fescue_status fescue_night_read(fescue_context *context, const char *plan, const struct fescue_night_options *given,
                                fescue_night **out);
/* Runs what there is to run. FESCUE_OK: every job is done; FESCUE_STOPPED: some stopped with a checkpoint or were not
   begun, the same call goes on; FESCUE_SOME_FAILED. Other statuses: the night itself could not be held. */
fescue_status fescue_night_run(fescue_night *night);
/* The morning summary of fescue_night_run, or before it the jobs as planned; owned by the night. */
const char *fescue_night_text(const fescue_night *night);
/* The directory that holds the morning summary's files; owned by the night. */
const char *fescue_night_place(const fescue_night *night);
/* What the ledger holds, as text; free with fescue_text_free. */
fescue_status fescue_night_history(fescue_night *night, char **text);
void fescue_night_destroy(fescue_night **night);

#ifdef __cplusplus
}
#endif
#endif
