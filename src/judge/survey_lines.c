/* SPDX-License-Identifier: MIT
 *
 * Rows and columns: how many cells they have, and which are empty, thin or constant (more than chance makes: n cells
 * agree with probability alike^(n-1)), by their labels.
 */
#include "judge/survey_internal.h"

#include <math.h>

enum {
    THIN_BELOW = 5,    /* cells under which a line is thin, when others have twice as many or more */
    CONSTANT_LEAST = 3 /* cells that must agree */
};
static const double by_chance = 0.05; /* lines whose cells agree by chance, below which one that does is odd */

struct side {
    const struct cells *cells;
    const struct half *half;
    const struct labels *labels;
    const char *one, *many; /* "row", "rows" */
    uint64_t thin_below;
    double alike; /* chance that two cells have the same value */
};

static uint64_t line_cells(const struct half *half, uint64_t line)
{
    return half->start[line + 1] - half->start[line];
}

static double line_cells_at(const void *half, uint64_t line)
{
    return (double)line_cells(half, line);
}

static bool is_empty(const struct side *side, uint32_t line)
{
    return line_cells(side->half, line) == 0;
}

static bool is_thin(const struct side *side, uint32_t line)
{
    return !is_empty(side, line) && line_cells(side->half, line) < side->thin_below;
}

static bool is_constant(const struct side *side, uint32_t line)
{
    uint64_t from = side->half->start[line], to = side->half->start[line + 1];
    if (to - from < CONSTANT_LEAST || side->half->lines * pow(side->alike, (double)(to - from - 1)) > by_chance)
        return false;
    for (uint64_t k = from + 1; k < to; k++)
        if (cells_value(side->cells, side->half, k) != cells_value(side->cells, side->half, from))
            return false;
    return true;
}

/* One sentence that counts and names the lines of which `holds` is true; nothing when there are none. */
static void lines_list(struct page *page, const struct side *side, bool (*holds)(const struct side *, uint32_t),
                       const char *what)
{
    char buffer[16];
    uint32_t named[NAMED_MOST];
    uint64_t found = 0;
    for (uint32_t i = 0; i < side->half->lines; i++) {
        if (!holds(side, i))
            continue;
        if (found < NAMED_MOST)
            named[found] = i;
        found++;
    }
    if (found == 0)
        return;
    page_count(page, found, side->one, side->many);
    page_add(page, " %s: ", what);
    for (uint64_t k = 0; k < found && k < NAMED_MOST; k++) {
        page_add(page, k == 0 ? "" : ", ");
        page_label(page, label_text(side->labels, named[k], buffer));
    }
    if (found > NAMED_MOST)
        page_add(page, " and %llu more", (unsigned long long)(found - NAMED_MOST));
    page_add(page, ".\n");
}

static void side_tell(struct page *page, struct side *side)
{
    const struct half *half = side->half;
    uint64_t last = half->lines - 1;
    double least = order_pick(line_cells_at, half, half->lines, 0);
    double median = order_pick(line_cells_at, half, half->lines, half->lines / 2);
    double most = order_pick(line_cells_at, half, half->lines, last);
    side->thin_below = median / 2 < THIN_BELOW ? (uint64_t)(median / 2) : THIN_BELOW;
    if (least == most)
        page_add(page, "Each %s has %.0f %s.\n", side->one, most, most == 1 ? "cell" : "cells");
    else
        page_add(page, "Cells a %s: least %.0f, median %.0f, most %.0f.\n", side->one, least, median, most);
    lines_list(page, side, is_empty, "without any cell");
    lines_list(page, side, is_thin, "with very few cells");
    lines_list(page, side, is_constant, "whose cells are all equal");
}

void survey_lines(struct survey *survey)
{
    const fescue_table *table = survey->table;
    struct side rows = {.cells = &table->cells,
                        .half = &table->cells.by_row,
                        .labels = &table->row_labels,
                        .alike = survey->alike,
                        .one = "row",
                        .many = "rows"};
    struct side columns = {.cells = &table->cells,
                           .half = &table->cells.by_column,
                           .labels = &table->column_labels,
                           .alike = survey->alike,
                           .one = "column",
                           .many = "columns"};
    side_tell(survey->page, &rows);
    side_tell(survey->page, &columns);
}
