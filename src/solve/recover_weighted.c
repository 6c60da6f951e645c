/* SPDX-License-Identifier: MIT
 *
 * Starting strategy: growth with a ridge per component that the data set.
 *
 * Were every component's size a variance to be learnt from the data (MacKay 1992; Nakajima, Sugiyama 2011), the
 * evidence would charge (m + n)/2 noise log s_k^2 for it; its tangent from above is a ridge on the component's weights,
 *
 *     ridge_k = phi s2 sqrt(mn) / s_k^2,      s2 = |R|^2 / |seen|,
 *
 * large for components no larger than what the residual could raise by chance, next to nothing for the others: the
 * objective stays bounded where cells are few, without the bias of an even ridge. From rank 0 upwards, `steps` trust
 * region steps a rank, the frame turned and the ridges set anew before each. At the full rank s2 is made to fall by a
 * tenth at each step at least, so that on a table without noise the ridges vanish.
 *
 * phi: recovered of 20 tables of 300 x 300, rank 5, 1.3 times as many cells as unknowns, condition 10, at ten steps a
 * rank: 13 with 0.3, 15 with 1, 17 with 2, 19 with 4, 19 with 8; from 16 on small components are lost for good.
 *
 * Cost a step: the evaluation twice, and what the inner iteration takes (trust.c).
 */
#include "solve/recover_internal.h"

#include <math.h>

static const struct trust_rules rules = {.accuracy = 0.1, .inner_most = 100, .exact = false};
/* At the full rank: steps at most, how s2 falls, and the share of the residual's mean square below which s2 counts as
   having lost touch with it: the residual is noise. */
enum { FULL_STEPS = 60 };
static const double fall = 0.9, lost = 0.05, near = 0.01;

/* Turns the frame and sets the ridges for s2. */
static fescue_status ridges_set(struct descent *descent, double phi, double s2)
{
    struct projection *p = &descent->projection;
    double area = sqrt((double)p->by_short->lines * (double)p->by_long->lines);
    fescue_status status = descent_turn(descent);
    if (status != FESCUE_OK)
        return status;
    for (size_t k = 0; k < p->rank; k++) {
        /* Never so large that the others' precision suffers. */
        double s = fmax(p->spectrum[k], 1e-8 * p->spectrum[0]);
        p->ridge[k] = s > 0 ? phi * s2 * area / (s * s) : 0;
    }
    trust_start(&descent->trust);
    return FESCUE_OK;
}

/* Steps at one rank. */
static fescue_status rank_fit(const struct recover_request *request, bool full, struct low_rank *point)
{
    struct descent descent;
    double count = (double)request->problem->target.count, seen;
    bool moved, late = false;
    fescue_status status = descent_open(request->problem, point, &descent);
    if (status != FESCUE_OK)
        return status;
    double s2 = descent.projection.square / count;
    for (int step = 0; step < (full ? FULL_STEPS : request->steps) && !late; step++) {
        TRY(recover_pause(request, &late));
        TRY(ridges_set(&descent, request->weight, s2));
        TRY(trust_step(&descent.trust, &rules, &moved));
        seen = descent.projection.square / count;
        s2 = full ? fmin(seen, fall * s2) : seen;
        if (full && (descent_is_near(&descent, near) || s2 < lost * seen))
            break;
    }
    status = projection_write(&descent.projection, point);
done:
    descent_close(&descent);
    return status;
}

fescue_status recover_weighted(const struct recover_request *request, struct low_rank *out)
{
    struct problem *problem = request->problem;
    fescue_status status = low_rank_create(problem->context, problem->target.rows, problem->target.columns, 0, out);
    while (status == FESCUE_OK && out->rank < request->rank) {
        TRY(start_grow(problem, request->seed, out));
        TRY(rank_fit(request, out->rank == request->rank, out));
    }
done:
    return status;
}
