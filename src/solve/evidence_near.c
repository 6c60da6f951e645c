/* SPDX-License-Identifier: MIT
 *
 * Columns that are near one another: every component k of their loadings, and their effects, are a Gaussian field
 *
 *     (v_1k .. v_nk) ~ N(0, P_k^-1)     P_k = (I + s_k L) / sv_k     L the Laplacian of the graph of near columns
 *
 * so that a column with few cells, or none, goes with its neighbours as far as the data say that neighbours are alike.
 *
 *     j, k         column; component, the effect being the last
 *     m, C         posterior mean and covariance of a column                    (evidence_side.c)
 *     tau, mu      what the field says of v_jk without the cells of column j: precision, mean
 *     lambda, eta  what the cells of column j say of v_jk: precision, and that times the mean
 *
 * The exact posterior of all loadings has order n (r + 1) and is not factorised. Two approximations that share their
 * margins stand for it: the columns', full across components and independent of one another, and the fields', full
 * across columns and independent across components. Each tells the other about v_jk what it knows beyond what it was
 * told (Minka 2001, "Expectation propagation for approximate Bayesian inference", of which this is the Gaussian case,
 * where it is belief propagation). One round, before the columns are learnt again:
 *
 *     1  lambda = 1/C_kk - tau          eta = m/C_kk - tau mu
 *     2  A = diag(lambda) + P_k         mean of the field x = A^-1 eta, variances Z_jj of A^-1    (sparse_field.c)
 *     3  tau = 1/Z_jj - lambda          mu tau = x/Z_jj - eta
 *
 * and the columns are learnt with prior precisions tau and means mu. Where it comes to rest, means are those of the
 * exact posterior (Weiss, Freeman 2001, "Correctness of belief propagation in Gaussian graphical models of arbitrary
 * topology"); variances are exact for one component, or without neighbours, and else leave out what goes around through
 * other components of other columns. tau and lambda cannot be negative, but by rounding.
 *
 * With 1/sv and s/sv the precisions of the two terms, shares gamma of what is known fall to each (MacKay 1992,
 * "Bayesian interpolation", eq. 4.8 for each term), P0 = (I + s L)^-1:
 *
 *     1/sv = gamma_1 / x'x      gamma_1 = tr P0 - tr Z / sv
 *     s/sv = gamma_2 / x'Lx     gamma_2 = sum (lambda + 1/sv) Z_jj - tr P0
 *
 * where the second is s (tr L P0 - tr L Z / sv), no trace of L being needed. Neither moves by more than a factor of
 * four a round. Where neighbours are not alike, s falls to its least.
 *
 * The change of basis stops when the fields begin: s_k belongs to its component. They begin with the chain of the steps
 * where there is one, else when a few changes of basis have been made.
 *
 * Cost a round: for every component two factors of order n and the entries of their inverses at the places of the
 * factor. One thread; bits depend on nothing but the numbers.
 */
#include "solve/evidence_internal.h"

#include <math.h>
#include <string.h>

enum { NEAR_ROUND = 4 };
/* Strengths between which s is searched for, and the first: a column counts for as much as its neighbours. */
static const double strength_least = 1e-4, strength_most = 1e5, strength_first = 1;
/* Largest change of a precision in a round. */
static const double change_most = 4;

static void near_reserve(struct arena *arena, size_t columns, size_t free)
{
    arena_reserve(arena, 2 * free, sizeof(double));
    arena_reserve(arena, 5 * columns, sizeof(double));
    arena_reserve(arena, 2 * columns * free, sizeof(double));
}

static void near_carve(struct evidence *evidence, struct evidence_near *near)
{
    struct arena *arena = &near->arena;
    size_t columns = near->columns, free = evidence->rank + 1;
    near->scale = arena_carve(arena, 2 * free, sizeof(double));
    near->strength = near->scale + free;
    near->precision = arena_carve(arena, 5 * columns, sizeof(double));
    near->rhs = near->precision + columns;
    near->mean = near->rhs + columns;
    near->variance = near->mean + columns;
    near->factor = near->variance + columns;
    evidence->columns.own = arena_carve(arena, 2 * columns * free, sizeof(double));
    evidence->columns.pull = evidence->columns.own + columns * free;
}

fescue_status evidence_near_open(struct evidence *evidence, const struct evidence_request *request)
{
    fescue_context *context = evidence->context;
    struct evidence_near *near = NULL;
    fescue_status status;
    TRY(TAKE(context, 1, &near));
    evidence->near = near;
    near->columns = evidence->columns.half->lines;
    TRY(sparse_field_create(context, request->near, &near->field));
    near_reserve(&near->arena, near->columns, evidence->rank + 1);
    TRY(arena_open(context, &near->arena));
    near_carve(evidence, near);
done:
    return status;
}

void evidence_near_close(struct evidence *evidence)
{
    if (evidence->near == NULL)
        return;
    sparse_field_destroy(evidence->context, &evidence->near->field);
    arena_close(evidence->context, &evidence->near->arena);
    GIVE(evidence->context, &evidence->near);
}

/* The columns' priors are told apart in name only: all alike, around 0. */
static void priors_equal(struct evidence *evidence)
{
    struct evidence_side *side = &evidence->columns;
    size_t free = evidence->rank + 1;
    for (size_t j = 0; j < evidence->near->columns; j++)
        for (size_t k = 0; k < free; k++) {
            side->own[j * free + k] = side->variance[k] > 0 ? 1 / side->variance[k] : EVIDENCE_PRECISION_OFF;
            side->pull[j * free + k] = 0;
        }
}

void evidence_near_begin(struct evidence *evidence, const struct model *start)
{
    struct evidence_near *near = evidence->near;
    for (size_t k = 0; k <= evidence->rank; k++) {
        double known = k < evidence->rank ? start->near.components : start->near.effect;
        near->scale[k] = evidence->columns.variance[k];
        near->strength[k] = start->near.is_there ? fmax(known, strength_least) : strength_first;
    }
    priors_equal(evidence);
}

void evidence_near_round(struct evidence *evidence, uint64_t round)
{
    struct evidence_near *near = evidence->near;
    if (near->is_on)
        return;
    near->is_on = evidence->time != NULL ? evidence->time->chain_on : round >= NEAR_ROUND;
    memcpy(near->scale, evidence->columns.variance, (evidence->rank + 1) * sizeof *near->scale);
    priors_equal(evidence);
}

/* Step 1: what the cells say, into precision (lambda) and rhs (eta). */
static void sites_write(struct evidence *evidence, size_t k)
{
    struct evidence_near *near = evidence->near;
    const struct evidence_side *side = &evidence->columns;
    size_t rank = evidence->rank, free = rank + 1, row = k < rank ? k : rank + 1;
    size_t square = packed_size(row) + row, first = k < rank ? packed_size(rank) + k : packed_size(row) + rank;
    for (size_t j = 0; j < near->columns; j++) {
        const double *moment = side->moments.data + j * side->moments.stride;
        double own = side->own[j * free + k], mean = moment[first], variance = moment[square] - mean * mean;
        double lambda = variance > 0 ? 1 / variance - own : 0;
        bool says = lambda > 0 && side->half->start[j + 1] > side->half->start[j];
        near->precision[j] = says ? lambda : 0;
        near->rhs[j] = says ? mean / variance - side->pull[j * free + k] : 0;
    }
}

/* Step 3, and the mean variance of the field before anything is seen. */
static void priors_write(struct evidence *evidence, size_t k, double before)
{
    struct evidence_near *near = evidence->near;
    struct evidence_side *side = &evidence->columns;
    size_t free = evidence->rank + 1;
    for (size_t j = 0; j < near->columns; j++) {
        double all = 1 / near->variance[j], least = 1e-12 * all;
        side->own[j * free + k] = fmax(all - near->precision[j], least);
        side->pull[j * free + k] = all * near->mean[j] - near->rhs[j];
    }
    side->variance[k] = fmax(near->scale[k] * before / (double)near->columns, EVIDENCE_VARIANCE_LEAST);
}

static double limit(double x, double least, double most)
{
    return fmin(fmax(x, least), most);
}

/* The laws from the field's posterior; free_trace: tr P0. */
static void law_learn(struct evidence_near *near, size_t k, double free_trace)
{
    double square = 0, trace = 0, known = 0, energy = sparse_field_energy(near->field, near->mean);
    double plain = 1 / near->scale[k], tied = near->strength[k] / near->scale[k];
    for (size_t j = 0; j < near->columns; j++) {
        square += near->mean[j] * near->mean[j];
        trace += near->variance[j];
        known += near->precision[j] * near->variance[j];
    }
    double first = fmax(free_trace - plain * trace, 0);
    double second = fmax(known - first, 0);
    double plain_next = square > 0 ? first / square : INFINITY, tied_next = energy > 0 ? second / energy : INFINITY;
    plain_next = limit(plain_next, plain / change_most, plain * change_most);
    tied_next = limit(tied_next, tied / change_most, tied * change_most);
    near->scale[k] = fmax(1 / plain_next, EVIDENCE_VARIANCE_LEAST);
    near->strength[k] = limit(tied_next / plain_next, strength_least, strength_most);
}

static fescue_status component_update(struct evidence *evidence, size_t k)
{
    struct evidence_near *near = evidence->near;
    double scale = near->scale[k], strength = near->strength[k], free_trace = 0;
    fescue_status status;
    sites_write(evidence, k);
    for (size_t j = 0; j < near->columns; j++)
        near->factor[j] = 1;
    TRY(sparse_field_factor(near->field, near->factor, strength));
    sparse_field_variances(near->field, near->variance);
    for (size_t j = 0; j < near->columns; j++) {
        free_trace += near->variance[j];
        near->factor[j] = 1 + scale * near->precision[j]; /* A times sv: of a size with P0 */
    }
    TRY(sparse_field_factor(near->field, near->factor, strength));
    TRY(sparse_field_solve(near->field, near->rhs, near->mean));
    sparse_field_variances(near->field, near->variance);
    for (size_t j = 0; j < near->columns; j++) {
        near->mean[j] *= scale;
        near->variance[j] *= scale;
    }
    priors_write(evidence, k, free_trace);
    law_learn(near, k, free_trace);
done:
    return status;
}

fescue_status evidence_near_update(struct evidence *evidence)
{
    fescue_status status = FESCUE_OK;
    for (size_t k = 0; k <= evidence->rank; k++)
        if (evidence->columns.variance[k] > 0)
            TRY(component_update(evidence, k));
done:
    return status;
}

void evidence_near_part(const struct evidence *evidence, struct near_part *part)
{
    const struct evidence_near *near = evidence->near;
    const double *variance = evidence->columns.variance;
    double sum = 0, size = 0;
    for (size_t k = 0; k < evidence->rank; k++) {
        sum += variance[k] * near->strength[k];
        size += variance[k];
    }
    *part = (struct near_part){near->is_on, size > 0 ? sum / size : 0, near->strength[evidence->rank]};
    if (!(variance[evidence->rank] > 0))
        part->effect = 0;
}
