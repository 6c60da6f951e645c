/* SPDX-License-Identifier: MIT
 *
 * Core numbers of the lines of a table.
 *
 * The k-core of a graph is what is left when vertices with fewer than k neighbours are taken away until there are none.
 * A factor of rank k has k unknowns a line, so a line of a table that k-1 cells or fewer tie to the others stays free:
 * outside the k-core nothing of rank k is determined (Singer, Cucuringu 2010, "Uniqueness of low-rank matrix completion
 * by rigidity theory").
 *
 * All cores at once by taking the vertex of least degree away again and again (Batagelj, Zaversnik 2003, "An O(m)
 * algorithm for cores decomposition of networks"): the vertices are kept sorted by present degree in one array, and a
 * vertex that loses a neighbour swaps places with the first of its degree and moves the border by one.
 *
 *     order   the vertices, sorted by present degree       place   where in `order` a vertex stands
 *     degree  the present degree, in the end the core number
 *     first   where in `order` each degree begins
 *
 * Vertices are numbered rows first, then columns. One thread; O(cells + lines); four numbers a line of workspace.
 *
 * core_trim makes the one core in which rows and columns need different numbers of cells, by a queue of those to go.
 */
#include "judge/judge_internal.h"

struct peeling {
    const struct cells *cells;
    uint64_t lines, degrees; /* degrees: the largest plus one */
    uint64_t *order, *place, *degree, *first;
};

static uint64_t half_degrees(const struct half *half, uint64_t *degree)
{
    uint64_t most = 0;
    for (uint32_t i = 0; i < half->lines; i++) {
        degree[i] = half->start[i + 1] - half->start[i];
        most = degree[i] > most ? degree[i] : most;
    }
    return most;
}

static void lines_sort(struct peeling *peeling)
{
    uint64_t *first = peeling->first;
    for (uint64_t v = 0; v < peeling->lines; v++)
        first[peeling->degree[v] + 1]++;
    for (uint64_t d = 0; d < peeling->degrees; d++)
        first[d + 1] += first[d];
    for (uint64_t v = 0; v < peeling->lines; v++) {
        peeling->place[v] = first[peeling->degree[v]]++;
        peeling->order[peeling->place[v]] = v;
    }
    for (uint64_t d = peeling->degrees; d > 0; d--)
        first[d] = first[d - 1];
    first[0] = 0;
}

/* u moves to the front of its degree's range, which then begins one later: u is in the range below. */
static void line_lower(struct peeling *peeling, uint64_t u)
{
    uint64_t front = peeling->first[peeling->degree[u]]++;
    uint64_t w = peeling->order[front], from = peeling->place[u];
    peeling->order[front] = u;
    peeling->order[from] = w;
    peeling->place[u] = front;
    peeling->place[w] = from;
    peeling->degree[u]--;
}

static void line_take_away(struct peeling *peeling, uint64_t v)
{
    uint32_t rows = peeling->cells->rows;
    bool is_row = v < rows;
    const struct half *half = is_row ? &peeling->cells->by_row : &peeling->cells->by_column;
    uint64_t line = is_row ? v : v - rows;
    for (uint64_t k = half->start[line]; k < half->start[line + 1]; k++) {
        uint64_t u = is_row ? (uint64_t)rows + half->across[k] : half->across[k];
        if (peeling->degree[u] > peeling->degree[v])
            line_lower(peeling, u);
    }
}

static fescue_status peeling_open(fescue_context *context, const struct cells *cells, struct peeling *peeling)
{
    fescue_status status = FESCUE_OK;
    *peeling = (struct peeling){.cells = cells, .lines = (uint64_t)cells->rows + cells->columns};
    TRY(TAKE(context, peeling->lines, &peeling->order));
    TRY(TAKE(context, peeling->lines, &peeling->place));
    TRY(TAKE(context, peeling->lines, &peeling->degree));
    uint64_t of_rows = half_degrees(&cells->by_row, peeling->degree);
    uint64_t of_columns = half_degrees(&cells->by_column, peeling->degree + cells->rows);
    peeling->degrees = (of_rows > of_columns ? of_rows : of_columns) + 1;
    TRY(TAKE(context, peeling->degrees + 1, &peeling->first));
    lines_sort(peeling);
done:
    return status;
}

static void peeling_close(fescue_context *context, struct peeling *peeling)
{
    GIVE(context, &peeling->order);
    GIVE(context, &peeling->place);
    GIVE(context, &peeling->degree);
    GIVE(context, &peeling->first);
}

fescue_status core_numbers(fescue_context *context, const struct cells *cells, uint32_t *row_core,
                           uint32_t *column_core)
{
    fescue_status status = FESCUE_OK;
    struct peeling peeling = {0};
    TRY(peeling_open(context, cells, &peeling));
    for (uint64_t k = 0; k < peeling.lines; k++)
        line_take_away(&peeling, peeling.order[k]);
    for (uint32_t i = 0; i < cells->rows; i++)
        row_core[i] = (uint32_t)peeling.degree[i];
    for (uint32_t j = 0; j < cells->columns; j++)
        column_core[j] = (uint32_t)peeling.degree[cells->rows + (uint64_t)j];
done:
    peeling_close(context, &peeling);
    return status;
}

/* ---- one core, rows and columns asking for different numbers ---------------------------------------------------- */

fescue_status core_trim(fescue_context *context, const struct cells *cells, size_t row_least, size_t column_least,
                        uint32_t *row_in, uint32_t *column_in)
{
    fescue_status status = FESCUE_OK;
    const struct half *halves[2] = {&cells->by_row, &cells->by_column};
    uint32_t *in[2] = {row_in, column_in};
    const uint64_t least[2] = {row_least, column_least};
    uint64_t *degree[2] = {NULL, NULL}, *leaving = NULL, end = 0;
    TRY(TAKE(context, cells->rows, &degree[0]));
    TRY(TAKE(context, cells->columns, &degree[1]));
    TRY(TAKE(context, (size_t)cells->rows + cells->columns, &leaving));
    for (uint64_t side = 0; side < 2; side++)
        for (uint64_t i = 0; i < halves[side]->lines; i++) {
            degree[side][i] = halves[side]->start[i + 1] - halves[side]->start[i];
            in[side][i] = degree[side][i] >= least[side] && degree[side][i] > 0;
            if (!in[side][i])
                leaving[end++] = 2 * i + side;
        }
    for (uint64_t begin = 0; begin < end; begin++) {
        uint64_t side = leaving[begin] % 2, line = leaving[begin] / 2, other = 1 - side;
        for (uint64_t k = halves[side]->start[line]; k < halves[side]->start[line + 1]; k++) {
            uint32_t across = halves[side]->across[k];
            if (in[other][across] && --degree[other][across] < least[other]) {
                in[other][across] = 0;
                leaving[end++] = 2 * (uint64_t)across + other;
            }
        }
    }
done:
    GIVE(context, &degree[0]);
    GIVE(context, &degree[1]);
    GIVE(context, &leaving);
    return status;
}
