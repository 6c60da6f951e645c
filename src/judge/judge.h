/* SPDX-License-Identifier: MIT
 *
 * Judging: what is there (survey), what is hidden and kept (holdout), which offsets, rank and ridge (choose), how wrong
 * (errors, interval), and which cells the data can say anything about (determined).
 */
#ifndef FESCUE_JUDGE_H
#define FESCUE_JUDGE_H

#include "solve/solve.h"

/* Cells hidden before anything is estimated, and the cells that are kept; no row or column that had cells loses all.
   Which cells are hidden depends on the seed and on their positions only, not on threads or order of the input.
   Where none is, the kept ones are the given store's own, which must outlive this. */
struct holdout {
    struct cells kept, hidden;
};
fescue_status holdout_split(fescue_context *context, const struct cells *cells, double share, uint64_t seed,
                            struct holdout *holdout);
void holdout_free(fescue_context *context, struct holdout *holdout);

/* A side of the table in order, as hold-outs and intervals see it. A view: owns nothing. */
struct line_order {
    bool along_columns;    /* the columns are in order; else the rows */
    const double *at;      /* when each line is, in steps; NULL: 0, 1, 2, ... */
    const uint32_t *order; /* order[k] is the k-th line; NULL: as they come */
};

/* What is to be hidden. */
struct holdout_request {
    enum fescue_holdout_shape shape; /* never AUTO */
    double share;
    uint64_t seed;
    uint32_t fold;                  /* 0: what choosing hides; 1, 2, ...: further ones, scattered ones apart as long as
                                       fold * share is at most 1 */
    bool is_pooled;                 /* gaps: half of the share is scattered */
    const struct line_order *order; /* gaps: along which they lie; NULL: the rows as they come */
};
/* cells: scattered. gaps: stretches of lines, as the holes of other lines are, at the same places and at others, and
   whole places where the table has places without any cell; when there are no holes, scattered. rows, columns: all but
   a few cells of some lines. No line loses all its cells, but for such places. */
fescue_status holdout_cut(fescue_context *context, const struct cells *cells, const struct holdout_request *request,
                          struct holdout *holdout);

/* Which shape the holes have. order NULL: no side is known to be in order, and a side whose holes come in runs is taken
   to be in the order it came in. */
struct hole_shape {
    enum fescue_holdout_shape shape; /* never AUTO */
    bool along_columns;              /* gaps: the side that is in order */
    char why[160];                   /* one clause */
};
fescue_status hole_shape_find(fescue_context *context, const struct cells *cells, const struct line_order *order,
                              struct hole_shape *found);

struct errors {
    uint64_t count;
    double rmse, mae; /* table units; 0 when count is 0 */
};
/* Errors of the model's estimates (bounds applied) on hidden cells, means weighted as the cells are. residuals (count
   doubles, row order, estimate minus observed) may be NULL. */
fescue_status errors_measure(fescue_context *context, const struct cells *hidden, const struct model *model,
                             double *residuals, struct errors *errors);

/* Half-width h so that a share of at least `level` of |residuals| is within it: the ceil((n+1) level)-th smallest, the
   split-conformal quantile (Vovk, Gammerman, Shafer 2005); infinite when n is too small. Leaves the sizes in
   residuals. */
double interval_halfwidth(double *residuals, uint64_t count, double level);

/* Errors on hidden cells of interpolation in time, linear between the nearest kept cells of the series. */
fescue_status interpolation_measure(fescue_context *context, const struct cells *kept, const struct cells *hidden,
                                    const struct time_axis *time, struct errors *errors);

/* The offsets of what a low-rank part (in the table's units) leaves of the cells: offsets_fit on x - point. With a
   point of rank 0, or the kind none, offsets_fit itself. New, owned by the caller. */
fescue_status refit_offsets(fescue_context *context, const struct cells *cells, enum fescue_offsets kind,
                            const struct low_rank *point, struct offsets *offsets);

/* A time part for a model that was fitted without one: the kriging of its leave-one-out residuals (krige.c). New, owned
   by the caller. */
struct krige_request {
    const struct time_axis *time; /* borrowed; NULL: no kriging */
    double ridge;                 /* that the model was fitted with */
};
fescue_status krige_run(fescue_context *context, const struct cells *cells, const struct model *model,
                        const struct krige_request *request, struct time_part *part);

/* One point of the path that was tried. */
struct choose_step {
    enum fescue_offsets offsets;
    uint32_t rank;
    double ridge; /* NAN: learnt, a ridge a component */
    struct errors errors;
};
/* What the hold-out decided. */
struct choice {
    enum fescue_offsets offsets;
    uint32_t rank;
    double ridge;   /* NAN: learnt, a ridge a component */
    bool is_learnt; /* by the evidence fit, on this request */
    struct evidence_request learnt;
    struct krige_request kriged;          /* where the path's model has time added; else its time is NULL */
    struct errors errors, offsets_errors; /* on the hidden cells: of the choice, and of its offsets alone */
    double offsets_only_rank0_rmse;       /* of the best offsets alone */
    double halfwidth;                     /* of the interval at the asked level; NAN when nothing was hidden */
    struct errors plain_errors;           /* of the same components, with equal noise and without time */
    struct errors interpolation_errors;   /* of interpolation in time; count 0: there is no time axis */
    struct errors far_errors;             /* without near columns; count 0: they were not tried */
    bool noiseless;                       /* the hidden cells, nearly all, are met to rounding */
    bool own_holdout;                     /* nothing was hidden by the caller, so a tenth was, for the choice alone */
    struct low_rank start;                /* owned; the chosen low-rank part in the table's units. The fit on all cells
                                             takes its offsets by refit_offsets with it, as the choice did, and starts
                                             from it, the spectrum divided by the new problem's scale */
    struct offsets beside;                /* owned; what stands beside it in the fit of the kept cells that learnt it */
    double noise;                         /* of that fit, a variance in the table's units; 0: nothing was learnt */
    struct choose_step *path;             /* owned; everything that was tried, in order */
    uint64_t path_count;
};
/* Who learns rank and ridge: the path judged by hidden cells, the evidence fit, or whichever suits. */
enum choose_way { CHOOSE_AUTO, CHOOSE_PATH, CHOOSE_LEARN };
struct choose_request {
    enum choose_way way;
    const struct fescue_options *options;
    const struct solver *solver;
    const struct time_axis *time; /* borrowed, and by choice.learnt too; NULL or along none: lines have no order */
    const struct nearness *near;  /* borrowed, and by choice.learnt too; NULL: columns are not near one another */
    double deadline;              /* clock_wall() second, or 0 */
};
/* Fits on holdout->kept and judges on holdout->hidden: offsets (where auto) x a warm-started path over ranks (where
   auto) x a ladder of ridges (where auto). Without hidden cells (--holdout 0) an auto rank and ridge are judged on a
   hold-out of a tenth all the same, announced as such (own_holdout; the errors and halfwidth are then those of that
   hold-out). When nothing is auto and nothing hidden, `start` alone is made and the errors have count 0. A rank that
   the table is too small for is lowered. */
fescue_status choose_run(fescue_context *context, const struct holdout *holdout, const struct choose_request *request,
                         struct choice *choice);
/* Whether it is a learnt fit of a large table that follows neither time nor near columns: what it holds is then used
   and gone on from, where otherwise all is learnt again. */
bool choice_serves(const struct choice *choice, const struct cells *cells);
void choice_free(fescue_context *context, struct choice *choice);

/* ---- rank and ridge by cross-validation ----------------------------------------------------------------------------
 */

struct ranking_point {
    enum fescue_offsets offsets;
    uint32_t rank;
    double ridge;                       /* NAN: learnt */
    double rmse;                        /* over all folds' hidden cells */
    double worse, worse_error;          /* mean squared error over that of the best point, and its standard error */
    double *fold;                       /* owned; mean squared error of each fold */
    uint32_t rank_least, rank_greatest; /* over the folds, where each has its own; else the rank */
    bool is_exact;                      /* hidden cells are met to rounding, in every fold */
};
struct ranking {
    struct ranking_point *point; /* owned; ranks 0, 1, 2, ... of the kind of offsets that was chosen */
    uint64_t count, best, chosen;
    struct ranking_point learnt;        /* by the evidence fit; fold NULL: there is none */
    struct ranking_point interpolation; /* in time, of rank 0; fold NULL: there is no time axis */
    struct ranking_point rival;         /* what the other kind of offsets comes to; fold NULL: there was none */
    uint32_t folds;
    uint64_t hidden; /* cells, over all folds */
    struct hole_shape shape;
    bool has_structure; /* something beats rank 0 */
    bool is_weighted;   /* each rank is the evidence fit with so many components at most, which alone takes weights */
    bool is_learnt_better; /* the evidence fit beats what was chosen, by two standard errors */
    bool is_cut;           /* a time limit ended the path */
    bool is_ended;         /* the path ended because no rank gained any more; else at the largest */
};
struct ranking_request {
    const struct fescue_options *options;
    const struct time_axis *time; /* NULL or along none: no clock */
    double deadline;
};
fescue_status ranking_run(fescue_context *context, const struct cells *cells, const struct ranking_request *request,
                          struct ranking *ranking);
void ranking_free(fescue_context *context, struct ranking *ranking);

/* ---- how wrong: intervals and the announced error -----------------------------------------------------------------
 */

/* How far an estimate leans on few cells: lev_ij, the variance of the estimate of cell (i, j) over that of the noise,
   from the system that row i solves and the one that column j does (leverage.c). */
struct tracks;
struct leverage {
    size_t size; /* of a system: rank + 1 */
    bool has_rows, has_columns;
    const struct model *model;
    uint32_t rows, columns;
    double *row_inverse, *column_inverse; /* packed, one a line; NULL where there are too many: counts stand in */
    uint32_t *row_count, *column_count;   /* seen cells of each line */
};
/* noise: a variance in the table's units. lambda: the ridge on the components in cells, or NAN where each is shrunk by
   its own size. Borrows the model. */
fescue_status leverage_create(fescue_context *context, const struct cells *cells, const struct model *model,
                              double noise, double lambda, struct leverage *leverage);
double leverage_at(const struct leverage *leverage, uint32_t row, uint32_t column);
/* Its two parts: of the row's coefficients, and of the column's. */
struct leverage_parts {
    double row, column;
};
struct leverage_parts leverage_parts_at(const struct leverage *leverage, uint32_t row, uint32_t column);
/* What the leverage of a cell needs will be asked for soon. */
void leverage_prefetch(const struct leverage *leverage, uint32_t row, uint32_t column);
void leverage_free(fescue_context *context, struct leverage *leverage);

/* The expected squared error: a sum of terms with weights that are not negative (variance.c). */
enum { VARIANCE_TERMS = 10, JUDGE_LEVELS = 4, JUDGE_BINS = 7 };
struct variance {
    double weight[VARIANCE_TERMS];
    double least; /* never below */
    bool has_distance;
    bool is_of_gaps; /* fitted to cells hidden in gaps alone */
};

/* How precise readings of rows and columns are, as the weights of seen cells have it (line_weights.c). */
struct line_weights {
    double *row, *column; /* owned, logarithms; NULL: all are alike, of weight one */
};

/* What is said of the errors of a fill. */
struct judgement {
    bool is_judged; /* folds were judged; else, when something was hidden, all rests on choosing's own hidden cells */
    bool is_cut;    /* a time limit left folds out */
    bool is_warm;   /* the folds began from the fit on all cells */
    uint32_t scattered_folds, shaped_folds;
    uint64_t judged, missing;                     /* errors collected; unseen cells that the announced error is over */
    double rmse, mae;                             /* announced, over the unseen cells; NAN when nothing is known */
    double rmse_low, rmse_high;                   /* its band of nine tenths, by resampling sensors; NAN: none */
    double scattered_rmse;                        /* what scattered cells alone say */
    double shaped_rmse;                           /* cells hidden in the shape of the holes; NAN when there are none */
    double by_leverage, by_distance, by_variance; /* the estimates that rmse is made of, each an RMSE */
    double level, quantile;                       /* of the scores |error| / sqrt(variance); infinite: too few */
    double level_quantiles[JUDGE_LEVELS];         /* at judge_levels */
    double halfwidth;                             /* where folds were not judged: of every cell, or NAN */
    double halfwidth_low, halfwidth_median, halfwidth_high; /* over unseen cells: a tenth is below, half, nine tenths */
    double tilt, tilt_centre; /* the quantile's change with 1 / (1 + leverage), as a share, and where there is none */
    struct variance variance;
    struct leverage leverage; /* of the fit on all cells */
    struct tracks *tracks;    /* owned; NULL: nothing is known of distances */
    double *scale;            /* owned; of each sensor, in standard deviations */
    struct line_weights weights;
    bool sensors_are_rows;
};
extern const double judge_levels[JUDGE_LEVELS]; /* 0.5, 0.8, 0.9, 0.95 */

struct judge_request {
    const struct cells *cells; /* what was fitted */
    const struct fescue_options *options;
    const struct choice *choice;
    const struct solver *solver;
    const struct model *model; /* the fit on all cells; must outlive the judgement */
    const struct hole_shape *shape;
    const struct line_order *order; /* NULL: nothing is known of any order */
    double noise;                   /* learnt by that fit, a variance in the table's units */
    bool is_exact;                  /* the fit on all cells meets them to rounding */
    double deadline;                /* clock_wall() second, or 0 */
    /* A season that was taken off `whole` to get to cells; NULL: none was. Folds learn it again. */
    const struct season *season;
    const struct cells *whole;
    /* What the choice was learnt from and judged on, which may then stand for a single fold of scattered cells; or
       NULL. */
    const struct holdout *held;
};
/* Hides cells in folds, learns the choice again without them, and says how wrong the unseen cells are. Asked to stop,
   it ends with what it has. */
fescue_status judge_run(fescue_context *context, const struct judge_request *request, struct judgement *judgement);
void judgement_free(fescue_context *context, struct judgement *judgement);
/* Half-width of the interval of an unseen cell at the level asked for; NAN or infinite where there is none. */
double judgement_halfwidth(const struct judgement *judgement, uint32_t row, uint32_t column);

/* Whether the pattern of observed cells determines the low-rank part of an unseen cell at this rank (determined.c). One
   that it does not rests on its neighbours in time when the model follows its steps from one to the next and its series
   has cells, or on near columns; else on the offsets when their kind has an effect for its row or column and that line
   has cells; else on the mean. */
enum basis { BASIS_LOW_RANK, BASIS_SMOOTH, BASIS_OFFSETS, BASIS_MEAN };
enum { BASIS_COUNT = BASIS_MEAN + 1 };
const char *basis_word(enum basis basis); /* "low-rank", "smooth", "offsets", "mean" */
struct determined {
    uint32_t rows, columns;
    size_t rank;
    enum fescue_offsets offsets;            /* the kind the model was fitted with */
    enum time_along smooth;                 /* which lines the model follows in time; none after determined_create */
    uint32_t *row_block, *column_block;     /* core block of each line, from 1; 0: not in the core */
    uint32_t *row_support, *column_support; /* observed cells of each line */
    uint8_t *near;                          /* owned; of each column, whether it goes with near ones; NULL: none does */
    struct loose *loose;                    /* lines that can move while no seen cell does; NULL: none */
    uint64_t low_rank;                      /* cells, seen or not, whose basis is low-rank */
    uint64_t unchecked;                     /* lines of which only the necessary conditions are known: too large */
};
fescue_status determined_create(fescue_context *context, const struct cells *cells, size_t rank,
                                enum fescue_offsets offsets, struct determined *determined);
enum basis determined_basis(const struct determined *determined, uint32_t row, uint32_t column);
/* From now on columns that are near others, by whatever way near one with cells, rest on them. */
fescue_status determined_take_near(fescue_context *context, const struct nearness *near, struct determined *determined);
void determined_free(fescue_context *context, struct determined *determined);

/* What is there before any fit, and as text (new, owned by the caller). `time` may be NULL: nothing is said of it. */
fescue_status survey_text(const fescue_table *table, const struct time_axis *time, char **text);

#endif
