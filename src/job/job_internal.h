/* SPDX-License-Identifier: MIT
 *
 * The inside of the job folder.
 */
#ifndef FESCUE_JOB_INTERNAL_H
#define FESCUE_JOB_INTERNAL_H

#include "job/job.h"

/* ---- one option ------------------------------------------------------------------------------------------------- */

/* Reads text (NULL: none was given) as a value of this option into its field. False, and the field untouched, when it
   is not one. */
bool option_value_parse(const struct fescue_option *option, const char *text, void *field);
/* What the option takes, as the end of a sentence that begins "expected ". */
void option_value_expected(const struct fescue_option *option, char *text, size_t size);

/* ---- the surroundings of a job ------------------------------------------------------------------------------------
 */

/* Memory limit and number of workers as the options say. */
fescue_status job_prepare(fescue_context *context, const struct fescue_options *options);

/* ---- the fit on all cells -----------------------------------------------------------------------------------------
 */

struct final_request {
    const struct cells *cells;
    const struct fescue_options *options;
    const struct choice *choice;
    const struct solver *solver;
    double deadline; /* clock_wall() second, or 0 */
};
struct final_fit {
    struct model model;         /* owned */
    struct solve_result result; /* owned; its iterations are those of the whole way from its start */
    const char *start; /* which start it came from: "grown", "spectral", what solve_recover says, or "none" at rank 0 */
    double scale;      /* units of the table in one of the fit's */
    bool is_exact;     /* found by final_exact_run: without ridge, whatever the choice says */
    bool is_robust;    /* a fit with the absolute loss, gone over by final_robust_run */
    uint64_t set_aside; /* cells that it left out */
};
/* Fits all cells with what was chosen. Asked to stop, it ends with what it has: FESCUE_OK and STOP_CANCELLED. */
fescue_status final_fit_run(fescue_context *context, const struct final_request *request, struct final_fit *fit);
/* Whether starts beyond the ordinary ones may meet all cells exactly, and trying them: *found, and then the fit has its
   low-rank part, beside the offsets it came with (final_exact.c). Being asked to stop ends it without. */
bool final_exact_may_help(const struct final_request *request);
fescue_status final_exact_run(fescue_context *context, const struct final_request *request, struct final_fit *fit,
                              bool *found);
/* After a fit with the absolute loss: cells far off are set aside, the others fitted by squares (final_robust.c). Being
   asked to stop leaves the fit as it is. */
fescue_status final_robust_run(fescue_context *context, const struct final_request *request, struct final_fit *fit);
void final_fit_free(fescue_context *context, struct final_fit *fit);

/* ---- checkpoints -----------------------------------------------------------------------------------------------
 */

/* Opens the memo of a fill, when options->checkpoint names its file. */
fescue_status checkpoint_open(const fescue_table *table, const struct fescue_options *options);

/* What --season asks for, in steps of the clock. */
enum { SEASON_PERIODS_MOST = 4 };
struct season_plan {
    bool is_auto;
    size_t count;
    double period[SEASON_PERIODS_MOST];
    double rmse_without; /* on the hidden cells, without a season; NAN where that was not asked */
};

/* ---- a fill -------------------------------------------------------------------------------------------------------
 */

struct fescue_fill {
    fescue_context *context; /* borrowed */
    const fescue_table *table;
    struct fescue_options options; /* a copy; its texts are dropped */
    struct time_axis time;         /* of the table, or none */
    char *season_text;             /* owned; options.season */
    char *near_text;               /* owned; options.near_columns */
    struct nearness near;          /* of the columns; count 0: nothing is known */
    struct season_plan season_plan;
    struct season season;          /* taken off the cells, until season_restore gives it to the model */
    struct cells rest;             /* what the season leaves */
    const struct cells *cells;     /* what is fitted: the table's, or rest */
    struct fescue_options fitting; /* for the fit: without bounds while a season is off */
    struct hole_shape shape;       /* of what is hidden */
    struct line_order order;       /* along which gaps lie */
    struct choice choice;
    struct holdout held; /* what the choice was made on, where it is judged by too; else empty */
    bool is_search_cut;  /* the time limit ended the choosing */
    struct final_fit fit;
    struct judgement judgement; /* borrows the fit's model */
    struct determined determined;
    double wall, cpu; /* clocks when it began */
    struct run run;   /* the view that writers get */
    char *text;       /* the summary */
};

/* What the option asks for, once the time axis is known. FESCUE_USAGE with one line. */
fescue_status season_plan_make(fescue_fill *fill, const char *text);
/* Makes the choice with the season taken off, and keeps it in place of the plain one where it was asked for or has less
   error on the hidden cells. `plain` is what the choice was made by. */
fescue_status season_choose(fescue_fill *fill, const struct holdout *holdout, const struct choose_request *plain);
/* After everything was fitted and judged: the model has the season, if any, and the bounds. */
void season_restore(fescue_fill *fill);

/* Reads what --near-columns names (NULL: nothing) and asks for it. FESCUE_USAGE, FESCUE_NO_INPUT, FESCUE_BAD_DATA with
   one line. */
fescue_status near_take(fescue_fill *fill, const char *path, struct choose_request *request);
bool near_is_felt(const struct near_part *part);            /* whether near columns bear on estimates */
void near_line(const fescue_fill *fill, struct text *text); /* of the summary */

/* The summary, new and owned by the caller; with the lines on files when they are being written. */
fescue_status fill_summarise(const fescue_fill *fill, bool is_written, char **text);

#endif
