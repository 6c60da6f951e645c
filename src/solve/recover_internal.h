/* SPDX-License-Identifier: MIT
 *
 * Between the portfolio (recover.c) and its starting strategies.
 */
#ifndef FESCUE_SOLVE_RECOVER_INTERNAL_H
#define FESCUE_SOLVE_RECOVER_INTERNAL_H

#include "solve/solve_internal.h"

/* A projected objective and the trust region that goes down it, for one rank. */
struct descent {
    struct field field;
    struct arena arena;
    struct projection projection;
    struct trust trust;
};
/* Evaluated at the point (rank >= 1); the ridge is the problem's until the caller changes it. Not to be moved: its
   parts point at each other. */
fescue_status descent_open(struct problem *problem, const struct low_rank *point, struct descent *descent);
void descent_close(struct descent *descent);
/* Turns the frame so that W'W = diag(s^2), s descending, in projection.spectrum. The projection is to be evaluated
   again. */
fescue_status descent_turn(struct descent *descent);
/* After a turn: whether the residual is at most this share of the smallest component, so that Newton's steps can
   finish. */
bool descent_is_near(const struct descent *descent, double share);

/* A strategy makes a new point of the given rank, near a minimum if all goes well, for Newton's steps to finish. At
   the deadline it hurries, and the point has its rank all the same. On failure *out may hold memory; the caller frees
   it. */
struct recover_request {
    struct problem *problem;
    size_t rank;
    uint64_t seed;
    double deadline; /* clock_wall() second, or 0 */
    double weight;   /* what the strategy says */
    int steps;       /* at each rank, or on each rung */
};
typedef fescue_status recover_start(const struct recover_request *request, struct low_rank *out);
recover_start recover_growth, recover_weighted, recover_ladder;

/* FESCUE_STOPPED when asked to stop; *late: the deadline has passed. */
fescue_status recover_pause(const struct recover_request *request, bool *late);

#endif
