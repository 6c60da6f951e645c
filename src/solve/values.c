/* SPDX-License-Identifier: MIT
 *
 * Room for one value a seen cell, in the store's precision: a residual, what a step changes.
 */
#include "solve/solve_internal.h"

static size_t value_size(const struct field *field)
{
    return field->problem->target.precision == FESCUE_SINGLE ? sizeof(float) : sizeof(double);
}

fescue_status values_create(struct field *field, void **values)
{
    return memory_take(field->problem->context, field->problem->target.count, value_size(field), values);
}

void values_reserve(struct arena *arena, const struct field *field)
{
    arena_reserve(arena, field->problem->target.count, value_size(field));
}

void *values_carve(struct arena *arena, const struct field *field)
{
    return arena_carve(arena, field->problem->target.count, value_size(field));
}
