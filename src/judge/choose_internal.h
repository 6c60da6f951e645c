/* SPDX-License-Identifier: MIT
 *
 * The inside of the choice: one fit and what the hidden cells say of it (candidate), the ladder of ridges
 * (choose_ridge), the path over ranks (choose_path), the evidence fit (choose_evidence), and all together (choose).
 */
#ifndef FESCUE_CHOOSE_INTERNAL_H
#define FESCUE_CHOOSE_INTERNAL_H

#include "judge/judge_internal.h"

/* What the whole choice works on. */
struct chooser {
    fescue_context *context;
    const struct fescue_options *options;
    const struct solver *solver;
    const struct time_axis *time; /* NULL: lines have no order */
    const struct nearness *near;  /* NULL: nothing is known of columns being near one another */
    enum choose_way learns;
    double deadline;
    const struct cells *kept, *hidden;

    struct problem problem; /* what the offsets at hand leave of the kept cells */
    uint64_t version;       /* which offsets those are; 0: there is no problem yet */
    double scale;           /* of the problem of these or other offsets, which points are in units of */
    uint64_t scaled;        /* which those are; 0: none yet */
    uint64_t versions;      /* how many there have been */

    double *residuals;          /* one a hidden cell */
    double *spectrum;           /* one a component, in the table's units */
    struct errors plain_errors; /* of the evidence fit with equal noise and without time; count 0: there is none */
    struct errors far_errors;   /* of the evidence fit without near columns; count 0: there is none with them */
    size_t groups;              /* how many groups the hidden cells are judged in */

    struct choose_step *path;
    uint64_t path_count, path_capacity;
};

/* One fit. The ridge is a rung of the ladder, or the user's own. */
struct candidate {
    struct offsets offsets; /* owned */
    uint64_t version;       /* equal for equal offsets */
    size_t rung;
    double ridge;   /* NAN: learnt, a ridge a component */
    bool is_learnt; /* by the evidence fit, with this noise */
    enum evidence_noise noise;
    double variance, spread; /* of that noise: its mean, table units, and by how much lines differ in it if it is equal
                              */
    double effects;          /* of rows or columns that it has not, over what chance would leave of them */
    struct time_part time;   /* owned; table units */
    struct near_part near;
    struct errors errors;  /* on the hidden cells, table units; infinite when the fit blew up */
    double *square;        /* sum of squared errors of each group of hidden cells */
    struct low_rank point; /* in the problem's units */
    bool is_exact;         /* the hidden cells, nearly all, are met to rounding */
};
/* The offsets of the kind alone, fitted and measured. */
fescue_status candidate_create(struct chooser *chooser, enum fescue_offsets kind, struct candidate *candidate);
void candidate_free(struct chooser *chooser, struct candidate *candidate);
/* *to, zero or a candidate, becomes a copy. */
fescue_status candidate_copy(struct chooser *chooser, const struct candidate *from, struct candidate *to);
void candidate_swap(struct candidate *a, struct candidate *b);
/* Lets the solver improve the point under `ridge`, measures it on the hidden cells and notes it in the path. */
fescue_status candidate_fit(struct chooser *chooser, double ridge, const struct solve_limits *limits,
                            struct candidate *candidate);
/* The low-rank part in the table's units; its spectrum is the chooser's. The scale is the candidate's. */
struct low_rank candidate_point(struct chooser *chooser, const struct candidate *candidate);
/* One more step of the path: the candidate as it was measured. */
fescue_status candidate_note(struct chooser *chooser, const struct candidate *candidate);
/* As it is, without a fit. */
fescue_status candidate_measure(struct chooser *chooser, struct candidate *candidate);
/* Fits the offsets again to what the low-rank part leaves (by sweeps, or all at once), then the low-rank part to what
   they leave. */
fescue_status candidate_refit(struct chooser *chooser, const struct solve_limits *limits, bool at_once,
                              struct candidate *candidate);
/* Whether `large` has less error on the hidden cells than `small` by more than `errors` standard errors of the paired
   difference. */
bool candidate_beats(const struct chooser *chooser, const struct candidate *large, const struct candidate *small,
                     double errors);
/* Whether `next`, of another kind of offsets, takes the place of the best so far: the one with more components must
   beat the other by two standard errors; two-way effects count as one component, and win at equal numbers. */
bool candidate_succeeds(const struct chooser *chooser, const struct candidate *next, const struct candidate *best);

/* The ladder, from the strongest ridge down to none. */
size_t ridge_rungs(void);
double ridge_rung(size_t rung);
size_t ridge_first_rung(void); /* where a search without any knowledge begins */
/* The ridge of the candidate's rung, or the user's own. */
double ridge_of(const struct chooser *chooser, const struct candidate *candidate);
/* When the ridge is to be chosen: fits a candidate, fitted under its own rung, under the neighbours as well, as long as
   the hidden cells gain. */
fescue_status ridge_search(struct chooser *chooser, const struct solve_limits *limits, struct candidate *candidate);

/* The same, downwards only. */
fescue_status ridge_lower(struct chooser *chooser, const struct solve_limits *limits, struct candidate *candidate);

/* Takes the rooms of a chooser whose options, cells and context are set; closing frees all but the candidates. */
fescue_status chooser_open(struct chooser *chooser);
void chooser_close(struct chooser *chooser);
bool chooser_is_late(const struct chooser *chooser);
/* Whether fits of this rank take so long that each has to be worth it. */
bool chooser_is_large(const struct chooser *chooser, size_t rank);
/* Takes up the candidate's offsets: the problem is what they leave of the kept cells. */
fescue_status chooser_take_up(struct chooser *chooser, const struct candidate *candidate);
/* Only the scale of that problem. */
void chooser_take_scale(struct chooser *chooser, const struct candidate *candidate);
struct solve_limits chooser_loose_limits(const struct chooser *chooser);
struct solve_limits chooser_fine_limits(const struct chooser *chooser);
size_t chooser_rank_most(const struct chooser *chooser); /* the largest rank that the kept cells allow */

/* The path over ranks 0, 1, 2, ..., from offsets alone; *chosen is the smallest rank that no larger one beats. */
fescue_status path_walk(struct chooser *chooser, const struct candidate *alone, size_t rank_most,
                        struct candidate *chosen);
/* To a given rank, the ridge following on the way. */
fescue_status path_climb(struct chooser *chooser, const struct candidate *alone, size_t rank, struct candidate *chosen);
/* One rank more than the candidate has, under the ridge it has. */
fescue_status path_grow(struct chooser *chooser, const struct solve_limits *limits, struct candidate *candidate);
enum { SETTLE_ROUNDS = 4 }; /* beyond which offsets and low-rank part hardly move any more */
/* Offsets and low-rank part in turns, at most SETTLE_ROUNDS times, while the hidden cells gain. */
fescue_status path_settle(struct chooser *chooser, const struct solve_limits *limits, bool at_once,
                          struct candidate *candidate);
/* A rival from the spectral start at the candidate's rank and ridge; takes its place when it has less error. */
fescue_status path_challenge(struct chooser *chooser, const struct solve_limits *limits, struct candidate *candidate);
/* When the errors are small: whether a tight fit without ridge meets the hidden cells to rounding. */
fescue_status path_try_exact(struct chooser *chooser, struct candidate *candidate);

/* Whether the evidence fit takes the path's place. */
bool evidence_is_meant(const struct chooser *chooser);
/* What the candidate's kind of offsets and noise asks of the evidence fit. */
struct evidence_request evidence_request_of(const struct chooser *chooser, const struct candidate *candidate);
/* The evidence fit with at most so many components, on the kind of offsets that `alone` is. *candidate, zero or a
   candidate, becomes it. */
fescue_status evidence_reach(struct chooser *chooser, const struct candidate *alone, size_t rank,
                             struct candidate *candidate);
/* The evidence fit for each kind of offsets, given as offsets alone; *best is the kind of the winner. */
fescue_status evidence_compete(struct chooser *chooser, const struct candidate *const *alone, size_t count,
                               struct candidate *winner, size_t *best);

#endif
