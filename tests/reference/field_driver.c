/* SPDX-License-Identifier: MIT
 *
 * Fields over near columns for field.py. Reads numbers of native doubles on standard input: columns, pairs; of every
 * pair low, high and strength, in ascending order of (high, low); then systems until the end: a strength, a diagonal,
 * a right-hand side. Writes for every system the solution, the diagonal of the inverse, and the solution's energy. One
 * analysis, many factors.
 */
#include "numeric/numeric.h"

#include <stdio.h>
#include <stdlib.h>

static double *numbers_take(size_t count)
{
    double *at = calloc(count + 1, sizeof *at);
    if (at == NULL)
        exit(1);
    return at;
}

static double *numbers_read(size_t count, bool may_end)
{
    double *at = numbers_take(count);
    size_t got = fread(at, sizeof *at, count, stdin);
    if (got == 0 && may_end)
        exit(0);
    if (got != count)
        exit(1);
    return at;
}

int main(void)
{
    fescue_context *context;
    struct sparse_field *field;
    double *head = numbers_read(2, false);
    size_t columns = (size_t)head[0], pairs = (size_t)head[1];
    double *pair = numbers_read(3 * pairs, false), *out = numbers_take(2 * columns + 1);
    struct nearness near = {(uint32_t)columns, pairs, calloc(pairs + 1, 4), calloc(pairs + 1, 4), numbers_take(pairs)};
    if (near.high == NULL || near.low == NULL || fescue_context_create(NULL, &context) != FESCUE_OK)
        return 1;
    for (size_t k = 0; k < pairs; k++) {
        near.low[k] = (uint32_t)pair[3 * k];
        near.high[k] = (uint32_t)pair[3 * k + 1];
        near.strength[k] = pair[3 * k + 2];
    }
    if (sparse_field_create(context, &near, &field) != FESCUE_OK)
        return 1;
    for (;;) {
        double *system = numbers_read(2 * columns + 1, true);
        if (sparse_field_factor(field, system + 1, system[0]) != FESCUE_OK ||
            sparse_field_solve(field, system + 1 + columns, out) != FESCUE_OK)
            return 1;
        sparse_field_variances(field, out + columns);
        out[2 * columns] = sparse_field_energy(field, out);
        if (fwrite(out, sizeof *out, 2 * columns + 1, stdout) != 2 * columns + 1 || fflush(stdout) != 0)
            return 1;
        free(system);
    }
}
