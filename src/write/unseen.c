/* SPDX-License-Identifier: MIT
 *
 * What is said of one unseen cell (i, j), and how many there are of each kind.
 *
 * The basis is the most of the model that the data determine there:
 *     low-rank   the model has a rank above 0, and the pattern determines the cell at it (determined.c)
 *     offsets    else, where the row or the column has an effect of its own, estimated from cells it was seen in
 *     mean       else
 * With --strict a cell is left blank when it is not determined in full: its basis is not low-rank or, in a model of
 * rank 0, one of the effects it takes has no observation behind it.
 *
 * Counting: the cells of the whole table whose basis is low-rank are known (determined), and
 *     mean       R' C', less those if no line has an effect       R', C': lines without an effect of their own
 *     offsets    rows * columns less these two
 * and one pass over the observed cells takes those off. So a table with billions of empty cells costs no more than what
 * was read.
 */
#include "write/write.h"

#include <math.h>
#include <stdatomic.h>

const char *const run_caution =
    "Estimates are not measurements. Do not use them for safety, medical, billing or compliance decisions without the "
    "review that local rules and licensed practice require.";

/* ---- one cell -----------------------------------------------------------------------------------------------------
 */

static bool has_row_effects(const struct run *run)
{
    enum fescue_offsets kind = run->model->offsets.kind;
    return kind == FESCUE_OFFSETS_BOTH || kind == FESCUE_OFFSETS_ROWS;
}

static bool has_column_effects(const struct run *run)
{
    enum fescue_offsets kind = run->model->offsets.kind;
    return kind == FESCUE_OFFSETS_BOTH || kind == FESCUE_OFFSETS_COLUMNS;
}

static bool has_low_rank(const struct run *run)
{
    return run->model->low_rank.rank > 0;
}

static bool is_determined(const struct run *run, uint32_t row, uint32_t column, enum basis basis)
{
    if (has_low_rank(run))
        return basis == BASIS_LOW_RANK;
    return (!has_row_effects(run) || run->determined->row_support[row] > 0) &&
           (!has_column_effects(run) || run->determined->column_support[column] > 0);
}

/* Whether something holds the low-rank part of every cell in place: a ridge, or the ridges that were learnt. */
static bool is_shrunk(const struct run *run)
{
    return run->choice->is_learnt || run->choice->ridge > 0;
}

static double estimate_at(const struct run *run, uint32_t row, uint32_t column, enum basis basis)
{
    const struct model *model = run->model;
    if (basis == BASIS_LOW_RANK || !has_low_rank(run) || is_shrunk(run))
        return model_estimate(model, row, column);
    double estimate = offsets_at(&model->offsets, row, column) + season_at(&model->season, row, column);
    return fmin(fmax(estimate, model->bounds.low), model->bounds.high);
}

double run_estimate(const struct run *run, uint32_t row, uint32_t column)
{
    return estimate_at(run, row, column, determined_basis(run->determined, row, column));
}

struct unseen run_unseen(const struct run *run, uint32_t row, uint32_t column)
{
    const struct fescue_range *bounds = &run->model->bounds;
    enum basis basis = determined_basis(run->determined, row, column);
    struct unseen unseen = {estimate_at(run, row, column, basis), NAN, NAN, basis, false};
    unseen.is_blank = run->options->strict && !is_determined(run, row, column, basis);
    double halfwidth = judgement_halfwidth(run->judgement, row, column);
    if (isfinite(halfwidth)) {
        unseen.lower = fmax(unseen.estimate - halfwidth, bounds->low);
        unseen.upper = fmin(unseen.estimate + halfwidth, bounds->high);
    }
    return unseen;
}

/* ---- counting -----------------------------------------------------------------------------------------------------
 */

static uint64_t lines_without(const uint32_t *support, uint32_t lines)
{
    uint64_t without = 0;
    for (uint32_t i = 0; i < lines; i++)
        without += support[i] == 0;
    return without;
}

/* Where columns go with near ones: smooth and mean again. Low-rank cells lie in rows and columns with cells. */
static void near_count(struct run *run)
{
    const struct determined *d = run->determined;
    bool has_steps = d->smooth == TIME_ROWS, has_effects = has_row_effects(run) || has_column_effects(run);
    uint64_t empty_rows = lines_without(d->row_support, d->rows), smooth = 0, mean = 0, low_rank = 0;
    for (uint32_t j = 0; j < d->columns; j++) {
        bool has_cells = d->column_support[j] > 0, has_effect = has_column_effects(run) && has_cells;
        if ((has_steps && has_cells) || d->near[j]) {
            smooth += has_steps ? d->rows : d->rows - empty_rows;
            mean += has_steps || has_effect ? 0 : empty_rows;
            continue;
        }
        for (uint32_t i = 0; i < d->rows && has_cells; i++)
            low_rank += determined_basis(d, i, j) == BASIS_LOW_RANK;
        mean += has_effect ? 0 : has_row_effects(run) ? empty_rows : d->rows;
    }
    run->filled[BASIS_SMOOTH] = smooth - (d->low_rank - low_rank);
    run->filled[BASIS_MEAN] = mean - (has_effects ? 0 : low_rank);
}

/* Cells of the whole table by basis. */
static void table_count(struct run *run)
{
    const struct determined *d = run->determined;
    uint64_t all = (uint64_t)d->rows * d->columns, low_rank = d->low_rank;
    uint64_t empty_rows = lines_without(d->row_support, d->rows);
    uint64_t empty_columns = lines_without(d->column_support, d->columns);
    bool has_effects = has_row_effects(run) || has_column_effects(run);
    uint64_t plain_rows = has_row_effects(run) ? empty_rows : d->rows;
    uint64_t plain_columns = has_column_effects(run) ? empty_columns : d->columns;
    run->filled[BASIS_LOW_RANK] = low_rank;
    run->filled[BASIS_MEAN] = plain_rows * plain_columns - (has_effects ? 0 : low_rank);
    run->filled[BASIS_SMOOTH] = 0;
    if (d->smooth != TIME_NONE) {
        bool by_rows = d->smooth == TIME_ROWS;
        uint64_t steps = by_rows ? d->rows : d->columns, empty_series = by_rows ? empty_columns : empty_rows;
        bool has_steps_effects = by_rows ? has_row_effects(run) : has_column_effects(run);
        uint64_t plain_steps = has_steps_effects ? (by_rows ? empty_rows : empty_columns) : steps;
        run->filled[BASIS_SMOOTH] = all - empty_series * steps - low_rank;
        run->filled[BASIS_MEAN] = empty_series * plain_steps;
    }
    if (d->near != NULL)
        near_count(run);
    run->filled[BASIS_OFFSETS] = all - low_rank - run->filled[BASIS_SMOOTH] - run->filled[BASIS_MEAN];
    run->blank = all - low_rank;
    if (!has_low_rank(run)) {
        uint64_t full_rows = has_row_effects(run) ? d->rows - empty_rows : d->rows;
        uint64_t full_columns = has_column_effects(run) ? d->columns - empty_columns : d->columns;
        run->blank -= full_rows * full_columns;
    }
}

/* Of the seen cells: how many of each basis, and how many that are not determined. */
struct seen_count {
    const struct run *run;
    _Atomic uint64_t basis[BASIS_COUNT], loose;
};

static void block_count(void *job, size_t block, size_t worker)
{
    struct seen_count *count = job;
    const struct half *half = &count->run->table->cells.by_row;
    uint64_t of[BASIS_COUNT] = {0}, loose = 0;
    (void)worker;
    for (uint32_t row = half->block[block]; row < half->block[block + 1]; row++)
        for (uint64_t k = half->start[row]; k < half->start[row + 1]; k++) {
            enum basis basis = determined_basis(count->run->determined, row, half->across[k]);
            of[basis]++;
            loose += !is_determined(count->run, row, half->across[k], basis);
        }
    for (int basis = 0; basis < BASIS_COUNT; basis++)
        atomic_fetch_add(&count->basis[basis], of[basis]);
    atomic_fetch_add(&count->loose, loose);
}

void run_count(struct run *run)
{
    struct seen_count count = {.run = run};
    table_count(run);
    team_run(run->context, run->table->cells.by_row.blocks, block_count, &count);
    for (int basis = 0; basis < BASIS_COUNT; basis++)
        run->filled[basis] -= atomic_load(&count.basis[basis]);
    run->blank -= atomic_load(&count.loose);
    if (!run->options->strict)
        run->blank = 0;
}

const char *run_why_left_out(const struct run *run, bool is_written)
{
    if (is_written)
        return NULL;
    if (run->options->write != (unsigned)FESCUE_AUTO)
        return "not asked for by --write";
    return "the table has more than " BASE_TEXT(FESCUE_DENSE_MOST) " cells; --write asks for it all the same";
}
