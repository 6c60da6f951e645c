/* SPDX-License-Identifier: MIT
 *
 * A Gaussian field over columns that are near one another, of precision
 *
 *     A = diag(d) + s L        d > 0, s >= 0     L_ij = -(strength of i, j)     L_ii = sum of the strengths of i
 *
 * A is factored by CHOLMOD (Chen, Davis, Hager, Rajamanickam 2008, "Algorithm 887", ACM TOMS 35): the order
 * (approximate minimum degree) and the shape of the factor are found once, sparse_field_factor then makes as many
 * factors of that shape as are wanted, simplicial, L L', in one thread, so that the bits depend on nothing but the
 * numbers.
 *
 *     P     permutation: row p of P A P' is column order[p] of the table
 *     F     lower triangular, F F' = P A P'            Z     (P A P')^-1 where F is not 0
 *
 * Variances: the entries of the inverse at the places of the factor come from the factor alone, last column first
 * (Erisman, Tinney 1975, "On computing certain elements of the inverse of a sparse matrix", eq. 7). With S_j the rows
 * below the diagonal of column j of F,
 *
 *     Z_ij = -(1/F_jj) sum over k in S_j of Z_ik F_kj     i in S_j
 *     Z_jj =  (1/F_jj) (1/F_jj - sum over k in S_j of Z_kj F_kj)
 *
 * in which every Z_ik that is asked for lies at a place of the factor. No dense matrix is made. The trace of s L A^-1
 * needs nothing more, being n - sum of d_j Z_jj.
 *
 * Cost: of a factor and of its Z alike, the sum of |S_j|^2 (n to n^1.5 operations for columns that lie in a plane).
 * CHOLMOD takes its memory from its own allocator, so that it is not counted; after the first factor it takes no more.
 */
#include "numeric/numeric.h"

#include <assert.h>
#include <cholmod.h>
#include <string.h>

struct sparse_field {
    fescue_context *context;
    cholmod_common common;
    cholmod_sparse *matrix; /* lower triangle */
    cholmod_factor *factor;
    cholmod_dense *answer, *room[2];
    int64_t *diagonal_at;       /* where d_j stands in the matrix */
    double *degree, *laplacian; /* sum of strengths of a column; values of L where the matrix has its own */
    double *inverse, *sum;      /* Z, laid out as the factor; of a row of the column in hand */
    double *weight;             /* F_kj of a row of the column in hand, 0 elsewhere */
    size_t size, entries;
};

static fescue_status field_result(const struct sparse_field *field)
{
    switch (field->common.status) {
    case CHOLMOD_OK:
    case CHOLMOD_DSMALL:
        return FESCUE_OK;
    case CHOLMOD_OUT_OF_MEMORY:
    case CHOLMOD_TOO_LARGE:
        return FAIL(field->context, FESCUE_NO_MEMORY, "the system of near columns does not fit into memory");
    case CHOLMOD_NOT_POSDEF:
        return FAIL(field->context, FESCUE_DEFECT, "the system of near columns is not positive definite");
    default:
        return FAIL(field->context, FESCUE_DEFECT, "CHOLMOD gave up (%d)", field->common.status);
    }
}

/* The lower triangle of L, column by column; the pairs come by their greater column, so a column's rows ascend. */
static void laplacian_fill(struct sparse_field *field, const struct nearness *near)
{
    int64_t *start = field->matrix->p, *index = field->matrix->i;
    size_t size = field->size;
    memset(start, 0, (size + 1) * sizeof *start);
    for (uint64_t k = 0; k < near->count; k++) {
        start[near->low[k] + 1]++;
        field->degree[near->low[k]] += near->strength[k];
        field->degree[near->high[k]] += near->strength[k];
    }
    for (size_t j = 0; j < size; j++)
        start[j + 1] += start[j] + 1;
    for (size_t j = 0; j < size; j++) {
        field->diagonal_at[j] = start[j];
        index[start[j]] = (int64_t)j;
        field->laplacian[start[j]] = field->degree[j];
    }
    for (uint64_t k = 0; k < near->count; k++) {
        int64_t at = ++field->diagonal_at[near->low[k]]; /* the last of the column that was filled */
        index[at] = near->high[k];
        field->laplacian[at] = -near->strength[k];
    }
    for (size_t j = 0; j < size; j++)
        field->diagonal_at[j] = start[j];
}

static void matrix_write(struct sparse_field *field, const double *diagonal, double strength)
{
    double *value = field->matrix->x;
    for (size_t k = 0; k < field->entries; k++)
        value[k] = strength * field->laplacian[k];
    for (size_t j = 0; j < field->size; j++)
        value[field->diagonal_at[j]] += diagonal[j];
}

/* The order, and the shape of the factor, which the first factor settles. */
static fescue_status field_analyse(struct sparse_field *field)
{
    cholmod_common *common = &field->common;
    fescue_status status;
    common->print = 0;
    common->supernodal = CHOLMOD_SIMPLICIAL;
    common->final_ll = 1;
    common->final_pack = 1;
    common->final_monotonic = 1;
    common->nmethods = 1;
    common->method[0].ordering = CHOLMOD_AMD;
    for (size_t j = 0; j < field->size; j++)
        field->sum[j] = 1;
    matrix_write(field, field->sum, 1);
    field->factor = cholmod_l_analyze(field->matrix, common);
    TRY(field_result(field));
    cholmod_l_factorize(field->matrix, field->factor, common);
    TRY(field_result(field));
    assert(!field->factor->is_super && field->factor->is_ll);
done:
    return status;
}

fescue_status sparse_field_create(fescue_context *context, const struct nearness *near, struct sparse_field **out)
{
    struct sparse_field *field = NULL;
    size_t size = near->columns, entries = size + (size_t)near->count;
    fescue_status status;
    *out = NULL;
    TRY(TAKE(context, 1, &field));
    field->context = context;
    field->size = size;
    field->entries = entries;
    cholmod_l_start(&field->common);
    TRY(TAKE(context, size, &field->diagonal_at));
    TRY(TAKE(context, size, &field->degree));
    TRY(TAKE(context, entries, &field->laplacian));
    TRY(TAKE(context, size, &field->sum));
    TRY(TAKE(context, size, &field->weight));
    field->matrix = cholmod_l_allocate_sparse(size, size, entries, 1, 1, -1, CHOLMOD_REAL, &field->common);
    TRY(field_result(field));
    laplacian_fill(field, near);
    TRY(field_analyse(field));
    TRY(TAKE(context, field->factor->nzmax, &field->inverse));
    *out = field;
done:
    if (status != FESCUE_OK)
        sparse_field_destroy(context, &field);
    return status;
}

void sparse_field_destroy(fescue_context *context, struct sparse_field **pointer)
{
    struct sparse_field *field = *pointer;
    if (field == NULL)
        return;
    GIVE(context, &field->diagonal_at);
    GIVE(context, &field->degree);
    GIVE(context, &field->laplacian);
    GIVE(context, &field->inverse);
    GIVE(context, &field->sum);
    GIVE(context, &field->weight);
    cholmod_l_free_dense(&field->answer, &field->common);
    cholmod_l_free_dense(&field->room[0], &field->common);
    cholmod_l_free_dense(&field->room[1], &field->common);
    cholmod_l_free_factor(&field->factor, &field->common);
    cholmod_l_free_sparse(&field->matrix, &field->common);
    cholmod_l_finish(&field->common);
    GIVE(context, pointer);
}

fescue_status sparse_field_factor(struct sparse_field *field, const double *diagonal, double strength)
{
    matrix_write(field, diagonal, strength);
    cholmod_l_factorize(field->matrix, field->factor, &field->common);
    return field_result(field);
}

fescue_status sparse_field_solve(struct sparse_field *field, const double *rhs, double *solution)
{
    size_t size = field->size;
    cholmod_dense side = {.nrow = size,
                          .ncol = 1,
                          .nzmax = size,
                          .d = size,
                          .x = (void *)(uintptr_t)rhs, /* only read */
                          .xtype = CHOLMOD_REAL,
                          .dtype = CHOLMOD_DOUBLE};
    cholmod_l_solve2(CHOLMOD_A, field->factor, &side, NULL, &field->answer, NULL, &field->room[0], &field->room[1],
                     &field->common);
    fescue_status status = field_result(field);
    if (status == FESCUE_OK)
        memcpy(solution, field->answer->x, size * sizeof *solution);
    return status;
}

double sparse_field_energy(const struct sparse_field *field, const double *x)
{
    const int64_t *start = field->matrix->p, *index = field->matrix->i;
    double sum = 0;
    for (size_t j = 0; j < field->size; j++)
        for (int64_t k = start[j] + 1; k < start[j + 1]; k++) {
            double apart = x[j] - x[index[k]];
            sum -= field->laplacian[k] * apart * apart;
        }
    return sum;
}

/* Column j of Z from those behind it. */
static void inverse_column(struct sparse_field *field, const int64_t *start, const int64_t *index, const double *value,
                           int64_t j)
{
    double *inverse = field->inverse, *sum = field->sum, *weight = field->weight;
    int64_t first = start[j] + 1, end = start[j + 1];
    double pivot = 1 / value[start[j]], rest = 0;
    for (int64_t k = first; k < end; k++) {
        sum[index[k]] = 0;
        weight[index[k]] = value[k];
    }
    for (int64_t k = first; k < end; k++) {
        int64_t column = index[k];
        double own = value[k], across = 0;
        sum[column] += inverse[start[column]] * own;
        for (int64_t l = start[column] + 1; l < start[column + 1]; l++) {
            sum[index[l]] += inverse[l] * own; /* rows that are not of S_j are never read */
            across += inverse[l] * weight[index[l]];
        }
        sum[column] += across;
    }
    for (int64_t k = first; k < end; k++) {
        inverse[k] = -pivot * sum[index[k]];
        rest += inverse[k] * value[k];
        weight[index[k]] = 0;
    }
    inverse[start[j]] = pivot * (pivot - rest);
}

void sparse_field_variances(struct sparse_field *field, double *variance)
{
    const int64_t *start = field->factor->p, *index = field->factor->i, *order = field->factor->Perm;
    for (size_t j = field->size; j-- > 0;)
        inverse_column(field, start, index, field->factor->x, (int64_t)j);
    for (size_t j = 0; j < field->size; j++)
        variance[order[j]] = field->inverse[start[j]];
}
