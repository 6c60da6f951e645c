/* SPDX-License-Identifier: MIT
 *
 * A trust region over the subspace of the shorter side, the longer side in closed form: trust.c, step by step, with the
 * exact Hessian near the minimum of a noisy table. Converges superlinearly, where conjugate gradients take a number of
 * iterations that grows with the root of the condition.
 *
 * Cost an iteration: two passes for the evaluation and five to seven for each product with the Hessian.
 */
#include "solve/solve_internal.h"

/* Loose at first: while the step is cut by the region or the model is rough, accuracy is lost on it. */
static const struct trust_rules rules = {.accuracy = 0.1, .inner_most = 200, .exact = true};

struct trust_region {
    struct projection projection;
    struct trust trust;
    struct arena arena;
};

static void region_destroy(fescue_context *context, void **state)
{
    struct trust_region *region = *state;
    arena_close(context, &region->arena);
    memory_give(context, state);
}

static fescue_status region_create(struct field *field, const struct low_rank *point, void **state)
{
    fescue_context *context = field->problem->context;
    struct trust_region *region;
    fescue_status status = TAKE(context, 1, &region);
    if (status != FESCUE_OK)
        return status;
    *state = region;
    projection_reserve(&region->arena, field, point->rank);
    trust_reserve(&region->arena, field, point->rank);
    TRY(arena_open(context, &region->arena));
    projection_carve(&region->arena, field, point, &region->projection);
    trust_carve(&region->arena, &region->projection, &region->trust);
    trust_start(&region->trust);
done:
    if (status != FESCUE_OK)
        region_destroy(context, state);
    return status;
}

static void region_measure(const void *state, struct solve_measure *measure)
{
    *measure = ((const struct trust_region *)state)->trust.measure;
}

static fescue_status region_step(void *state, bool *moved)
{
    return trust_step(&((struct trust_region *)state)->trust, &rules, moved);
}

static size_t region_keep(void *state, struct memo_part parts[SOLVER_PARTS])
{
    struct trust_region *region = state;
    parts[0] = matrix_part(region->projection.basis);
    return 1 + trust_keep(&region->trust, parts + 1);
}

static void region_resume(void *state)
{
    trust_resume(&((struct trust_region *)state)->trust);
}

static fescue_status region_point_write(void *state, struct low_rank *point)
{
    return projection_write(&((struct trust_region *)state)->projection, point);
}

const struct solver grassmann_trust_region_solver = {
    .name = "grassmann-trust-region",
    .summary = "Gauss-Newton and Newton steps in a trust region over the subspace of the shorter side",
    .width = 1,
    .create = region_create,
    .measure = region_measure,
    .step = region_step,
    .keep = region_keep,
    .resume = region_resume,
    .point_write = region_point_write,
    .destroy = region_destroy,
};
