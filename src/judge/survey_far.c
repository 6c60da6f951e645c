/* SPDX-License-Identifier: MIT
 *
 * Cells wildly far from what their row and column would have.
 *
 * Row and column effects by medians (median polish; Tukey 1977, "Exploratory data analysis", chapter 11): two rounds of
 *
 *     a_i = median over the row of x_ij - b_j,      b_j = median over the column of x_ij - a_i,
 *
 * which a few far cells do not move. e_ij = x_ij - a_i - b_j. The spread of a line is 1.4826 times the median of |e|
 * (that of a normal is then its standard deviation), drawn towards that of the whole table as if by SHRINK further
 * cells, since few cells tell little of a spread:
 *
 *     s_i^2 = (n_i m_i^2 + SHRINK m^2) / (n_i + SHRINK).
 *
 * A cell is far when |e_ij| exceeds `far` times the spread of its row and that of its column: a table of low rank has
 * lines of large spread, and all their cells would be far from effects alone. Along a clock a cell whose neighbours in
 * time stand out as well, on the same side by half as much or more, is a peak and not a spike.
 *
 * O(cells) with some seventy passes: medians are picked where the numbers lie (order). The team takes blocks of lines,
 * each of which writes its own.
 */
#include "judge/survey_internal.h"

#include <math.h>

enum { ROUNDS = 2, SHRINK = 10 };
static const double far = 12, normal = 1.4826;

struct polish {
    const struct survey *survey;
    double *row, *column;               /* effects */
    double *row_spread, *column_spread; /* squares */
    double spread;                      /* of the whole table */
};

/* One line, for picking medians: cells of `half` from `from` on. */
struct line_view {
    const struct polish *polish;
    const struct half *half;
    const double *other; /* effects of the other side */
    double own;
    uint64_t from;
    bool is_size; /* |e| */
};

static double view_at(const void *data, uint64_t k)
{
    const struct line_view *view = data;
    uint64_t cell = view->from + k;
    double left =
        cells_value(view->polish->survey->cells, view->half, cell) - view->own - view->other[view->half->across[cell]];
    return view->is_size ? fabs(left) : left;
}

static double view_median(struct line_view *view, uint32_t line)
{
    uint64_t count = view->half->start[line + 1] - view->half->start[line];
    view->from = view->half->start[line];
    if (count == 0)
        return 0;
    double upper = order_pick(view_at, view, count, count / 2);
    return count % 2 == 1 ? upper : (upper + order_pick(view_at, view, count, count / 2 - 1)) / 2;
}

/* A side at work: its effects, or the squares of its spreads. */
struct sweep_job {
    const struct polish *polish;
    const struct half *half;
    const double *own, *other;
    double *out;
    bool is_spread;
};

static void lines_sweep(void *data, size_t block, size_t worker)
{
    const struct sweep_job *job = data;
    const struct half *half = job->half;
    struct line_view view = {.polish = job->polish, .half = half, .other = job->other, .is_size = job->is_spread};
    double whole = job->polish->spread;
    (void)worker;
    for (uint32_t line = half->block[block]; line < half->block[block + 1]; line++) {
        double count = (double)(half->start[line + 1] - half->start[line]);
        view.own = job->is_spread ? job->own[line] : 0;
        double median = view_median(&view, line);
        job->out[line] = median;
        if (job->is_spread)
            job->out[line] = (count * normal * normal * median * median + SHRINK * whole * whole) / (count + SHRINK);
    }
}

static void effects_find(const struct polish *polish, const struct half *half, double *own, const double *other)
{
    struct sweep_job job = {polish, half, own, other, own, false};
    team_run(polish->survey->table->context, half->blocks, lines_sweep, &job);
}

static void spreads_find(const struct polish *polish, const struct half *half, const double *own, const double *other,
                         double *spread)
{
    struct sweep_job job = {polish, half, own, other, spread, true};
    team_run(polish->survey->table->context, half->blocks, lines_sweep, &job);
}

struct whole {
    const struct polish *polish;
    const uint32_t *row_of; /* of the cell, in row order */
};

static double left_at(const struct polish *polish, uint32_t row, uint64_t k)
{
    const struct half *half = &polish->survey->cells->by_row;
    return cells_value(polish->survey->cells, half, k) - polish->row[row] - polish->column[half->across[k]];
}

static double whole_at(const void *data, uint64_t k)
{
    const struct whole *whole = data;
    return fabs(left_at(whole->polish, whole->row_of[k], k));
}

static fescue_status polish_make(struct polish *polish, uint32_t **row_of)
{
    fescue_status status;
    const struct cells *cells = polish->survey->cells;
    fescue_context *context = polish->survey->table->context;
    TRY(TAKE(context, cells->rows, &polish->row));
    TRY(TAKE(context, cells->columns, &polish->column));
    TRY(TAKE(context, cells->rows, &polish->row_spread));
    TRY(TAKE(context, cells->columns, &polish->column_spread));
    TRY(TAKE(context, cells->count, row_of));
    for (uint32_t i = 0; i < cells->rows; i++)
        for (uint64_t k = cells->by_row.start[i]; k < cells->by_row.start[i + 1]; k++)
            (*row_of)[k] = i;
    for (size_t round = 0; round < ROUNDS; round++) {
        effects_find(polish, &cells->by_column, polish->column, polish->row);
        effects_find(polish, &cells->by_row, polish->row, polish->column);
    }
    struct whole whole = {polish, *row_of};
    polish->spread = normal * order_pick(whole_at, &whole, cells->count, cells->count / 2);
    spreads_find(polish, &cells->by_row, polish->row, polish->column, polish->row_spread);
    spreads_find(polish, &cells->by_column, polish->column, polish->row, polish->column_spread);
done:
    return status;
}

/* ---- far cells ----------------------------------------------------------------------------------------------------
 */

/* How many spreads a cell is off; 0 where there is no spread to speak of. */
static double cell_off(const struct polish *polish, uint32_t row, uint64_t k)
{
    double spread = fmax(polish->row_spread[row], polish->column_spread[polish->survey->cells->by_row.across[k]]);
    return spread > 0 ? fabs(left_at(polish, row, k)) / sqrt(spread) : 0;
}

/* Whether a neighbour on the track, by at most NEAR places, stands out to the same side. */
static bool is_peak(const struct polish *polish, const uint32_t *row_of, uint64_t at, uint32_t sensor)
{
    enum { NEAR = 3 };
    const struct tracks *tracks = &polish->survey->tracks;
    uint64_t cell = tracks->cell[at];
    double left = left_at(polish, row_of[cell], cell);
    bool before = at > tracks->start[sensor] && tracks->rank[at] - tracks->rank[at - 1] <= NEAR;
    bool after = at + 1 < tracks->start[sensor + 1] && tracks->rank[at + 1] - tracks->rank[at] <= NEAR;
    uint64_t beside[2] = {before ? tracks->cell[at - 1] : cell, after ? tracks->cell[at + 1] : cell};
    for (size_t k = 0; k < 2; k++)
        if (beside[k] != cell && left_at(polish, row_of[beside[k]], beside[k]) / left >= 0.5)
            return true;
    return false;
}

struct outlier {
    double off;
    uint64_t cell;
};

/* Keeps the ODD_MOST farthest, the farthest first. */
static void outlier_keep(struct outlier *kept, double off, uint64_t cell)
{
    struct outlier next = {off, cell};
    for (size_t k = 0; k < ODD_MOST; k++)
        if (next.off > kept[k].off) {
            struct outlier lower = kept[k];
            kept[k] = next;
            next = lower;
        }
}

static uint64_t outliers_find(const struct polish *polish, const uint32_t *row_of, struct outlier *kept)
{
    const struct tracks *tracks = &polish->survey->tracks;
    bool has_clock = polish->survey->time->along != TIME_NONE;
    uint64_t found = 0;
    for (uint32_t s = 0; s < tracks->sensors; s++)
        for (uint64_t at = tracks->start[s]; at < tracks->start[s + 1]; at++) {
            uint64_t cell = tracks->cell[at];
            double off = cell_off(polish, row_of[cell], cell);
            if (off <= far || (has_clock && is_peak(polish, row_of, at, s)))
                continue;
            outlier_keep(kept, off, cell);
            found++;
        }
    return found;
}

static void outliers_tell(struct survey *survey, const struct polish *polish, const uint32_t *row_of, uint64_t found,
                          const struct outlier *kept)
{
    const fescue_table *table = survey->table;
    if (found == 0)
        return;
    survey_notice(survey, found, "cell", "cells");
    page_add(survey->page, found == 1 ? " is far from all others: " : " are far from all others: ");
    for (size_t k = 0; k < ODD_MOST && k < found; k++) {
        uint64_t cell = kept[k].cell;
        uint32_t row = row_of[cell], column = survey->cells->by_row.across[cell];
        double value = cells_value(survey->cells, &survey->cells->by_row, cell);
        survey_label(survey, &table->row_labels, row, k == 0 ? "" : ", ");
        survey_label(survey, &table->column_labels, column, " at ");
        page_add(survey->page, " (%.6g, where %.3g would be usual)", value, polish->row[row] + polish->column[column]);
    }
    survey_more(survey, found);
}

fescue_status survey_far(struct survey *survey)
{
    fescue_status status;
    fescue_context *context = survey->table->context;
    struct polish polish = {.survey = survey};
    struct outlier kept[ODD_MOST] = {0};
    uint32_t *row_of = NULL;
    TRY(polish_make(&polish, &row_of));
    uint64_t found = outliers_find(&polish, row_of, kept);
    outliers_tell(survey, &polish, row_of, found, kept);
done:
    GIVE(context, &polish.row);
    GIVE(context, &polish.column);
    GIVE(context, &polish.row_spread);
    GIVE(context, &polish.column_spread);
    GIVE(context, &row_of);
    return status;
}
