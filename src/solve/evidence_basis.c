/* SPDX-License-Identifier: MIT
 *
 * The exact change of basis between two rounds: step 3 of evidence.c. The product u.v + a + b does not change under
 *
 *     u <- u - mu,  b <- b + mu.v          (mu the mean of u over rows; b absorbs it)
 *     v <- v - nu,  a <- a + nu.u          (nu the mean of v over columns)
 *     u <- R u,     v <- R^-T v
 *
 * and R is chosen so that the mean of E[uu'] is the identity and that of E[vv'] diagonal: with the Cholesky factor
 * A = LL' of the first and the eigenvectors L'BL = Q diag(w) Q', R = Q'L^-1 and R^-T = Q'L'. Alternating updates move
 * along these directions only slowly; the jump raises the bound at once, and a component that the data do not support
 * shows up as a w near 0.
 *
 * On the regressors g = (factor, 1, effect) of a line both shifts and R are one linear map T, and M <- T M T'. Cost
 * 2 (r+2)^3 a line, lines in parallel.
 */
#include "solve/evidence_internal.h"

#include <float.h>
#include <string.h>

size_t evidence_basis_scratch(size_t rank)
{
    size_t d = rank + 2;
    return 2 * d * d;
}

struct basis_job {
    struct evidence *evidence;
    struct evidence_side *side;
    const double *map; /* d x d */
};

/* Second moments and means of the factors (rows 0 .. r of the triangle), and the number of lines with cells. */
size_t evidence_basis_partial(size_t rank)
{
    return packed_size(rank + 1) + 1;
}

static void mean_block(void *opaque, size_t block, size_t worker)
{
    (void)worker;
    struct basis_job *job = opaque;
    const struct evidence_side *side = job->side;
    size_t width = evidence_basis_partial(job->evidence->rank);
    double *sum = side->partial + block * width;
    memset(sum, 0, width * sizeof *sum);
    for (size_t line = side->half->block[block]; line < side->half->block[block + 1]; line++) {
        if (side->half->start[line] == side->half->start[line + 1])
            continue;
        const double *moment = side->moments.data + line * side->moments.stride;
        for (size_t k = 0; k + 1 < width; k++)
            sum[k] += moment[k];
        sum[width - 1] += 1;
    }
}

/* mean[0..r): of the factors; second: r x r dense, of the factors centred on `mean` when `centre`. */
static void side_means(struct evidence *evidence, struct evidence_side *side, bool centre, double *mean,
                       struct matrix second)
{
    size_t rank = evidence->rank, width = evidence_basis_partial(rank);
    struct basis_job job = {evidence, side, NULL};
    double *sum = side->partial + side->half->blocks * width;
    team_run(evidence->context, side->half->blocks, mean_block, &job);
    team_sum(evidence->context, side->partial, side->half->blocks, width, sum);
    double share = 1 / sum[width - 1];
    for (size_t k = 0; k < rank; k++)
        mean[k] = centre ? share * sum[packed_size(rank) + k] : 0;
    for (size_t k = 0; k < rank; k++)
        for (size_t l = 0; l <= k; l++) {
            double entry = share * sum[packed_size(k) + l] - mean[k] * mean[l];
            MATRIX_AT(second, k, l) = MATRIX_AT(second, l, k) = entry;
        }
}

static void map_block(void *opaque, size_t block, size_t worker)
{
    struct basis_job *job = opaque;
    struct evidence *evidence = job->evidence;
    size_t d = evidence->rank + 2;
    double *full = evidence->scratch + worker * evidence->scratch_size, *half = full + d * d;
    for (size_t line = job->side->half->block[block]; line < job->side->half->block[block + 1]; line++) {
        double *moment = job->side->moments.data + line * job->side->moments.stride;
        for (size_t k = 0, at = 0; k < d; k++)
            for (size_t l = 0; l <= k; l++, at++)
                full[k * d + l] = full[l * d + k] = moment[at];
        for (size_t k = 0; k < d; k++) { /* half = T M */
            memset(half + k * d, 0, d * sizeof *half);
            for (size_t p = 0; p < d; p++)
                for (size_t l = 0; l < d; l++)
                    half[k * d + l] += job->map[k * d + p] * full[p * d + l];
        }
        for (size_t k = 0, at = 0; k < d; k++) /* T M T' */
            for (size_t l = 0; l <= k; l++, at++) {
                double sum = 0;
                for (size_t p = 0; p < d; p++)
                    sum += half[k * d + p] * job->map[l * d + p];
                moment[at] = sum;
            }
    }
}

/* T for g = (factor, 1, effect): factor' = R (factor - shift), effect' = effect + tilt . (factor - back). */
static void map_build(struct matrix rotation, const double *shift, const double *tilt, const double *back, double *map)
{
    size_t rank = rotation.rows, d = rank + 2;
    memset(map, 0, d * d * sizeof *map);
    for (size_t k = 0; k < rank; k++)
        for (size_t l = 0; l < rank; l++) {
            map[k * d + l] = MATRIX_AT(rotation, k, l);
            map[k * d + rank] -= MATRIX_AT(rotation, k, l) * shift[l];
        }
    map[rank * d + rank] = 1;
    map[(rank + 1) * d + rank + 1] = 1;
    for (size_t l = 0; l < rank; l++) {
        map[(rank + 1) * d + l] = tilt[l];
        map[(rank + 1) * d + rank] -= tilt[l] * back[l];
    }
}

/* R = Q'L^-1 and R^-T = Q'L' from A (overwritten by L) and B (overwritten by Q); w is left at the front of work. */
static fescue_status rotations(struct evidence *evidence, struct matrix a, struct matrix b, struct matrix to_rows,
                               struct matrix to_columns)
{
    size_t rank = evidence->rank;
    double *factor = evidence->basis_work, *w = factor + packed_size(rank), *work = w + rank;
    for (size_t k = 0; k < rank; k++)
        for (size_t l = 0; l <= k; l++)
            factor[packed_size(k) + l] = MATRIX_AT(a, k, l);
    packed_cholesky(factor, rank);
    matrix_zero(a);
    for (size_t k = 0; k < rank; k++)
        for (size_t l = 0; l <= k; l++)
            MATRIX_AT(a, k, l) = factor[packed_size(k) + l];
    matrix_multiply(1, b, false, a, false, 0, to_rows);         /* BL */
    matrix_multiply(1, a, true, to_rows, false, 0, to_columns); /* L'BL */
    for (size_t k = 0; k < rank; k++)
        for (size_t l = 0; l < k; l++)
            MATRIX_AT(to_columns, l, k) = MATRIX_AT(to_columns, k, l) =
                0.5 * (MATRIX_AT(to_columns, l, k) + MATRIX_AT(to_columns, k, l));
    matrix_copy(to_columns, b);
    fescue_status status = dense_eigen(evidence->context, b, w, work); /* b = Q */
    if (status != FESCUE_OK)
        return status;
    matrix_multiply(1, b, true, a, true, 0, to_columns); /* Q'L' */
    for (size_t k = 0; k < rank; k++) {                  /* row k of Q'L^-1: solve L' x = q_k */
        for (size_t l = rank; l-- > 0;) {
            double sum = MATRIX_AT(b, l, k);
            for (size_t p = l + 1; p < rank; p++)
                sum -= MATRIX_AT(a, p, l) * MATRIX_AT(to_rows, k, p);
            MATRIX_AT(to_rows, k, l) = sum / MATRIX_AT(a, l, l);
        }
    }
    return FESCUE_OK;
}

fescue_status evidence_basis_change(struct evidence *evidence)
{
    size_t rank = evidence->rank;
    struct evidence_side *rows = &evidence->rows, *columns = &evidence->columns;
    double *mu = evidence->shift, *nu = mu + rank, *zero = nu + rank;
    struct matrix *a = evidence->small, *b = a + 1, *to_rows = a + 2, *to_columns = a + 3;
    bool to_b = columns->variance[rank] > 0, to_a = rows->variance[rank] > 0;
    side_means(evidence, rows, to_b, mu, *a);
    side_means(evidence, columns, to_a, nu, *b);
    fescue_status status = rotations(evidence, *a, *b, *to_rows, *to_columns);
    if (status != FESCUE_OK)
        return status;
    struct basis_job job = {evidence, rows, evidence->map};
    map_build(*to_rows, mu, nu, mu, evidence->map); /* a <- a + nu.(u - mu) */
    team_run(evidence->context, rows->half->blocks, map_block, &job);
    job.side = columns;
    map_build(*to_columns, nu, mu, zero, evidence->map); /* b <- b + mu.v */
    team_run(evidence->context, columns->half->blocks, map_block, &job);
    const double *w = evidence->basis_work + packed_size(rank);
    for (size_t k = 0; k < rank; k++) {
        rows->variance[k] = 1;
        columns->variance[k] = w[k] > 0 ? w[k] : DBL_MIN;
    }
    return FESCUE_OK;
}
