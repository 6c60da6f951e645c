/* SPDX-License-Identifier: MIT
 *
 * A projected objective with its trust region, opened at a point and closed again: what the starting strategies walk
 * with. Weights per component (ridges that differ) count in the frame where W'W is diagonal, which descent_turn finds.
 */
#include "solve/recover_internal.h"

#include <math.h>

fescue_status descent_open(struct problem *problem, const struct low_rank *point, struct descent *descent)
{
    fescue_status status;
    *descent = (struct descent){.field.problem = problem};
    TRY(sweep_create(problem->context, &problem->target, point->rank, &descent->field.sweep));
    projection_reserve(&descent->arena, &descent->field, point->rank);
    trust_reserve(&descent->arena, &descent->field, point->rank);
    TRY(arena_open(problem->context, &descent->arena));
    projection_carve(&descent->arena, &descent->field, point, &descent->projection);
    trust_carve(&descent->arena, &descent->projection, &descent->trust);
    trust_start(&descent->trust);
done:
    if (status != FESCUE_OK)
        descent_close(descent);
    return status;
}

void descent_close(struct descent *descent)
{
    arena_close(descent->field.problem->context, &descent->arena);
    sweep_destroy(&descent->field.sweep);
}

/* W = Q S Z': U Z is the frame. */
fescue_status descent_turn(struct descent *descent)
{
    struct projection *p = &descent->projection;
    tall_copy(p->field->problem->context, p->weights, NULL, p->spare);
    fescue_status status = dense_svd(descent->field.problem->context, p->spare, p->spectrum, p->core, p->dense);
    if (status != FESCUE_OK)
        return status;
    tall_copy(p->field->problem->context, p->basis, NULL, descent->trust.basis);
    tall_multiply(p->field->problem->context, 1, descent->trust.basis, p->core, 0, p->basis);
    return FESCUE_OK;
}

bool descent_is_near(const struct descent *descent, double share)
{
    const struct projection *p = &descent->projection;
    const struct cells *target = &descent->field.problem->target;
    double density = (double)target->count / ((double)target->rows * (double)target->columns);
    /* |R| is what of the error is seen, on a share `density` of the cells. */
    return sqrt(p->square) <= share * sqrt(density) * p->spectrum[p->rank - 1];
}
