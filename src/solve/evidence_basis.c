/* SPDX-License-Identifier: MIT
 *
 * The exact change of basis between two rounds: step 3 of evidence.c. The product u.v + a + b does not change under
 *
 *     u <- u - mu,  b <- b + mu.v          (mu near the mean of u over rows; b absorbs it)
 *     v <- v - nu,  a <- a + nu.u          (nu near the mean of v over columns)
 *     u <- R u,     v <- R^-T v
 *
 * where each shift is the one that raises the bound most (to the mean itself when there are effects to absorb it, to
 * nothing when there are none), and R is chosen so that the mean of E[uu'] is the identity and that of E[vv'] diagonal:
 * with the Cholesky factor A = LL' of the first and the eigenvectors L'BL = Q diag(w) Q', R = Q'L^-1 and R^-T = Q'L'.
 * Alternating updates move along these directions only slowly; the jump raises the bound at once, and a component that
 * the data do not support shows up as a w near 0.
 *
 * On the regressors g = (factor, 1, effect) of a column both shifts and R^-T are one linear map T, and M <- T M T'. The
 * rows' own moments are left as they are: what follows is that the rows are learnt afresh, from the columns' moments
 * and the rows' prior variances alone. Cost 4 (r+2)^3 a column, columns in parallel.
 */
#include "solve/evidence_internal.h"

#include <math.h>
#include <string.h>

/* Steps towards the best shift, each of which raises the bound; the next change of basis goes on from there. */
#define SHIFT_STEPS 10

size_t evidence_basis_scratch(size_t rank)
{
    return packed_congruence_work(rank + 2);
}

struct basis_job {
    struct evidence *evidence;
    struct evidence_side *side;
};

/* All second moments of a line's regressors, and the number of lines with cells. */
size_t evidence_basis_partial(size_t rank)
{
    return packed_size(rank + 2) + 1;
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

/* Means over the lines with cells: of E[ff'] of the factors f (dense), of f, of E[effect f] and of E[effect^2]. */
struct side_means {
    double lines;
    struct matrix second;
    double *mean, *cross, effect;
};

static void side_means(struct evidence *evidence, struct evidence_side *side, struct side_means *out)
{
    size_t rank = evidence->rank, width = evidence_basis_partial(rank);
    struct basis_job job = {evidence, side};
    double *sum = side->partial + side->half->blocks * width;
    team_run(evidence->context, side->half->blocks, mean_block, &job);
    team_sum(evidence->context, side->partial, side->half->blocks, width, sum);
    out->lines = sum[width - 1];
    for (size_t k = 0; k + 1 < width; k++)
        sum[k] /= out->lines;
    for (size_t k = 0; k < rank; k++) {
        out->mean[k] = sum[packed_size(rank) + k];
        out->cross[k] = sum[packed_size(rank + 1) + k];
        for (size_t l = 0; l <= k; l++)
            MATRIX_AT(out->second, k, l) = MATRIX_AT(out->second, l, k) = sum[packed_size(k) + l];
    }
    out->effect = sum[packed_size(rank + 1) + rank + 1];
}

/* y = Sx for a packed symmetric S. */
static void packed_apply(const double *s, size_t k, const double *x, double *y)
{
    memset(y, 0, k * sizeof *y);
    for (size_t i = 0, at = 0; i < k; i++)
        for (size_t j = 0; j <= i; j++, at++) {
            y[i] += s[at] * x[j];
            if (j < i)
                y[j] += s[at] * x[i];
        }
}

/* x'Sx. */
static double form(struct matrix s, const double *x)
{
    double sum = 0;
    for (size_t k = 0; k < s.rows; k++)
        for (size_t l = 0; l < s.columns; l++)
            sum += x[k] * MATRIX_AT(s, k, l) * x[l];
    return sum;
}

/* The shift s of this side's factors f, the other side's effect taking s.g. With A = mean E[ff'], mu = mean f, and
   B, c, e the other side's means of E[gg'], E[effect g], E[effect^2], the prior's part of the bound is, up to
   constants, -1/2 of lines log D + other lines log E,    D = 1 - 2 s'A^-1 mu + s'A^-1 s,    E = e + 2 s'c + s'Bs (D is
   the ratio of det mean E[(f-s)(f-s)'] to det A). Both logarithms are majorised by their tangents, so that a step is a
   small linear system and never raises the sum: (lines/D A^-1 + other lines/E B) s = lines/D A^-1 mu - other lines/E c
   The means of this side follow; self->mean becomes the shift. */
static void shift(struct evidence *evidence, struct side_means *self, const struct side_means *other)
{
    size_t rank = evidence->rank, packed = packed_size(rank);
    double *inverse = evidence->basis_work, *system = inverse + packed;
    double *pull = system + packed, *s = pull + rank, *image = s + rank;
    double d = 1, e = other->effect;
    for (size_t k = 0, at = 0; k < rank; k++)
        for (size_t l = 0; l <= k; l++, at++)
            system[at] = MATRIX_AT(self->second, k, l);
    packed_cholesky(system, rank);
    packed_inverse(system, rank, inverse);
    packed_apply(inverse, rank, self->mean, pull);
    memset(s, 0, rank * sizeof *s);
    for (int step = 0; step < SHIFT_STEPS && e > 0 && d > 0; step++) {
        double mine = self->lines / d, theirs = other->lines / e;
        for (size_t k = 0, at = 0; k < rank; k++) {
            for (size_t l = 0; l <= k; l++, at++)
                system[at] = mine * inverse[at] + theirs * MATRIX_AT(other->second, k, l);
            s[k] = mine * pull[k] - theirs * other->cross[k];
        }
        packed_cholesky(system, rank);
        packed_solve(system, rank, s);
        packed_apply(inverse, rank, s, image);
        d = 1;
        e = other->effect + form(other->second, s);
        for (size_t k = 0; k < rank; k++) {
            d += s[k] * (image[k] - 2 * pull[k]);
            e += 2 * s[k] * other->cross[k];
        }
    }
    for (size_t k = 0; k < rank; k++)
        for (size_t l = 0; l < rank; l++)
            MATRIX_AT(self->second, k, l) += s[k] * s[l] - s[k] * self->mean[l] - self->mean[k] * s[l];
    memcpy(self->mean, s, rank * sizeof *s);
}

static void map_block(void *opaque, size_t block, size_t worker)
{
    struct basis_job *job = opaque;
    struct evidence *evidence = job->evidence;
    double *work = evidence->scratch + worker * evidence->scratch_size;
    for (size_t line = job->side->half->block[block]; line < job->side->half->block[block + 1]; line++)
        packed_congruence(job->side->moments.data + line * job->side->moments.stride, evidence->rank + 2,
                          evidence->map[0], evidence->map[1], work);
}

/* T for g = (factor, 1, effect): factor' = R (factor - shift), effect' = effect + tilt . factor; and T'. */
static void map_build(struct evidence *evidence, struct matrix turn, const double *shift, const double *tilt)
{
    size_t rank = turn.rows;
    struct matrix map = evidence->map[0];
    matrix_zero(map);
    for (size_t k = 0; k < rank; k++)
        for (size_t l = 0; l < rank; l++) {
            MATRIX_AT(map, k, l) = MATRIX_AT(turn, k, l);
            MATRIX_AT(map, k, rank) -= MATRIX_AT(turn, k, l) * shift[l];
        }
    MATRIX_AT(map, rank, rank) = 1;
    MATRIX_AT(map, rank + 1, rank + 1) = 1;
    for (size_t l = 0; l < rank; l++)
        MATRIX_AT(map, rank + 1, l) = tilt[l];
    for (size_t k = 0; k < rank + 2; k++)
        for (size_t l = 0; l < rank + 2; l++)
            MATRIX_AT(evidence->map[1], l, k) = MATRIX_AT(map, k, l);
}

/* R^-T = Q'L' from A (overwritten by L) and B (overwritten by Q); w is left behind the factor in basis_work. */
static fescue_status rotation(struct evidence *evidence, struct matrix a, struct matrix b, struct matrix room,
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
    matrix_multiply(1, b, false, a, false, 0, room);         /* BL */
    matrix_multiply(1, a, true, room, false, 0, to_columns); /* L'BL */
    for (size_t k = 0; k < rank; k++)
        for (size_t l = 0; l < k; l++)
            MATRIX_AT(to_columns, l, k) = MATRIX_AT(to_columns, k, l) =
                0.5 * (MATRIX_AT(to_columns, l, k) + MATRIX_AT(to_columns, k, l));
    matrix_copy(to_columns, b);
    fescue_status status = dense_eigen(evidence->context, b, w, work); /* b = Q */
    if (status == FESCUE_OK)
        matrix_multiply(1, b, true, a, true, 0, to_columns); /* Q'L' */
    return status;
}

/* After the rows' shift mu, the columns' effect is b + mu.v: its products with v. The rows' effect does not change, but
   u does. */
static void cross_follow(struct side_means *rows, struct side_means *columns, double rows_effect_mean)
{
    for (size_t k = 0; k < rows->second.rows; k++) {
        rows->cross[k] -= rows_effect_mean * rows->mean[k];
        for (size_t l = 0; l < rows->second.rows; l++)
            columns->cross[k] += MATRIX_AT(columns->second, k, l) * rows->mean[l];
    }
}

fescue_status evidence_basis_change(struct evidence *evidence)
{
    size_t rank = evidence->rank;
    struct evidence_side *rows = &evidence->rows, *columns = &evidence->columns;
    struct matrix *small = evidence->small;
    double *at = evidence->shift;
    struct side_means u = {.second = small[0], .mean = at, .cross = at + rank};
    struct side_means v = {.second = small[1], .mean = at + 2 * rank, .cross = at + 3 * rank};
    side_means(evidence, rows, &u);
    double a_mean = rows->partial[rows->half->blocks * evidence_basis_partial(rank) + packed_size(rank + 1) + rank];
    side_means(evidence, columns, &v);
    if (columns->variance[rank] > 0)
        shift(evidence, &u, &v);
    else
        memset(u.mean, 0, rank * sizeof *u.mean);
    cross_follow(&u, &v, a_mean);
    if (rows->variance[rank] > 0)
        shift(evidence, &v, &u);
    else
        memset(v.mean, 0, rank * sizeof *v.mean);
    fescue_status status = rotation(evidence, u.second, v.second, small[2], small[3]);
    if (status != FESCUE_OK)
        return status;
    struct basis_job job = {evidence, columns};
    map_build(evidence, small[3], v.mean, u.mean); /* b <- b + mu.v */
    team_run(evidence->context, columns->half->blocks, map_block, &job);
    const double *w = evidence->basis_work + packed_size(rank);
    for (size_t k = 0; k < rank; k++) {
        rows->variance[k] = 1;
        columns->variance[k] = fmax(w[k], EVIDENCE_VARIANCE_LEAST);
    }
    return FESCUE_OK;
}
