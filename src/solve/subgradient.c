/* SPDX-License-Identifier: MIT
 *
 * Subgradient steps for the absolute loss over the subspace of the shorter side, with averaged iterates: for tables in
 * which some values are plainly wrong, since a wrong one counts in proportion to how wrong it is, and not its square.
 *
 *     minimise  F(U) = sum over lines j of  min over w of  sum |U_i w - t_ij| + lambda/2 |w|^2
 *
 *     symbol   name       shape
 *     U        basis      short x r; the running iterate
 *     w_j      weights    long x r; near the minimisers at U, by a few rounds from where they were (absolute_fit.c)
 *     S        gradient   mean over the lines of a batch of sign(U_i w_j - t_ij) w_j', short x r: a subgradient
 *     H        moment     r x r, running mean of w w'
 *     p_i, b              as in minibatch.c: part of all lines in which i is seen, lines of the batch
 *     s_i      scales     mean of min(|residual|, 3 s_i) over the cells of line i of the shorter side: how far out an
 *                         ordinary cell of it is, whatever the wrong ones are; s, scale: their mean over all cells
 *
 * A step, for the t-th batch:
 *     U <- retraction (QR) of U - D,   D = the projection of a_i (S H^-1)_i, line by line, onto the tangents at U,
 *     a_i = d / (G_i sqrt(zeta t))     (PMLR 49 (2016), 1617-1638; zeta = 1, since curvature is not negative),
 * in the coordinates z = H^-1/2 w, E[z z'] = I, in which a distance between two places of line i of U is the rms of
 * what its estimates change by. d = 4 s_i bounds how far the line has to go: when nothing is known yet s_i is 0.8 times
 * the rms of its values, and later ordinary cells are out by s_i because U is, or because of noise and U is nearer. G_i
 * = sqrt(r) (p_i + (r + 2) / b) bounds the subgradient: p_i E|z| at most when all signs agree, and what a batch of b
 * lines may have more, as in minibatch.c. As s_i is measured anew after each pass, so is d: on a table that is met but
 * for wrong values the steps shrink in proportion to the distance, and the cells are met to rounding.
 *
 * Stochastic first: a pass over batches that are drawn anew, an iteration each. Once a pass takes off less than a
 * thousandth of what ordinary cells contribute, deterministic: from the best point, t from 1, one batch of all lines
 * and one step an iteration, without the noise of batches. Where all lines are one batch from the beginning it is
 * deterministic from the beginning.
 *
 * Averaging: the running mean of the iterates along geodesics, equal weights, begun anew at iterations 1, 2, 4, 8 ...
 * of either kind, so that at least half of them count and what came long before does not. F is measured at the mean;
 * the best point seen is what the solver has to show, so that the objective never rises. It ends when between two of
 * these beginnings a hundred-thousandth of what ordinary cells contribute was gained, or less.
 *
 * Under normal noise the estimates' error is sqrt(pi/2) = 1.25 times that of squares on the right cells alone (Laplace;
 * Stigler 1973): the price of not having to know which those are.
 *
 * Departures from the source of the step: a step a line, by the line's own bound; d measured. Cost an iteration: three
 * rounds of weights and r multiplications a cell for S, five rounds where F is measured. Workspace: of the longer side
 * four matrices, of the shorter six. Parallel over lines and bands (batches.c), and over the lines of the shorter
 * side for all that follows.
 */
#include "solve/stream_internal.h"

#include <math.h>
#include <string.h>

static const double distance_scales = 4, clip_scales = 3;
/* Residuals below a tenth of the scale count as squares in the weights: a limit to reweighting, of no weight in F. */
static const double least_scales = 0.1;
static const double worth_pass = 1e-3, worth_doubling = 1e-5;
static const double cells_a_rank = 0.5, lines_a_rank = 2; /* of a batch, as in minibatch.c */
static const double moment_share = 0.2;                   /* of a batch in H, as there */
enum {
    ROUNDS_STEP = 3,     /* of weights, from those of the pass before */
    ROUNDS_MEASURE = 5,  /* of weights at the mean */
    ROUNDS_SCALE = 5,    /* of s at the start: from a mean that wrong values rule to one they do not */
    PASSES_LEAST = 3,    /* before anything is said about what they are worth */
    DOUBLING_LEAST = 16, /* iterations, likewise */
};

struct subgradient_at {           /* where the iteration stands, but for matrices */
    double scale;                 /* s */
    uint64_t pass, began, step;   /* iterations; the first of this kind; t */
    uint64_t met;                 /* iterates in the mean */
    double marked;                /* objective when the mean was last begun */
    struct solve_measure measure; /* of the best point */
    bool whole;                   /* deterministic */
};
struct subgradient {
    struct field *field;
    struct arena arena;
    struct batches batches;
    struct projection best; /* basis and weights of the best point; spare: weights at the mean */
    struct grassmann_work work;
    struct moment moment;
    struct matrix basis, weights;             /* the running iterate */
    struct matrix mean, gradient;             /* gradient: S, then -D */
    double *sums, *metric, *scales, *clipped; /* s_i; sums of min(|r|, 3 s_i) */
    size_t width;                             /* lines a batch */
    struct subgradient_at at;
};

/* ---- memory --------------------------------------------------------------------------------------------------------
 */

static void subgradient_destroy(fescue_context *context, void **state)
{
    struct subgradient *s = *state;
    arena_close(context, &s->arena);
    memory_give(context, state);
}

static void subgradient_reserve(struct arena *arena, const struct field *field, size_t rank)
{
    const struct cells *target = &field->problem->target;
    size_t shorter = target->rows <= target->columns ? target->rows : target->columns;
    size_t longer = target->rows <= target->columns ? target->columns : target->rows;
    projection_reserve(arena, field, rank);
    batches_reserve(arena, field, rank, longer);
    grassmann_reserve(arena, shorter, rank);
    moment_reserve(arena, rank);
    for (int k = 0; k < 3; k++)
        matrix_reserve(arena, shorter, rank);
    matrix_reserve(arena, longer, rank);
    arena_reserve(arena, 2 * longer, sizeof(double));
    arena_reserve(arena, packed_size(rank), sizeof(double));
    arena_reserve(arena, shorter, sizeof(double));
    arena_reserve(arena, shorter, sizeof(double));
}

static void subgradient_carve(struct subgradient *s, const struct low_rank *point)
{
    struct arena *arena = &s->arena;
    size_t rank = point->rank;
    projection_carve(arena, s->field, point, &s->best);
    size_t shorter = s->best.by_short->lines, longer = s->best.by_long->lines;
    struct matrix *const tall[] = {&s->basis, &s->mean, &s->gradient};
    batches_carve(arena, s->field, rank, longer, &s->batches);
    s->work = grassmann_carve(s->field->problem->context, arena, shorter, rank);
    moment_carve(arena, rank, &s->moment);
    for (int k = 0; k < 3; k++)
        *tall[k] = matrix_carve(arena, shorter, rank);
    s->weights = matrix_carve(arena, longer, rank);
    s->sums = arena_carve(arena, 2 * longer, sizeof(double));
    s->metric = arena_carve(arena, packed_size(rank), sizeof(double));
    s->scales = arena_carve(arena, shorter, sizeof(double));
    s->clipped = arena_carve(arena, shorter, sizeof(double));
}

/* ---- F -------------------------------------------------------------------------------------------------------------
 */

/* Sums over all cells, and the penalty, of weights that `rounds` have gone over at a basis. */
struct absolute_sums {
    double absolute, square, objective;
};

static struct absolute_sums weights_fit(struct subgradient *s, struct matrix basis, struct matrix weights,
                                        unsigned rounds)
{
    struct absolute_fit fit = {.basis = basis,
                               .weights = weights,
                               .ridge = batch_ridge(s->field->problem),
                               .least = least_scales * s->at.scale,
                               .rounds = rounds,
                               .sums = s->sums};
    struct absolute_sums sums = {0};
    s->batches.next = 0;
    batches_next(&s->batches, s->batches.by_long->lines);
    batch_fit_absolute(&s->batches, &fit);
    for (size_t j = 0; j < s->batches.by_long->lines; j++) {
        sums.absolute += s->sums[2 * j];
        sums.square += s->sums[2 * j + 1];
    }
    sums.objective = sums.absolute + 0.5 * s->field->problem->lambda * tall_dot(s->work.context, weights, weights);
    return sums;
}

/* ---- S -------------------------------------------------------------------------------------------------------------
 */

struct sign_job {
    const struct subgradient *s;
    struct matrix basis;
};

static void band_add(void *argument, size_t band, size_t worker)
{
    const struct sign_job *job = argument;
    const struct subgradient *s = job->s;
    const struct batches *b = &s->batches;
    struct line_range lines = batch_band(b, band);
    (void)worker;
    for (uint32_t i = lines.first; i < lines.end; i++) {
        memset(&MATRIX_AT(s->gradient, i, 0), 0, b->rank * sizeof(double));
        s->clipped[i] = 0;
    }
    for (size_t k = 0; k < b->count; k++) {
        struct cell_range cells = batch_cells(b, band, k);
        const double *w = &MATRIX_AT(b->weights, k, 0);
        for (uint64_t c = cells.from; c < cells.to; c++) {
            uint32_t i = b->by_long->across[c];
            const double *u = &MATRIX_AT(job->basis, i, 0);
            double *g = &MATRIX_AT(s->gradient, i, 0),
                   residual = -cells_value(&s->field->problem->target, b->by_long, c);
            for (size_t l = 0; l < b->rank; l++)
                residual += u[l] * w[l];
            double sign = residual > 0 ? 1 : residual < 0 ? -1 : 0;
            for (size_t l = 0; l < b->rank; l++)
                g[l] += sign * w[l];
            s->clipped[i] += fmin(fabs(residual), clip_scales * s->scales[i]);
        }
    }
}

/* b S for the lines of the batch, at their weights. */
static void signs_sum(struct subgradient *s, struct matrix basis)
{
    struct sign_job job = {.s = s, .basis = basis};
    batch_bands_run(&s->batches, band_add, &job);
}

/* The same for all lines, where weights_fit was called last; and the scales there. */
static void signs_measure(struct subgradient *s, struct matrix basis)
{
    const struct half *half = s->batches.by_short;
    double sum = 0;
    signs_sum(s, basis);
    for (uint32_t i = 0; i < half->lines; i++) {
        double cells = (double)(half->start[i + 1] - half->start[i]);
        s->scales[i] = cells == 0 ? 0 : s->clipped[i] / cells;
        sum += s->clipped[i];
    }
    s->at.scale = half->start[half->lines] == 0 ? 0 : sum / (double)half->start[half->lines];
}

/* ---- the best point ------------------------------------------------------------------------------------------------
 */

/* The best point is where signs_measure was called last; the norm of the subgradient there is that on the manifold of
   matrices of fixed rank, as everywhere (projection.c). */
static void best_measure(struct subgradient *s, const struct absolute_sums *sums, double step)
{
    struct projection *p = &s->best;
    double steepness = 0;
    tall_copy(s->work.context, s->gradient, NULL, p->gradient);
    grassmann_project(&s->work, p->basis, p->gradient);
    if (projection_metric(p, s->metric)) {
        tall_solve(s->work.context, s->metric, p->gradient, s->gradient);
        steepness = tall_dot(s->work.context, s->gradient, p->gradient);
    }
    s->at.measure = (struct solve_measure){
        .objective = sums->objective, .square = sums->square, .gradient = sqrt(fmax(steepness, 0)), .step = step};
}

static void mean_measure(struct subgradient *s)
{
    tall_copy(s->work.context, s->weights, NULL, s->best.spare);
    struct absolute_sums sums = weights_fit(s, s->mean, s->best.spare, ROUNDS_MEASURE);
    signs_measure(s, s->mean);
    if (!(sums.objective < s->at.measure.objective))
        return;
    tall_copy(s->work.context, s->mean, NULL, s->best.basis);
    tall_copy(s->work.context, s->best.spare, NULL, s->best.weights);
    best_measure(s, &sums, 1);
}

static size_t batch_width(const struct problem *problem, size_t rank)
{
    const struct cells *target = &problem->target;
    double longer = fmax(target->rows, target->columns), all = (double)target->rows * (double)target->columns;
    double seen = target->count == 0 ? 1 : (double)target->count / all;
    return (size_t)fmin(fmax(ceil(cells_a_rank * (double)rank / seen), lines_a_rank * (double)rank), longer);
}

/* The scales of the point that came, with the weights that it has. */
static void scales_begin(struct subgradient *s)
{
    for (size_t i = 0; i < s->batches.by_short->lines; i++)
        s->scales[i] = INFINITY;
    for (int round = 0; round < ROUNDS_SCALE; round++) {
        weights_fit(s, s->best.basis, s->best.weights, 0);
        signs_measure(s, s->best.basis);
    }
}

static void subgradient_begin(struct subgradient *s, const struct low_rank *point)
{
    struct matrix from = s->best.rows_short ? point->right : point->left;
    struct absolute_sums given, fitted;
    matrix_copy(from, s->best.weights);
    matrix_scale_columns(s->best.weights, point->spectrum);
    batches_shuffle(&s->batches, 0);
    scales_begin(s);
    matrix_copy(s->best.weights, s->weights);
    given = weights_fit(s, s->best.basis, s->best.weights, 0);
    fitted = given;
    if (s->at.scale > 0)
        fitted = weights_fit(s, s->best.basis, s->weights, ROUNDS_MEASURE);
    if (fitted.objective < given.objective)
        matrix_copy(s->weights, s->best.weights);
    given = weights_fit(s, s->best.basis, s->best.weights, 0);
    signs_measure(s, s->best.basis);
    best_measure(s, &given, 0);
    matrix_copy(s->best.basis, s->basis);
    s->width = batch_width(s->field->problem, point->rank);
    s->at.whole = s->width == s->batches.by_long->lines;
    s->at.marked = INFINITY;
}

static fescue_status subgradient_create(struct field *field, const struct low_rank *point, void **state)
{
    fescue_context *context = field->problem->context;
    struct subgradient *s;
    fescue_status status = TAKE(context, 1, &s);
    if (status != FESCUE_OK)
        return status;
    *state = s;
    s->field = field;
    subgradient_reserve(&s->arena, field, point->rank);
    TRY(arena_open(context, &s->arena));
    subgradient_carve(s, point);
    subgradient_begin(s, point);
done:
    if (status != FESCUE_OK)
        subgradient_destroy(context, state);
    return status;
}

/* ---- an iteration --------------------------------------------------------------------------------------------------
 */

static void block_scale(void *job, size_t block, size_t worker)
{
    const struct subgradient *s = job;
    const struct batches *b = &s->batches;
    const struct half *half = b->by_short;
    double rank = (double)b->rank, zeta = curvature_zeta(0, INFINITY);
    (void)worker;
    for (uint32_t i = half->block[block]; i < half->block[block + 1]; i++) {
        double seen = (double)(half->start[i + 1] - half->start[i]) / (double)half->length;
        double most = sqrt(rank) * (seen + (rank + 2) / (double)b->count);
        double distance = distance_scales * s->scales[i]; /* 0: the line is met */
        double step = distance > 0 ? -step_subgradient(distance, most, zeta, s->at.step) / (double)b->count : 0;
        double *g = &MATRIX_AT(s->gradient, i, 0);
        packed_solve(s->moment.factor, b->rank, g);
        for (size_t k = 0; k < b->rank; k++)
            g[k] *= step;
    }
}

/* S becomes -D, still to be projected. */
static void step_scale(struct subgradient *s)
{
    team_run(s->work.context, s->batches.by_short->blocks, block_scale, s);
}

/* One batch: its weights, S, the step. *lost when that leads nowhere. */
static fescue_status batch_step(struct subgradient *s, bool *lost)
{
    struct absolute_fit fit = {.basis = s->basis,
                               .weights = s->weights,
                               .ridge = batch_ridge(s->field->problem),
                               .least = least_scales * s->at.scale,
                               .rounds = ROUNDS_STEP,
                               .sums = s->sums};
    struct matrix weights = s->batches.weights;
    batch_fit_absolute(&s->batches, &fit);
    weights.rows = s->batches.count;
    s->at.step++;
    moment_learn(&s->moment, weights, fmax(1 / (double)s->at.step, moment_share));
    signs_sum(s, s->basis);
    step_scale(s);
    grassmann_project(&s->work, s->basis, s->gradient);
    *lost = !isfinite(tall_dot(s->work.context, s->gradient, s->gradient));
    return *lost ? FESCUE_OK : grassmann_retract_qr(&s->work, s->basis, s->gradient, 1, s->basis);
}

/* The iterates of the first half of the very first pass are not worth a place in the mean. */
static bool is_worth_meeting(const struct subgradient *s)
{
    return s->at.pass > 0 || s->at.whole || 2 * s->batches.next > s->batches.by_long->lines;
}

/* All batches of a pass, or one of all lines. */
static fescue_status pass_make(struct subgradient *s, bool *lost)
{
    size_t width = s->at.whole ? s->batches.by_long->lines : s->width;
    fescue_status status = FESCUE_OK;
    batches_shuffle(&s->batches, (uint32_t)s->at.pass);
    while (!*lost && batches_next(&s->batches, width)) {
        TRY(batch_step(s, lost));
        if (*lost || !is_worth_meeting(s))
            continue;
        s->at.met++;
        TRY(grassmann_mean_step(&s->work, s->basis, average_weight(s->at.met), s->mean));
    }
done:
    return status;
}

/* Deterministic from now on, from the best point. */
static void whole_begin(struct subgradient *s)
{
    s->at.whole = true;
    s->at.began = s->at.pass;
    s->at.step = 0;
    s->at.marked = INFINITY;
    matrix_copy(s->best.basis, s->basis);
    matrix_copy(s->best.weights, s->weights);
}

/* The mean begins anew where its turn has come; false when too little was gained since it last did. */
static bool mean_begin(struct subgradient *s)
{
    uint64_t here = s->at.pass - s->at.began;
    double ordinary = s->at.scale * (double)s->field->problem->target.count;
    if ((here & (here - 1)) != 0)
        return true;
    bool gained = s->at.marked - s->at.measure.objective > worth_doubling * ordinary;
    s->at.met = 0;
    s->at.marked = s->at.measure.objective;
    return !s->at.whole || here < DOUBLING_LEAST || gained;
}

static fescue_status subgradient_step(void *state, bool *moved)
{
    struct subgradient *s = state;
    double before = s->at.measure.objective;
    bool lost = false;
    fescue_status status = FESCUE_OK;
    *moved = s->at.scale > s->field->problem->rounding && mean_begin(s);
    if (!*moved)
        return status;
    TRY(pass_make(s, &lost));
    s->at.pass++;
    *moved = !lost;
    if (lost)
        return status;
    mean_measure(s);
    double ordinary = s->at.scale * (double)s->field->problem->target.count;
    if (!s->at.whole && s->at.pass >= PASSES_LEAST && !(before - s->at.measure.objective > worth_pass * ordinary))
        whole_begin(s);
done:
    return status;
}

static void subgradient_measure(const void *state, struct solve_measure *measure)
{
    *measure = ((const struct subgradient *)state)->at.measure;
}

static size_t subgradient_keep(void *state, struct memo_part parts[SOLVER_PARTS])
{
    struct subgradient *s = state;
    const struct matrix matrices[] = {s->best.basis, s->best.weights, s->basis, s->weights, s->mean, s->moment.second};
    size_t count = sizeof matrices / sizeof *matrices;
    for (size_t k = 0; k < count; k++)
        parts[k] = matrix_part(matrices[k]);
    parts[count++] = (struct memo_part){s->scales, s->best.by_short->lines * sizeof *s->scales};
    parts[count++] = (struct memo_part){&s->at, sizeof s->at};
    return count;
}

/* All there is has come back; H's factor is made anew in every step. */
static void subgradient_resume(void *state)
{
    (void)state;
}

static fescue_status subgradient_point_write(void *state, struct low_rank *point)
{
    return projection_write(&((struct subgradient *)state)->best, point);
}

const struct solver subgradient_solver = {
    .name = "subgradient",
    .summary = "subgradient steps for the absolute loss, stochastic and then deterministic, averaged along geodesics",
    .loss = LOSS_ABSOLUTE,
    .width = 1,
    .create = subgradient_create,
    .measure = subgradient_measure,
    .step = subgradient_step,
    .keep = subgradient_keep,
    .resume = subgradient_resume,
    .point_write = subgradient_point_write,
    .destroy = subgradient_destroy,
};
