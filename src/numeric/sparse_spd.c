/* SPDX-License-Identifier: MIT
 *
 * The normal equations of two-way effects,
 *
 *     [ D_r  B  ] [ y_r ]   [ g_r ]
 *     [ B'  D_c ] [ y_c ] = [ g_c ]        B_ij: the weight of cell (i, j) where it was seen, 1 where
                                    cells have none; D diagonal, positive definite
 *
 * First way, direct: CHOLMOD (Chen, Davis, Hager, Rajamanickam 2008, "Algorithm 887", ACM TOMS 35), 64-bit integers,
 * supernodal or simplicial as it picks. Up to 1e5 cells in the order of approximate minimum degree. Beyond, finding
 * that order takes many times what the factor takes (measured: 19 s against 1.4 s for 100 000 x 1000 with 1e6 cells),
 * and it eliminates the longer side first, nearly always; so this is the order given. What is left is the Schur
 * complement S = D_s - B'D_l^-1 B on the shorter side s, mostly full.
 *
 * Second way, where the factor would be ruinous: conjugate gradients on that same S without forming it, with the
 * diagonal D_s as preconditioner, until the preconditioned residual is 1e-12 of the right-hand side's (Hestenes,
 * Stiefel 1952). The eigenvalues of D_s^-1/2 S D_s^-1/2 lie in (0, 1], and for a table of many cells a line nearly all
 * of them near 1, so that some tens of passes do; a table of 480 000 x 17 800 with 1e8 cells would have a factor of 2e8
 * numbers and 2e12 operations. This is the one departure from solving directly, and it is chosen without analysis above
 * 2e6 cells (CHOLMOD's copies of the matrix and its analysis need some 70 bytes a cell) and where counting cells shows
 * that S is mostly full and too large; else after analysis, above 1e7 numbers in the factor (80 MB) or 4e9 operations
 * (less than a second).
 *
 *     d, g, y    diagonal, right-hand side, solution        s, l    shorter and longer side
 *     p, q       direction and S p                          z       preconditioned residual D_s^-1 r
 *
 * CHOLMOD takes its memory from its own allocator (it knows one for the whole process only), so that it is not counted.
 * Parallel: the passes over cells, line by line; the bits do not depend on threads. CHOLMOD runs in one thread.
 */
#include "numeric/dense_internal.h"

#include <assert.h>
#include <cholmod.h>
#include <math.h>
#include <string.h>

static const uint64_t direct_most_cells = 2000000, minimum_degree_most_cells = 100000;
static const double direct_most_entries = 1e7, direct_most_operations = 4e9;

struct two_way {
    fescue_context *context;
    const struct cells *cells;
    const double *diagonal;
    size_t count;
    const double *rhs;
    double *solution;
};

/* ---- direct -------------------------------------------------------------------------------------------------------
 */

static fescue_status cholmod_result(fescue_context *context, const cholmod_common *common)
{
    switch (common->status) {
    case CHOLMOD_OK:
    case CHOLMOD_DSMALL:
        return FESCUE_OK;
    case CHOLMOD_OUT_OF_MEMORY:
    case CHOLMOD_TOO_LARGE:
        return FAIL(context, FESCUE_NO_MEMORY, "the system of row and column effects does not fit into memory");
    case CHOLMOD_NOT_POSDEF:
        return FAIL(context, FESCUE_DEFECT, "the system of row and column effects is not positive definite");
    default:
        return FAIL(context, FESCUE_DEFECT, "CHOLMOD gave up (%d)", common->status);
    }
}

/* The lower triangle, column by column: column i of the first block holds d_i and the cells of table row i. */
static void lower_fill(const struct two_way *system, cholmod_sparse *matrix)
{
    const struct half *half = &system->cells->by_row;
    size_t rows = system->cells->rows, columns = system->cells->columns;
    int64_t *start = matrix->p, *index = matrix->i, at = 0;
    double *value = matrix->x;
    for (size_t i = 0; i < rows + columns; i++) {
        start[i] = at;
        index[at] = (int64_t)i;
        value[at++] = system->diagonal[i];
        if (i >= rows)
            continue;
        for (uint64_t k = half->start[i]; k < half->start[i + 1]; k++) {
            index[at] = (int64_t)(rows + half->across[k]);
            value[at++] = half->weight != NULL ? (double)half->weight[k] : 1;
        }
    }
    start[rows + columns] = at;
}

static fescue_status factor_solve(const struct two_way *system, cholmod_sparse *matrix, cholmod_factor *factor,
                                  cholmod_common *common)
{
    size_t size = matrix->nrow;
    cholmod_dense *answer = NULL;
    fescue_status status = FESCUE_OK;
    cholmod_dense side = {.nrow = size,
                          .ncol = system->count,
                          .nzmax = size * system->count,
                          .d = size,
                          .x = (void *)(uintptr_t)system->rhs, /* only read */
                          .xtype = CHOLMOD_REAL,
                          .dtype = CHOLMOD_DOUBLE};
    cholmod_l_factorize(matrix, factor, common);
    TRY(cholmod_result(system->context, common));
    answer = cholmod_l_solve(CHOLMOD_A, factor, &side, common);
    TRY(cholmod_result(system->context, common));
    memcpy(system->solution, answer->x, size * system->count * sizeof(double));
done:
    cholmod_l_free_dense(&answer, common);
    return status;
}

/* An order and the shape of the factor in it. */
static cholmod_factor *factor_analyse(const struct two_way *system, cholmod_sparse *matrix, cholmod_common *common)
{
    size_t rows = system->cells->rows, columns = system->cells->columns, size = rows + columns;
    bool given = system->cells->count > minimum_degree_most_cells;
    cholmod_factor *factor = NULL;
    int64_t *order = NULL;
    if (given) {
        order = cholmod_l_malloc(size, sizeof *order, common);
        if (order == NULL)
            return NULL;
        for (size_t k = 0; k < size; k++)
            order[k] = (int64_t)(rows >= columns ? k : k < columns ? rows + k : k - columns);
    }
    common->nmethods = 1;
    common->method[0].ordering = given ? CHOLMOD_GIVEN : CHOLMOD_AMD;
    factor = cholmod_l_analyze_p(matrix, order, NULL, 0, common);
    cholmod_l_free(given ? size : 0, sizeof *order, order, common);
    return factor;
}

/* *solved = false when the analysis advises against it. */
static fescue_status direct_solve(const struct two_way *system, bool *solved)
{
    cholmod_common common;
    cholmod_factor *factor = NULL;
    size_t size = (size_t)system->cells->rows + system->cells->columns;
    fescue_status status = FESCUE_OK;
    *solved = false;
    cholmod_l_start(&common);
    common.print = 0;
    common.final_ll = 1; /* so that a negative pivot is seen */
    cholmod_sparse *matrix =
        cholmod_l_allocate_sparse(size, size, size + system->cells->count, 1, 1, -1, CHOLMOD_REAL, &common);
    TRY(cholmod_result(system->context, &common));
    lower_fill(system, matrix);
    factor = factor_analyse(system, matrix, &common);
    TRY(cholmod_result(system->context, &common));
    if (common.lnz <= direct_most_entries && common.fl <= direct_most_operations) {
        TRY(factor_solve(system, matrix, factor, &common));
        *solved = true;
    }
done:
    cholmod_l_free_factor(&factor, &common);
    cholmod_l_free_sparse(&matrix, &common);
    cholmod_l_finish(&common);
    return status;
}

/* ---- conjugate gradients ------------------------------------------------------------------------------------------
 */

struct gather {
    const struct half *half;
    const double *from, *divide, *scale, *minus;
    double *to;
};

static double weighted(const struct gather *gather, uint64_t k)
{
    double from = gather->from[gather->half->across[k]];
    return gather->half->weight != NULL ? (double)gather->half->weight[k] * from : from;
}

/* to_i = (minus_i - sum over the cells of line i of from_j) / divide_i, and the like: see lines_gather. */
static void block_gather(void *job, size_t block, size_t worker)
{
    const struct gather *gather = job;
    const struct half *half = gather->half;
    (void)worker;
    for (uint32_t line = half->block[block]; line < half->block[block + 1]; line++) {
        double part[4] = {0};
        uint64_t k = half->start[line], end = half->start[line + 1];
        for (; k + 4 <= end; k += 4)
            for (size_t c = 0; c < 4; c++)
                part[c] += weighted(gather, k + c);
        for (; k < end; k++)
            part[0] += weighted(gather, k);
        double sum = (part[0] + part[2]) + (part[1] + part[3]);
        if (gather->minus != NULL)
            sum = gather->minus[line] * (gather->scale != NULL ? gather->scale[line] : 1) - sum;
        gather->to[line] = gather->divide != NULL ? sum / gather->divide[line] : sum;
    }
}

static void lines_gather(fescue_context *context, struct gather gather)
{
    team_run(context, gather.half->blocks, block_gather, &gather);
}

struct gradients {
    const struct two_way *system;
    const struct half *shorter, *longer;
    const double *d_shorter, *d_longer;
    double *residual, *z, *p, *q; /* on the shorter side */
    double *across;               /* on the longer side */
};

static double dot(const double *a, const double *b, size_t size)
{
    struct matrix x = {.data = (double *)(uintptr_t)a, .rows = 1, .columns = size, .stride = size};
    struct matrix y = {.data = (double *)(uintptr_t)b, .rows = 1, .columns = size, .stride = size};
    return matrix_dot(x, y);
}

/* q = S p */
static void schur_apply(const struct gradients *cg)
{
    fescue_context *context = cg->system->context;
    lines_gather(context, (struct gather){.half = cg->longer, .from = cg->p, .divide = cg->d_longer, .to = cg->across});
    lines_gather(
        context,
        (struct gather){.half = cg->shorter, .from = cg->across, .minus = cg->p, .scale = cg->d_shorter, .to = cg->q});
}

/* z = D_s^-1 residual; returns residual' z. */
static double precondition(const struct gradients *cg, size_t size)
{
    for (size_t i = 0; i < size; i++)
        cg->z[i] = cg->residual[i] / cg->d_shorter[i];
    return dot(cg->residual, cg->z, size);
}

enum { MOST_ITERATIONS = 5000 };

/* S y = residual, from y = 0. */
static fescue_status schur_solve(const struct gradients *cg, double *y)
{
    size_t size = cg->shorter->lines;
    double rz = precondition(cg, size);
    const double goal = 1e-24 * rz; /* squares: 1e-12 of the right-hand side */
    memset(y, 0, size * sizeof *y);
    memcpy(cg->p, cg->z, size * sizeof *cg->p);
    for (int iteration = 0; rz > goal && iteration < MOST_ITERATIONS; iteration++) {
        schur_apply(cg);
        double curvature = dot(cg->p, cg->q, size), before = rz;
        if (!(curvature > 0)) {
            if (rz <= 1e8 * goal)
                return FESCUE_OK; /* rounding has the last word in a nearly singular system */
            return FAIL(cg->system->context, FESCUE_DEFECT,
                        "the system of row and column effects is not positive definite");
        }
        double step = rz / curvature;
        for (size_t i = 0; i < size; i++) {
            y[i] += step * cg->p[i];
            cg->residual[i] -= step * cg->q[i];
        }
        rz = precondition(cg, size);
        for (size_t i = 0; i < size; i++)
            cg->p[i] = cg->z[i] + rz / before * cg->p[i];
        if (is_cancelled(cg->system->context))
            return FAIL(cg->system->context, FESCUE_STOPPED, "stopped while fitting row and column effects");
    }
    return FESCUE_OK;
}

static fescue_status gradients_solve(const struct two_way *system)
{
    const struct cells *cells = system->cells;
    bool rows_shorter = cells->rows <= cells->columns;
    size_t size = (size_t)cells->rows + cells->columns;
    size_t s = rows_shorter ? 0 : cells->rows, l = rows_shorter ? cells->rows : 0; /* where the sides begin */
    struct arena arena = {0};
    struct gradients cg = {.system = system,
                           .shorter = rows_shorter ? &cells->by_row : &cells->by_column,
                           .longer = rows_shorter ? &cells->by_column : &cells->by_row,
                           .d_shorter = system->diagonal + s,
                           .d_longer = system->diagonal + l};
    double **const vectors[] = {&cg.residual, &cg.z, &cg.p, &cg.q};
    fescue_status status = FESCUE_OK;
    arena_reserve(&arena, cg.longer->lines, sizeof(double));
    for (size_t v = 0; v < sizeof vectors / sizeof *vectors; v++)
        arena_reserve(&arena, cg.shorter->lines, sizeof(double));
    TRY(arena_open(system->context, &arena));
    cg.across = arena_carve(&arena, cg.longer->lines, sizeof(double));
    for (size_t v = 0; v < sizeof vectors / sizeof *vectors; v++)
        *vectors[v] = arena_carve(&arena, cg.shorter->lines, sizeof(double));
    for (size_t c = 0; c < system->count; c++) {
        const double *g = system->rhs + c * size;
        double *y = system->solution + c * size;
        for (size_t i = 0; i < cg.longer->lines; i++)
            cg.across[i] = g[l + i] / cg.d_longer[i];
        lines_gather(system->context,
                     (struct gather){.half = cg.shorter, .from = cg.across, .minus = g + s, .to = cg.residual});
        TRY(schur_solve(&cg, y + s));
        lines_gather(
            system->context,
            (struct gather){.half = cg.longer, .from = y + s, .minus = g + l, .divide = cg.d_longer, .to = y + l});
    }
done:
    arena_close(system->context, &arena);
    return status;
}

/* Without analysis: a line of the longer side makes a clique of those of the shorter side that it sees. Where all
   cliques together have more entries than the whole complement, this is mostly full. */
static bool is_plainly_too_large(const struct cells *cells)
{
    bool by_row = cells->rows >= cells->columns;
    const struct half *longer = by_row ? &cells->by_row : &cells->by_column;
    double shorter = by_row ? cells->columns : cells->rows, full = shorter * shorter / 2, cliques = 0;
    for (uint32_t i = 0; i < longer->lines; i++) {
        double seen = (double)(longer->start[i + 1] - longer->start[i]);
        cliques += seen * seen / 2;
    }
    return cliques >= full && full > direct_most_entries;
}

fescue_status sparse_two_way_solve(fescue_context *context, const struct cells *cells, const double *diagonal,
                                   size_t count, const double *rhs, double *solution)
{
    struct two_way system = {
        .context = context, .cells = cells, .diagonal = diagonal, .count = count, .rhs = rhs, .solution = solution};
    bool solved = false;
    fescue_status status = FESCUE_OK;
    dense_threads_hold();
    if (cells->count <= direct_most_cells && !is_plainly_too_large(cells))
        TRY(direct_solve(&system, &solved));
    if (!solved)
        TRY(gradients_solve(&system));
done:
    return status;
}
