/* SPDX-License-Identifier: MIT
 *
 * Gradient steps over the subspace of the shorter side, one for each batch of lines of the longer side, with steps by
 * rule.
 *
 *     minimise  F(U) = 1/n sum over lines j of  min over w of 1/2 |U_j w - t_j|^2 + 1/2 lambda |w|^2,   n lines
 *
 *     symbol   name            shape
 *     U        basis           short x r
 *     B, b     batch           its lines, their number
 *     w_j      weights         r, the best of line j at U
 *     G        gradient        mean over j in B of (U_j w_j - t_j) w_j', short x r; the part through w_j vanishes
 *     H        moment          r x r, mean of w w'
 *     p_i                      part of all n lines in which line i of the shorter side is seen
 *     L_i                      p_i + (r + 2) / b
 *
 * One step:
 *     U <- retraction (QR) of U - D,   D = the projection of a_i (G H^-1)_i, line by line, onto the tangents at U.
 *
 * The step a_i. In the coordinates z = H^-1/2 w, with E[z z'] = I, line i of U has on the batch the curvature A = 1/b
 * sum of z z' over the lines in which it is seen: E[A] = p_i I, and for normal z  E[A^2] = (p_i^2 + p_i (r + 2) / b) I
 * but for terms of order p_i^2 / b. A step a_i A shrinks the mean square of an error by 1 - 2 a_i p_i + a_i^2 p_i L_i:
 * most for
 *     a_i = 1 / L_i,
 * which is short where the batch has few cells of the line for r unknowns, and Newton's 1 / p_i where it has many. So
 * lines with few and with many cells, flat and steep spectra take the same rule, and nothing is set by hand. The
 * batch is such that a line of average share has r/2 cells in it: smaller batches make more but shorter steps.
 *
 * Shrinking steps (grassmann_stochastic.c): F is close to strongly convex near its minimum, in these coordinates with
 * a constant of p_i for weights that are held and somewhat less for such that follow; half of p_i is assumed. Then
 *     a_i = min(1 / L_i, 2 / (p_i/2 (t + 1))),
 * t the number of steps from the middle of the first pass on (before it U is in no neighbourhood of a minimum), and the
 * mean of the iterates with weights growing like t, along geodesics (PMLR 49 (2016), 1617-1638; curvature is not
 * negative on the Grassmann manifold, so zeta = 1).
 *
 * Variance reduction (grassmann_variance_reduced.c): U~ the basis when the pass began, G~ its gradient over all lines,
 *     G <- G_B(U) - G_B(U~) + G~,
 * with U turned to lie nearest to U~ among the bases of its subspace (the polar factor of U~'U), after which gradients
 * at one are transported to the other by projection. Its noise falls with the distance from U~, so steps need not
 * shrink. w_j at U~ is known from the evaluation that measured it.
 *
 * Either way the pass ends in the mean of the iterates of its second half. H is that of the last evaluation, over all
 * lines; in the first pass of a cold run a running mean of the batches' own, as U changes beyond recognition there.
 *
 * Cost a pass: cells (r^2 / 2 + 4 r), 8 r with variance reduction, and for each of its steps O(short r^2), most of it
 * a QR, and in the second half an SVD for the mean. Workspace: four matrices of the shorter side. Parallel over lines
 * for the weights, over bands of the shorter side for G (batches.c), over its lines for all that follows.
 */
#include "solve/stream_internal.h"

#include <math.h>
#include <string.h>

static const double cells_a_rank = 0.5; /* of an average line of the shorter side in a batch, over r */
static const double lines_a_rank = 2;   /* lines of a batch over r, at least: for H of the batch */
static const double convexity = 0.5;    /* over p_i */
static const double whole_part = 0.5;   /* of the first pass, before steps shrink */
static const double mean_part = 0.5;    /* of a pass, before the mean is taken */
/* H of the first pass: weight of a batch in the running mean. The last five count, enough for many times r lines. */
static const double moment_share = 0.2;

/* ---- memory --------------------------------------------------------------------------------------------------------
 */

size_t minibatch_width(const struct field *field, size_t rank)
{
    const struct cells *target = &field->problem->target;
    double shorter = fmin(target->rows, target->columns), longer = fmax(target->rows, target->columns);
    double seen = target->count == 0 ? 1 : (double)target->count / (shorter * longer);
    double width = fmax(ceil(cells_a_rank * (double)rank / seen), lines_a_rank * (double)rank);
    return (size_t)fmin(width, longer);
}

void minibatch_reserve(struct arena *arena, const struct field *field, size_t rank)
{
    const struct cells *target = &field->problem->target;
    size_t shorter = target->rows <= target->columns ? target->rows : target->columns;
    for (int k = 0; k < 4; k++)
        matrix_reserve(arena, shorter, rank);
    for (int k = 0; k < 2; k++)
        matrix_reserve(arena, rank, rank);
    moment_reserve(arena, rank);
    arena_reserve(arena, rank, sizeof(double));
}

void minibatch_carve(struct stream *stream)
{
    struct minibatch *own = stream->own;
    struct arena *arena = &stream->arena;
    size_t shorter = stream->projection.by_short->lines, rank = stream->projection.rank;
    struct matrix *const tall[] = {&own->base, &own->base_gradient, &own->gradient, &own->mean};
    struct matrix *const small[] = {&own->core, &own->core_right};
    for (int k = 0; k < 4; k++)
        *tall[k] = matrix_carve(arena, shorter, rank);
    for (int k = 0; k < 2; k++)
        *small[k] = matrix_carve(arena, rank, rank);
    moment_carve(arena, rank, &own->moment);
    own->spectrum = arena_carve(arena, rank, sizeof(double));
}

/* ---- G -------------------------------------------------------------------------------------------------------------
 */

static fescue_context *context_of(const struct stream *stream)
{
    return stream->field->problem->context;
}

/* g += sign (u.w - x) w */
static void cell_add(const double *u, const double *w, double x, double sign, double *g, size_t rank)
{
    double residual = -x;
    for (size_t k = 0; k < rank; k++)
        residual += u[k] * w[k];
    residual *= sign;
    for (size_t k = 0; k < rank; k++)
        g[k] += residual * w[k];
}

struct gradient_job {
    struct stream *stream;
    bool reduced;
};

static void band_add(void *argument, size_t band, size_t worker)
{
    const struct gradient_job *job = argument;
    const struct stream *stream = job->stream;
    const struct minibatch *own = stream->own;
    const struct batches *b = &stream->batches;
    struct line_range lines = batch_band(b, band);
    (void)worker;
    for (uint32_t i = lines.first; i < lines.end; i++)
        memset(&MATRIX_AT(own->gradient, i, 0), 0, b->rank * sizeof(double));
    for (size_t k = 0; k < b->count; k++) {
        struct cell_range cells = batch_cells(b, band, k);
        const double *w = &MATRIX_AT(b->weights, k, 0);
        const double *base_w = &MATRIX_AT(stream->projection.weights, batch_line(b, k), 0);
        for (uint64_t c = cells.from; c < cells.to; c++) {
            uint32_t i = b->by_long->across[c];
            double x = cells_value(&stream->field->problem->target, b->by_long, c);
            double *g = &MATRIX_AT(own->gradient, i, 0);
            cell_add(&MATRIX_AT(stream->projection.basis, i, 0), w, x, 1, g, b->rank);
            if (job->reduced)
                cell_add(&MATRIX_AT(own->base, i, 0), base_w, x, -1, g, b->rank);
        }
    }
}

/* b G of the batch. */
static void gradient_sum(struct stream *stream, bool reduced)
{
    struct minibatch *own = stream->own;
    struct gradient_job job = {.stream = stream, .reduced = reduced};
    batch_bands_run(&stream->batches, band_add, &job);
    if (reduced)
        tall_add(context_of(stream), (double)stream->batches.count, own->base_gradient, 1, own->gradient);
}

/* ---- a step --------------------------------------------------------------------------------------------------------
 */

/* a_i of a line that is seen in the part `seen` of all; t = 0: steps do not shrink yet. */
static double step_of(double seen, size_t rank, size_t lines, uint64_t t)
{
    double whole = step_smooth(seen + ((double)rank + 2) / (double)lines);
    return t == 0 || seen == 0 ? whole : fmin(whole, step_strongly_convex(convexity * seen, t));
}

struct scale_job {
    struct stream *stream;
    uint64_t t;
};

static void block_scale(void *argument, size_t block, size_t worker)
{
    const struct scale_job *job = argument;
    const struct minibatch *own = job->stream->own;
    const struct batches *b = &job->stream->batches;
    const struct half *half = b->by_short;
    (void)worker;
    for (uint32_t i = half->block[block]; i < half->block[block + 1]; i++) {
        double seen = (double)(half->start[i + 1] - half->start[i]) / (double)half->length;
        double step = -step_of(seen, b->rank, b->count, job->t) / (double)b->count;
        double *g = &MATRIX_AT(own->gradient, i, 0);
        packed_solve(own->moment.factor, b->rank, g);
        for (size_t k = 0; k < b->rank; k++)
            g[k] *= step;
    }
}

/* The gradient becomes -D, still to be projected. */
static void step_scale(struct stream *stream, uint64_t t)
{
    struct scale_job job = {stream, t};
    team_run(context_of(stream), stream->batches.by_short->blocks, block_scale, &job);
}

/* U <- U Z A' where U~'U = A S Z': nearest to U~. */
static fescue_status basis_turn(struct stream *stream)
{
    struct minibatch *own = stream->own;
    struct matrix basis = stream->projection.basis;
    fescue_context *context = context_of(stream);
    tall_cross(context, own->base, basis, own->core, stream->dense);
    fescue_status status = dense_svd(context, own->core, own->spectrum, own->core_right, stream->dense);
    if (status != FESCUE_OK)
        return status;
    matrix_multiply(1, own->core_right, false, own->core, true, 0, stream->turn);
    tall_copy(context, basis, NULL, own->gradient);
    tall_multiply(context, 1, own->gradient, stream->turn, 0, basis);
    return FESCUE_OK;
}

/* The batch's step; stream->lost when it leads nowhere. */
static fescue_status batch_step(struct stream *stream, const struct minibatch_rules *rules, uint64_t t)
{
    struct minibatch *own = stream->own;
    struct projection *p = &stream->projection;
    bool cold = stream->passes == 0, reduced = rules->reduced && !cold;
    struct matrix weights = stream->batches.weights;
    batch_solve(&stream->batches, p->basis, reduced ? p->ridge[0] : batch_ridge(stream->field->problem));
    weights.rows = stream->batches.count;
    if (cold)
        moment_learn(&own->moment, weights, fmax(1 / (double)(own->step + 1), moment_share));
    gradient_sum(stream, reduced);
    step_scale(stream, t);
    grassmann_project(&stream->trust.work, p->basis, own->gradient);
    stream->lost = !isfinite(tall_dot(context_of(stream), own->gradient, own->gradient));
    if (stream->lost)
        return FESCUE_OK;
    fescue_status status = grassmann_retract_qr(&stream->trust.work, p->basis, own->gradient, 1, p->basis);
    return status == FESCUE_OK && reduced ? basis_turn(stream) : status;
}

/* ---- a pass --------------------------------------------------------------------------------------------------------
 */

static void pass_begin(struct stream *stream)
{
    struct minibatch *own = stream->own;
    struct projection *p = &stream->projection;
    batches_shuffle(&stream->batches, stream->passes);
    if (stream->passes == 0)
        return;
    matrix_copy(p->basis, own->base);
    matrix_copy(p->gradient, own->base_gradient);
    matrix_scale(1 / (double)p->weights.rows, own->base_gradient);
    moment_learn(&own->moment, p->weights, 1);
}

fescue_status minibatch_pass(struct stream *stream, const struct minibatch_rules *rules)
{
    struct minibatch *own = stream->own;
    struct batches *b = &stream->batches;
    size_t all = (b->by_long->lines + b->width - 1) / b->width, whole = (size_t)(whole_part * (double)all);
    size_t silent = (size_t)(mean_part * (double)all), met = 0;
    fescue_status status = FESCUE_OK;
    pass_begin(stream);
    for (own->step = 0; batches_next(b, b->width); own->step++) {
        uint64_t done = (uint64_t)stream->passes * all + own->step;
        TRY(batch_step(stream, rules, rules->shrinking && done >= whole ? done - whole + 1 : 0));
        if (stream->lost)
            return FESCUE_OK;
        if (own->step < silent)
            continue;
        met++;
        double weight = rules->shrinking ? step_strongly_convex(1, met) : average_weight(met);
        TRY(grassmann_mean_step(&stream->trust.work, stream->projection.basis, weight, own->mean));
    }
    matrix_copy(own->mean, stream->projection.basis);
done:
    return status;
}

/* The mean of a pass begins at the first iterate of its second half, by a whole step from where the last one was. */
size_t minibatch_keep(struct stream *stream, struct memo_part *parts)
{
    parts[0] = matrix_part(((struct minibatch *)stream->own)->mean);
    return 1;
}
