/* SPDX-License-Identifier: MIT
 *
 * What hangs together in a table too large for a motion of all its lines.
 *
 * What a part of the cells determines, all of them do. So a part of bounded size is taken that is as dense as possible:
 * of the open columns the share s that have most cells, then of the open rows the share t that have most cells in those
 * columns. A share s of evenly seen columns leaves each row s times its cells, so with the work W of all open lines and
 * the affordable W0
 *
 *     s t = W0 / W,     s >= PLENTY p / (median cells of a row),     t >= PLENTY q / (median cells of a column),
 *
 * p and q being the unknowns of a row and a column: with PLENTY times the cells of unknowns nearly every line of a
 * random part hangs together with the others. When both cannot be had, the table is too thin, and nothing is done. One
 * motion settles the lines of the part that do not move, and peeling goes on from them through the whole table.
 *
 * Cost: that of one affordable motion, O(cells + lines) for the rest. One sort of the lines of each side by cells.
 */
#include "judge/determined_internal.h"

#include <math.h>
#include <stdlib.h>

static const double plenty = 3;
/* Cells as seen from open lines, times stride: a pass takes some hundredths of a second, a motion some seconds. */
static const double affordable = 8e6;

bool rigid_is_affordable(double work)
{
    return work <= affordable;
}

double rigid_work(const struct rigid *rigid)
{
    double cells = 0;
    for (uint64_t line = 0; line < rigid->lines; line++)
        if (rigid->state[line] == LINE_OPEN)
            cells += (double)rigid_ties(rigid, line).count;
    return cells * (double)rigid->stride;
}

struct ranked {
    uint64_t line, cells;
};

static int ranked_compare(const void *a, const void *b)
{
    const struct ranked *x = a, *y = b;
    if (x->cells != y->cells)
        return x->cells < y->cells ? 1 : -1;
    return (x->line > y->line) - (x->line < y->line);
}

/* The open lines of one side, those with most cells to open lines of the other side first. */
static size_t side_rank(const struct rigid *rigid, bool columns, struct ranked *ranked)
{
    uint64_t rows = rigid->cells->rows, from = columns ? rows : 0, to = columns ? rigid->lines : rows;
    size_t count = 0;
    for (uint64_t line = from; line < to; line++) {
        if (rigid->state[line] != LINE_OPEN)
            continue;
        struct ties ties = rigid_ties(rigid, line);
        ranked[count] = (struct ranked){.line = line};
        for (uint64_t k = 0; k < ties.count; k++)
            ranked[count].cells += rigid->state[ties.across[k] + ties.shift] == LINE_OPEN;
        count++;
    }
    qsort(ranked, count, sizeof *ranked, ranked_compare);
    return count;
}

/* Of a side, ranked, all but the first share are set aside. */
static void side_thin(struct rigid *rigid, const struct ranked *ranked, size_t count, double share)
{
    for (size_t k = (size_t)ceil(share * (double)count); k < count; k++)
        rigid->state[ranked[k].line] = LINE_ASIDE;
}

static bool shares_find(const struct rigid *rigid, double row_median, double column_median, double *column_share,
                        double *row_share)
{
    double both = affordable / rigid_work(rigid);
    double least_columns = fmin(1, plenty * (double)rigid->row_need / row_median);
    double least_rows = fmin(1, plenty * (double)rigid->column_need / column_median);
    *column_share = fmax(sqrt(both), least_columns);
    *row_share = both / *column_share;
    if (*row_share < least_rows) {
        *row_share = least_rows;
        *column_share = both / least_rows;
    }
    return *column_share >= least_columns && *column_share <= 1 && *row_share <= 1;
}

/* Sets aside what does not belong to the part; whether there is one. */
static bool part_choose(struct rigid *rigid, struct ranked *ranked)
{
    double row_share, column_share;
    size_t rows = side_rank(rigid, false, ranked);
    if (rows == 0)
        return false;
    double row_median = (double)ranked[rows / 2].cells;
    size_t columns = side_rank(rigid, true, ranked);
    if (columns == 0 || row_median == 0 || ranked[columns / 2].cells == 0 ||
        !shares_find(rigid, row_median, (double)ranked[columns / 2].cells, &column_share, &row_share))
        return false;
    side_thin(rigid, ranked, columns, column_share);
    rows = side_rank(rigid, false, ranked);
    side_thin(rigid, ranked, rows, row_share);
    return true;
}

fescue_status thin_run(struct rigid *rigid)
{
    fescue_status status = FESCUE_OK;
    struct motion motion = {0};
    struct ranked *ranked = NULL;
    TRY(TAKE(rigid->context, rigid->lines, &ranked));
    if (!part_choose(rigid, ranked))
        goto done;
    TRY(peel_run(rigid));
    TRY(null_motion(rigid, 0, &motion));
    for (uint64_t line = 0; line < rigid->lines; line++) {
        bool is_unknown = !motion.is_found && rigid->state[line] == LINE_SETTLED;
        if (rigid->state[line] == LINE_ASIDE || is_unknown)
            rigid->state[line] = LINE_OPEN;
    }
    TRY(peel_on(rigid));
done:
    motion_free(rigid->context, &motion);
    GIVE(rigid->context, &ranked);
    return status;
}
