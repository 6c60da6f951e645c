/* SPDX-License-Identifier: MIT
 *
 * What the pattern determines: cores and blocks against brute force, and cells against the
 * null space of the Jacobian of (U, V) -> seen cells of U V' at a random point, from LAPACK's singular value
 * decomposition (Singer, Cucuringu 2010: a cell is locally determined when its own Jacobian row vanishes on that null
 * space).
 */
#include "judge/judge_internal.h"
#include "support_table.h"

#include <math.h>
#include <string.h>

#include <lapacke.h>

/* ---- small graphs by hand --------------------------------------------------------------------------------------- */

static void cells_from_picture(fescue_context *context, uint32_t rows, uint32_t columns, const char *picture,
                               struct cells *cells)
{
    struct triplet_list list = {.precision = FESCUE_DOUBLE};
    for (uint32_t i = 0; i < rows; i++)
        for (uint32_t j = 0; j < columns; j++)
            if (picture[i * columns + j] == 'x')
                assert_status(context, triplets_append(context, &list, i, j, 1), FESCUE_OK);
    assert_status(context, cells_build(context, rows, columns, &list, cells), FESCUE_OK);
    triplets_free(context, &list);
}

/* Two full 2 x 3 corners that share no line, a row hanging on the first by one cell, an empty row and column. */
static const char picture[] = "xxx..."
                              "xxx..."
                              "x....."
                              "...xx."
                              "...xx."
                              "......";

static void a_worked_example(void **state)
{
    fescue_context *context = bench_of(state)->context;
    static const uint32_t row_core[] = {2, 2, 1, 2, 2, 0}, column_core[] = {2, 2, 2, 2, 2, 0};
    struct cells cells;
    struct determined determined;
    uint32_t rows[6], columns[6];
    cells_from_picture(context, 6, 6, picture, &cells);
    assert_status(context, core_numbers(context, &cells, rows, columns), FESCUE_OK);
    assert_memory_equal(rows, row_core, sizeof rows);
    assert_memory_equal(columns, column_core, sizeof columns);

    assert_status(context, determined_create(context, &cells, 1, FESCUE_OFFSETS_BOTH, &determined), FESCUE_OK);
    assert_int_equal(determined_basis(&determined, 2, 1), BASIS_OFFSETS);  /* one cell for factor and effect */
    assert_int_equal(determined_basis(&determined, 1, 1), BASIS_LOW_RANK); /* as many cells as unknowns */
    assert_int_equal(determined_basis(&determined, 0, 3), BASIS_OFFSETS);  /* between the blocks */
    assert_int_equal(determined.low_rank, 2 * 3 + 2 * 2);
    assert_int_equal(determined_basis(&determined, 5, 0), BASIS_OFFSETS); /* the column's effect */
    assert_int_equal(determined_basis(&determined, 5, 5), BASIS_MEAN);
    assert_int_equal(determined.row_support[0], 3);
    assert_int_equal(determined.column_support[0], 3);
    assert_int_equal(determined.column_support[5], 0);
    determined_free(context, &determined);

    assert_status(context, determined_create(context, &cells, 1, FESCUE_OFFSETS_NONE, &determined), FESCUE_OK);
    assert_int_equal(determined_basis(&determined, 2, 1), BASIS_LOW_RANK); /* one cell ties a row */
    assert_int_equal(determined.low_rank, 3 * 3 + 2 * 2);
    determined_free(context, &determined);

    assert_status(context, determined_create(context, &cells, 2, FESCUE_OFFSETS_NONE, &determined), FESCUE_OK);
    assert_int_equal(determined_basis(&determined, 2, 1), BASIS_MEAN); /* one cell is too few for rank 2 */
    assert_int_equal(determined_basis(&determined, 0, 0), BASIS_LOW_RANK);
    determined_free(context, &determined);
    cells_free(context, &cells);
}

static void the_kind_of_offsets_decides_what_is_left(void **state)
{
    fescue_context *context = bench_of(state)->context;
    static const struct {
        enum fescue_offsets kind;
        enum basis with_row, with_column, with_both; /* cells (0, 5), (5, 0), (0, 3) at rank 2 */
    } cases[] = {
        {FESCUE_OFFSETS_BOTH, BASIS_OFFSETS, BASIS_OFFSETS, BASIS_OFFSETS},
        {FESCUE_OFFSETS_ROWS, BASIS_OFFSETS, BASIS_MEAN, BASIS_OFFSETS},
        {FESCUE_OFFSETS_COLUMNS, BASIS_MEAN, BASIS_OFFSETS, BASIS_OFFSETS},
        {FESCUE_OFFSETS_MEAN, BASIS_MEAN, BASIS_MEAN, BASIS_MEAN},
        {FESCUE_OFFSETS_NONE, BASIS_MEAN, BASIS_MEAN, BASIS_MEAN},
    };
    struct cells cells;
    cells_from_picture(context, 6, 6, picture, &cells);
    for (size_t c = 0; c < sizeof cases / sizeof cases[0]; c++) {
        struct determined determined;
        assert_status(context, determined_create(context, &cells, 2, cases[c].kind, &determined), FESCUE_OK);
        assert_int_equal(determined_basis(&determined, 0, 5), cases[c].with_row);
        assert_int_equal(determined_basis(&determined, 5, 0), cases[c].with_column);
        assert_int_equal(determined_basis(&determined, 0, 3), cases[c].with_both);
        determined_free(context, &determined);
    }
    cells_free(context, &cells);
}

static void at_rank_zero_nothing_is_low_rank(void **state)
{
    fescue_context *context = bench_of(state)->context;
    struct cells cells;
    struct determined determined;
    cells_from_picture(context, 6, 6, picture, &cells);
    assert_status(context, determined_create(context, &cells, 0, FESCUE_OFFSETS_BOTH, &determined), FESCUE_OK);
    for (uint32_t i = 0; i < 6; i++)
        for (uint32_t j = 0; j < 6; j++)
            assert_int_equal(determined_basis(&determined, i, j), i == 5 && j == 5 ? BASIS_MEAN : BASIS_OFFSETS);
    determined_free(context, &determined);
    cells_free(context, &cells);
}

static void words_are_those_of_the_cells_file(void **state)
{
    (void)state;
    assert_string_equal(basis_word(BASIS_LOW_RANK), "low-rank");
    assert_string_equal(basis_word(BASIS_SMOOTH), "smooth");
    assert_string_equal(basis_word(BASIS_OFFSETS), "offsets");
    assert_string_equal(basis_word(BASIS_MEAN), "mean");
}

/* ---- random graphs by brute force -------------------------------------------------------------------------------- */

enum { MOST = 16 };

struct graph {
    uint32_t rows, columns;
    bool seen[MOST][MOST];
    bool row_in[MOST], column_in[MOST];
};

static void graph_fill(const struct cells *cells, struct graph *graph)
{
    *graph = (struct graph){.rows = cells->rows, .columns = cells->columns};
    for (uint32_t i = 0; i < cells->rows; i++)
        for (uint64_t k = cells->by_row.start[i]; k < cells->by_row.start[i + 1]; k++)
            graph->seen[i][cells->by_row.across[k]] = true;
}

/* Takes lines away one at a time, any that has fewer than k cells among those left. */
static void graph_core(struct graph *graph, uint32_t k)
{
    bool changed = true;
    memset(graph->row_in, 1, sizeof graph->row_in);
    memset(graph->column_in, 1, sizeof graph->column_in);
    while (changed) {
        changed = false;
        for (uint32_t i = 0; i < graph->rows; i++) {
            uint32_t degree = 0;
            for (uint32_t j = 0; j < graph->columns; j++)
                degree += graph->seen[i][j] && graph->column_in[j];
            changed |= graph->row_in[i] && degree < k;
            graph->row_in[i] &= degree >= k;
        }
        for (uint32_t j = 0; j < graph->columns; j++) {
            uint32_t degree = 0;
            for (uint32_t i = 0; i < graph->rows; i++)
                degree += graph->seen[i][j] && graph->row_in[i];
            changed |= graph->column_in[j] && degree < k;
            graph->column_in[j] &= degree >= k;
        }
    }
}

/* reach[i][j]: a path of cells leads from row i to column j inside the core; by closing triples until nothing new. */
static void graph_reach(const struct graph *graph, bool reach[MOST][MOST])
{
    bool changed = true;
    for (uint32_t i = 0; i < graph->rows; i++)
        for (uint32_t j = 0; j < graph->columns; j++)
            reach[i][j] = graph->seen[i][j] && graph->row_in[i] && graph->column_in[j];
    while (changed) {
        changed = false;
        for (uint32_t i = 0; i < graph->rows; i++)
            for (uint32_t a = 0; a < graph->columns; a++)
                for (uint32_t b = 0; b < graph->rows; b++)
                    for (uint32_t j = 0; reach[i][a] && reach[b][a] && j < graph->columns; j++)
                        if (reach[b][j] && !reach[i][j])
                            reach[i][j] = changed = true;
    }
}

static void cores_and_blocks_agree_with_brute_force(void **state)
{
    fescue_context *context = bench_of(state)->context;
    uint64_t low_rank = 0, other = 0;
    for (uint64_t seed = 1; seed <= 120; seed++) {
        struct sowing sowing = {.rows = 3 + (uint32_t)(seed % 13),
                                .columns = 3 + (uint32_t)(seed * 7 % 13),
                                .rank = 1,
                                .share = 0.1 + 0.05 * (double)(seed % 9),
                                .seed = seed};
        struct cells cells;
        struct graph graph;
        sow_cells(context, &sowing, &cells);
        graph_fill(&cells, &graph);
        for (uint32_t k = 1; k <= 5; k++) {
            bool reach[MOST][MOST] = {{0}};
            uint32_t row_in[MOST], column_in[MOST], rows[MOST], columns[MOST], blocks;
            graph_core(&graph, k);
            graph_reach(&graph, reach);
            assert_status(context, core_trim(context, &cells, k, k, row_in, column_in), FESCUE_OK);
            assert_status(context, blocks_find(context, &cells, row_in, column_in, 1, rows, columns, &blocks),
                          FESCUE_OK);
            for (uint32_t i = 0; i < cells.rows; i++)
                for (uint32_t j = 0; j < cells.columns; j++) {
                    bool together = rows[i] != 0 && rows[i] == columns[j];
                    assert_int_equal(together, reach[i][j]);
                    low_rank += together;
                    other += !together;
                }
        }
        cells_free(context, &cells);
    }
    assert_true(low_rank > 5000 && other > 5000);
}

/* ---- the Jacobian ------------------------------------------------------------------------------------------------ */

/* The row of cell (i, j): the derivative of u_i . v_j by all of u (rows x rank), then v. */
static void jacobian_row(const double *u, const double *v, uint32_t rows, uint32_t columns, uint32_t rank, uint32_t i,
                         uint32_t j, double *row)
{
    memset(row, 0, (size_t)(rows + columns) * rank * sizeof *row);
    for (uint32_t k = 0; k < rank; k++) {
        row[i * rank + k] = v[j * rank + k];
        row[(rows + j) * rank + k] = u[i * rank + k];
    }
}

/* size of the part of `row` in the null space spanned by rows first..size-1 of vt */
static double null_part(const double *vt, size_t size, size_t first, const double *row)
{
    double square = 0;
    for (size_t a = first; a < size; a++) {
        double dot = 0;
        for (size_t b = 0; b < size; b++)
            dot += vt[a * size + b] * row[b];
        square += dot * dot;
    }
    return sqrt(square);
}

struct tally {
    uint64_t determined, refused, free, free_refused;
};

static void jacobian_check(fescue_context *context, const struct sowing *sowing, uint32_t rank, struct tally *tally)
{
    uint32_t rows = sowing->rows, columns = sowing->columns;
    size_t size = (size_t)(rows + columns) * rank, first = 0;
    struct cells cells;
    struct determined determined;
    struct graph graph;
    sow_cells(context, sowing, &cells);
    graph_fill(&cells, &graph);
    size_t count = (size_t)cells.count, lesser = count < size ? count : size;
    double *u = test_calloc(size, sizeof *u), *v = u + rows * rank, *row = test_calloc(size, sizeof *row);
    double *jacobian = test_calloc(count * size + 1, sizeof *jacobian), *s = test_calloc(size, sizeof *s);
    double *left = test_calloc(count * count + 1, sizeof *left), *vt = test_calloc(size * size, sizeof *vt);
    struct random_stream stream = random_open(sowing->seed, RANDOM_TEST, 50);
    for (size_t k = 0; k < size; k++)
        u[k] = random_normal(&stream);
    for (uint32_t i = 0; i < rows; i++)
        for (uint64_t k = cells.by_row.start[i]; k < cells.by_row.start[i + 1]; k++)
            jacobian_row(u, v, rows, columns, rank, i, cells.by_row.across[k], jacobian + k * size);
    assert_true(count > 0);
    assert_int_equal(LAPACKE_dgesdd(LAPACK_ROW_MAJOR, 'A', (lapack_int)count, (lapack_int)size, jacobian,
                                    (lapack_int)size, s, left, (lapack_int)count, vt, (lapack_int)size),
                     0);
    while (first < lesser && s[first] > 1e-10 * s[0])
        first++;
    assert_status(context, determined_create(context, &cells, rank, FESCUE_OFFSETS_NONE, &determined), FESCUE_OK);
    for (uint32_t i = 0; i < rows; i++)
        for (uint32_t j = 0; j < columns; j++) {
            if (graph.seen[i][j]) /* known by being seen, in a core or not */
                continue;
            jacobian_row(u, v, rows, columns, rank, i, j, row);
            bool is_determined = null_part(vt, size, first, row) < 1e-8;
            bool is_refused = determined_basis(&determined, i, j) != BASIS_LOW_RANK;
            tally->determined += is_determined;
            tally->refused += is_determined && is_refused;
            tally->free += !is_determined;
            tally->free_refused += !is_determined && is_refused;
        }
    determined_free(context, &determined);
    cells_free(context, &cells);
    double *blocks[] = {u, row, jacobian, s, left, vt};
    for (size_t k = 0; k < 6; k++)
        test_free(blocks[k]);
}

static void mask_check(fescue_context *context, uint64_t seed, struct tally *tally)
{
    struct sowing sowing = {.rows = 8 + (uint32_t)(seed % 5),
                            .columns = 8 + (uint32_t)(seed % 7),
                            .rank = 1,
                            .share = 0.25 + 0.05 * (double)(seed % 8),
                            .seed = seed};
    jacobian_check(context, &sowing, 1 + (uint32_t)(seed % 3), tally);
}

static void what_the_jacobian_says_is_found(void **state)
{
    fescue_context *context = bench_of(state)->context;
    struct tally tally = {0};
    for (uint64_t seed = 1; seed <= 80; seed++)
        mask_check(context, seed, &tally);
    assert_int_equal(tally.refused, 0);
    assert_true(tally.determined > 1000);
    assert_true(tally.free > 1000);
    assert_true((tally.free - tally.free_refused) * 1000 <= tally.free);
}

/* Too many cells for a motion of all lines, too few a line for peeling to begin: a part of them settles the rest. Five
   times the cells of unknowns, evenly seen, leave nothing undetermined. */
static void a_large_table_is_settled_from_a_part(void **state)
{
    fescue_context *context = bench_of(state)->context;
    struct sowing sowing = {.rows = 1500, .columns = 1200, .rank = 1, .share = 0.14, .seed = 5};
    struct cells cells;
    struct determined determined;
    sow_cells(context, &sowing, &cells);
    assert_status(context, determined_create(context, &cells, 18, FESCUE_OFFSETS_BOTH, &determined), FESCUE_OK);
    assert_int_equal(determined.low_rank, 1500 * 1200);
    assert_int_equal(determined.unchecked, 0);
    determined_free(context, &determined);
    cells_free(context, &cells);
}

static void a_lack_of_memory_leaks_nothing(void **state)
{
    fescue_context *context = bench_of(state)->context;
    struct cells cells;
    cells_from_picture(context, 6, 6, picture, &cells);
    uint64_t alive = fescue_memory_usage(context).blocks;
    bool met = true;
    for (uint64_t n = 1; met; n++) {
        struct determined determined;
        fault_plan(FAULT_TAKE, n, false, 0);
        fescue_status status = determined_create(context, &cells, 2, FESCUE_OFFSETS_BOTH, &determined);
        met = fault_met();
        assert_status(context, status, met ? FESCUE_NO_MEMORY : FESCUE_OK);
        if (status == FESCUE_OK)
            determined_free(context, &determined);
        assert_int_equal(fescue_memory_usage(context).blocks, alive);
        fescue_failure_clear(context);
    }
    fault_clear();
    cells_free(context, &cells);
}

int main(void)
{
    const struct CMUnitTest tests[] = {
        BENCH_TEST(a_worked_example),
        BENCH_TEST(the_kind_of_offsets_decides_what_is_left),
        BENCH_TEST(at_rank_zero_nothing_is_low_rank),
        cmocka_unit_test(words_are_those_of_the_cells_file),
        BENCH_TEST(cores_and_blocks_agree_with_brute_force),
        BENCH_TEST(what_the_jacobian_says_is_found),
        BENCH_TEST(a_large_table_is_settled_from_a_part),
        BENCH_TEST(a_lack_of_memory_leaks_nothing),
    };
    return cmocka_run_group_tests_name("determined", tests, NULL, NULL);
}
