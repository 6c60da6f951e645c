/* SPDX-License-Identifier: MIT
 *
 * The offsets of what a low-rank part leaves.
 *
 * Offsets that are fitted first take in a part of the low-rank structure: the mean of the seen cells of a row holds the
 * mean of u_i . v_j over just those columns that were seen, about |u||v|/sqrt(n_i). The low-rank part then has to spend
 * up to two components on undoing that. Fitted again to y = x - U V' the effects are clean, their ridges fall with what
 * is left as noise, and the components are free for what they are for. Fitting one after the other is block descent on
 * the joint least-squares problem; two or three rounds suffice where cells are not very few.
 *
 * Cost: one pass over the cells both ways, O(cells * rank), and one offsets_fit. Workspace: one more set of values.
 */
#include "judge/judge.h"

#include <assert.h>

struct leftover {
    const struct cells *cells;
    const struct half *half;
    const struct low_rank *point;
    void *value; /* y, in the half's order */
    bool by_row;
};

static void block_leave(void *job, size_t block, size_t worker)
{
    const struct leftover *left = job;
    const struct half *half = left->half;
    (void)worker;
    for (uint32_t line = half->block[block]; line < half->block[block + 1]; line++)
        for (uint64_t k = half->start[line]; k < half->start[line + 1]; k++) {
            uint32_t across = half->across[k];
            double low_rank =
                left->by_row ? low_rank_entry(left->point, line, across) : low_rank_entry(left->point, across, line);
            double y = cells_value(left->cells, half, k) - low_rank;
            if (left->cells->precision == FESCUE_SINGLE)
                ((float *)left->value)[k] = (float)y;
            else
                ((double *)left->value)[k] = y;
        }
}

fescue_status refit_offsets(fescue_context *context, const struct cells *cells, enum fescue_offsets kind,
                            const struct low_rank *point, struct offsets *offsets)
{
    fescue_status status = FESCUE_OK;
    struct cells rest = {0};
    assert(point->rank == 0 || (point->rows == cells->rows && point->columns == cells->columns));
    if (point->rank == 0 || kind == FESCUE_OFFSETS_NONE)
        return offsets_fit(context, cells, kind, offsets);
    struct leftover left = {.cells = cells, .half = &cells->by_row, .point = point, .by_row = true};
    TRY(cells_alike(context, cells, &rest));
    left.value = rest.by_row.value;
    team_run(context, left.half->blocks, block_leave, &left);
    left.half = &cells->by_column;
    left.by_row = false;
    left.value = rest.by_column.value;
    team_run(context, left.half->blocks, block_leave, &left);
    TRY(offsets_fit(context, &rest, kind, offsets));
done:
    cells_free(context, &rest);
    return status;
}
