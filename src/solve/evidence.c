/* SPDX-License-Identifier: MIT
 *
 * The evidence fit: full variational Bayes for two-way effects and a product of factors, in which the data decide how
 * many components there are and how strongly each is shrunk. In units of the table's scale,
 *
 *     z_ij = a_i + b_j + u_i.v_j + e_ij          e_ij ~ N(0, s2_ij)
 *     u_ik ~ N(0, su_k)   a_i ~ N(0, sa)   v_jk ~ N(0, sv_k)   b_j ~ N(0, sb)
 *
 * and, where lines are times, a residual and factors that are AR(1) in time (evidence_time.c); where columns are near
 * one another, their factors and effects are fields over them (evidence_near.c).
 *
 *     symbol   shape         what it is
 *     u, a     m x r, m      factors and effects of the rows; x_i = (u_i, a_i, 1)
 *     v, b     n x r, n      factors and effects of the columns; w_j = (v_j, 1, b_j), so that z_ij = x_i.w_j + e_ij
 *     s2_ij    positive      noise / (row precision * column precision), one of the two constant
 *
 * The posterior is factorised over rows and columns, with the full (r+1) x (r+1) covariance of (u_i, a_i) and of
 * (v_j, b_j) (Lim, Teh 2007, "Variational Bayesian approach to movie rating prediction"; Raiko, Ilin, Karhunen 2007,
 * "Principal component analysis for large scale problems with lots of missing values"; Nakajima, Sugiyama 2011,
 * "Theoretical analysis of Bayesian matrix factorization"). One round:
 *
 *   1  rows from the second moments of the columns, columns from those of the rows  (evidence_side.c)
 *   2  prior variances: su_k = mean of E u_ik^2 over the rows with cells, likewise sa, sv, sb
 *   3  the exact change of basis, which raises the bound and prunes                 (evidence_basis.c)
 *   4  noise: the mean of E e^2; per line, (sum of E e^2 + 4 mean) / (n + 4): the four pseudo-cells keep the noise of a
 *      thin line from running to 0
 *
 * Departures from the papers: E e^2 comes out of the sums that a line's posterior needs anyway, so a round takes two
 * passes over the cells, not three; the start is a fit handed in (or a spectral one) rather than random factors, and
 * then the priors are learnt from the first round on.
 *
 * Cost of a round: two passes of (r+2)(r+3) flops a cell, (m+n)(r+2)^3. Memory: (m+n)(r+2)(r+3)/2 doubles, and where
 * there are many cells half as much again for the longer side, to be read across in halves. Lines are
 * parallel; sums go block by block, so the bits do not depend on the number of workers. Nothing is allocated in a
 * round.
 */
#include "solve/evidence_internal.h"

#include <assert.h>
#include <math.h>
#include <string.h>

/* Pseudo-cells of mean noise that every line's own noise is learnt with. */
#define NOISE_PRIOR_CELLS 4.0
/* The noise never falls below this share of the table's variance: at rounding level the posterior is a point, and the
   sums of squares have no digits left. */
#define NOISE_LEAST 1e-13
/* Size of the random columns for components that the start does not have: small beside cells of size one, so that they
   grow only where the data pull them. */
#define EVIDENCE_PROBE 0.05

/* From so many cells on moments are gathered in halves. */
#define HALVES_CELLS 50000

static void side_reserve(struct arena *arena, const struct half *half, size_t rank)
{
    size_t lines = half->lines, d = rank + 2;
    arena_reserve(arena, lines * moments_stride(d), sizeof(double));
    arena_reserve(arena, rank + 1, sizeof(double));
    for (size_t k = 0; k < 3; k++)
        arena_reserve(arena, lines, sizeof(double));
    arena_reserve(arena, (half->blocks + 1) * evidence_basis_partial(rank), sizeof(double));
    matrix_reserve(arena, lines, d);
    matrix_reserve(arena, lines, d);
}

static void side_carve(struct arena *arena, const struct half *half, size_t rank, struct evidence_side *side)
{
    size_t lines = half->lines, d = rank + 2;
    side->half = half;
    side->moments =
        (struct moments){.stride = moments_stride(d), .regressors = d, .one = rank, .kernel = batch_kernel_choose()};
    side->moments.data = arena_carve(arena, lines * moments_stride(d), sizeof(double));
    side->variance = arena_carve(arena, rank + 1, sizeof(double));
    side->line_precision = arena_carve(arena, lines, sizeof(double));
    side->line_error = arena_carve(arena, lines, sizeof(double));
    side->line_rest = arena_carve(arena, lines, sizeof(double));
    side->partial = arena_carve(arena, (half->blocks + 1) * evidence_basis_partial(rank), sizeof(double));
    side->mean = matrix_carve(arena, lines, d);
    side->old = matrix_carve(arena, lines, d);
    for (size_t line = 0; line < lines; line++)
        side->line_precision[line] = 1;
}

static fescue_status evidence_open(struct problem *problem, size_t rank, struct evidence *evidence)
{
    const struct cells *cells = &problem->target;
    size_t workers = team_workers(problem->context), d = rank + 2;
    size_t one = evidence_side_scratch(rank), two = evidence_basis_scratch(rank);
    size_t work = 2 * packed_size(rank) + 3 * rank + dense_work_size(rank, rank);
    *evidence = (struct evidence){.context = problem->context, .problem = problem, .rank = rank};
    evidence->started = clock_wall();
    size_t most = one > two ? one : two, chain = evidence_chain_scratch(rank);
    evidence->scratch_size = team_room(most > chain ? most : chain, sizeof(double));
    struct arena *arena = &evidence->arena;
    side_reserve(arena, &cells->by_row, rank);
    side_reserve(arena, &cells->by_column, rank);
    for (size_t k = 0; k < 4; k++) {
        matrix_reserve(arena, rank, rank);
        matrix_reserve(arena, d, d);
    }
    arena_reserve(arena, 4 * rank, sizeof(double));
    matrix_reserve(arena, d, d);
    matrix_reserve(arena, d, d);
    arena_reserve(arena, work, sizeof(double));
    evidence->state_size = arena->reserved;
    arena_reserve(arena, workers * evidence->scratch_size, sizeof(double));
    size_t lines = cells->rows > cells->columns ? cells->rows : cells->columns;
    arena_reserve(arena, dense_work_size(lines, d), sizeof(double));
    size_t words = cells->count >= HALVES_CELLS ? lines * moments_words(d) : 0;
    arena_reserve(arena, words, sizeof(uint64_t));
    arena_reserve(arena, moments_total_size(d), sizeof(double));
    fescue_status status = arena_open(problem->context, arena);
    if (status != FESCUE_OK)
        return status;
    side_carve(arena, &cells->by_row, rank, &evidence->rows);
    side_carve(arena, &cells->by_column, rank, &evidence->columns);
    for (size_t k = 0; k < 4; k++) {
        evidence->small[k] = matrix_carve(arena, rank, rank);
        evidence->gram[k] = matrix_carve(arena, d, d);
    }
    evidence->shift = arena_carve(arena, 4 * rank, sizeof(double));
    evidence->map[0] = matrix_carve(arena, d, d);
    evidence->map[1] = matrix_carve(arena, d, d);
    evidence->basis_work = arena_carve(arena, work, sizeof(double));
    evidence->scratch = arena_carve(arena, workers * evidence->scratch_size, sizeof(double));
    evidence->dense = arena_carve(arena, dense_work_size(lines, d), sizeof(double));
    evidence->halves = words > 0 ? arena_carve(arena, words, sizeof(uint64_t)) : NULL;
    evidence->total = arena_carve(arena, moments_total_size(d), sizeof(double));
    evidence->rows.effect_at = evidence->columns.one_at = rank;
    evidence->rows.one_at = evidence->columns.effect_at = rank + 1;
    return FESCUE_OK;
}

struct planting {
    struct evidence *evidence;
    const struct model *start;
    uint64_t seed;
};

/* Where the first round begins, which it takes no posterior mean from: (factor, effect) of a line. */
static void old_plant(struct evidence_side *side, size_t line, size_t rank, const double *mean)
{
    memcpy(&MATRIX_AT(side->old, line, 0), mean, rank * sizeof *mean);
    MATRIX_AT(side->old, line, side->effect_at) = mean[rank];
    MATRIX_AT(side->old, line, side->one_at) = 1;
}

/* What the start knows of column j, and its squares. */
static void column_plant(const struct planting *planting, uint32_t j, double *mean, double *square)
{
    struct evidence *evidence = planting->evidence;
    const struct low_rank *point = &planting->start->low_rank;
    size_t rank = evidence->rank;
    double scale = evidence->problem->scale, size = sqrt((double)evidence->problem->target.rows) * scale;
    struct random_stream random = random_open(planting->seed, RANDOM_START, j);
    for (size_t k = 0; k < rank; k++)
        mean[k] = k < point->rank ? MATRIX_AT(point->right, j, k) * point->spectrum[k] / size
                                  : EVIDENCE_PROBE * random_normal(&random);
    mean[rank] = planting->start->offsets.column[j] / scale;
    for (size_t k = 0; k <= rank; k++)
        square[k] += mean[k] * mean[k];
    evidence_side_plant(evidence, &evidence->columns, j, mean);
    old_plant(&evidence->columns, j, rank, mean);
}

static void block_plant(void *job, size_t block, size_t worker)
{
    const struct planting *planting = job;
    struct evidence *evidence = planting->evidence;
    const struct half *half = evidence->columns.half;
    size_t width = evidence->rank + 1;
    double *square = evidence->columns.partial + block * width;
    memset(square, 0, width * sizeof *square);
    for (uint32_t j = half->block[block]; j < half->block[block + 1]; j++)
        column_plant(planting, j, evidence->scratch + worker * evidence->scratch_size, square);
}

/* What the start knows of the rows. */
static void rows_block_plant(void *job, size_t block, size_t worker)
{
    const struct planting *planting = job;
    struct evidence *evidence = planting->evidence;
    const struct low_rank *point = &planting->start->low_rank;
    const struct half *half = evidence->rows.half;
    size_t rank = evidence->rank;
    double *mean = evidence->scratch + worker * evidence->scratch_size, size = sqrt((double)half->lines);
    for (uint32_t i = half->block[block]; i < half->block[block + 1]; i++) {
        for (size_t k = 0; k < rank; k++)
            mean[k] = k < point->rank ? MATRIX_AT(point->left, i, k) * size : 0;
        mean[rank] = planting->start->offsets.row[i] / evidence->problem->scale;
        old_plant(&evidence->rows, i, rank, mean);
    }
}

/* Plants the start: columns known, u of unit size; the rows follow in the first round. */
static void evidence_start(struct evidence *evidence, const struct model *start, const struct evidence_request *request)
{
    const struct problem *problem = evidence->problem;
    const struct half *half = evidence->columns.half;
    size_t rank = evidence->rank;
    struct planting planting = {evidence, start, request->seed};
    evidence->noise = request->noise_start > 0 ? request->noise_start / (problem->scale * problem->scale) : 1;
    team_run(evidence->context, half->blocks, block_plant, &planting);
    team_run(evidence->context, evidence->rows.half->blocks, rows_block_plant, &planting);
    team_sum(evidence->context, evidence->columns.partial, half->blocks, rank + 1, evidence->columns.variance);
    for (size_t k = 0; k <= rank; k++)
        evidence->columns.variance[k] /= (double)half->lines;
    double effect = evidence->columns.variance[rank];
    evidence->rows.moments.weight = request->noise == EVIDENCE_NOISE_ROWS ? evidence->rows.line_precision : NULL;
    evidence->columns.moments.weight =
        request->noise == EVIDENCE_NOISE_COLUMNS ? evidence->columns.line_precision : NULL;
    bool has_rows = request->offsets == FESCUE_OFFSETS_BOTH || request->offsets == FESCUE_OFFSETS_ROWS;
    bool has_columns = request->offsets == FESCUE_OFFSETS_BOTH || request->offsets == FESCUE_OFFSETS_COLUMNS;
    for (size_t k = 0; k < rank; k++) {
        double *variance = &evidence->columns.variance[k];
        *variance = *variance > 0 ? fmax(*variance, EVIDENCE_VARIANCE_LEAST) : 0;
        evidence->rows.variance[k] = 1;
    }
    evidence->rows.variance[rank] = has_rows ? 1 : 0;
    evidence->columns.variance[rank] = !has_columns ? 0 : effect > 0 ? fmax(effect, EVIDENCE_VARIANCE_LEAST) : 1;
}

/* Step 4, after the pass over `side`, whose lines have noise of their own when `own`. */
static void noise_update(struct evidence *evidence, struct evidence_side *side, bool own)
{
    double total = 0, count = (double)evidence->problem->target.count;
    if (side->excess != NULL)
        for (size_t line = 0; line < side->half->lines; line++)
            side->line_error[line] += side->excess[line];
    for (size_t line = 0; line < side->half->lines; line++)
        total += side->line_error[line];
    double mean = fmax(total / count, NOISE_LEAST);
    evidence->noise = mean;
    for (size_t line = 0; own && line < side->half->lines; line++) {
        double cells = (double)(side->half->start[line + 1] - side->half->start[line]);
        side->line_precision[line] =
            mean * (cells + NOISE_PRIOR_CELLS) / (side->line_error[line] + NOISE_PRIOR_CELLS * mean);
    }
}

/* |X_new - X_old|_F / sqrt(mn) from Gram matrices, in O((m+n) r^2): X = (rows' mean)(columns' mean)'. */
static double change_measure(struct evidence *evidence)
{
    struct evidence_side *rows = &evidence->rows, *columns = &evidence->columns;
    struct matrix *g = evidence->gram;
    double square = 0;
    const struct matrix side[2][2] = {{rows->mean, rows->old}, {columns->mean, columns->old}};
    for (int k = 0; k < 3; k++) { /* new and new, old and old, new and old */
        for (int s = 0; s < 2; s++)
            tall_cross(evidence->context, side[s][k == 1], side[s][k > 0], g[s], evidence->dense);
        square += (k < 2 ? 1 : -2) * matrix_dot(g[0], g[1]);
    }
    double cells = (double)rows->half->lines * (double)columns->half->lines;
    return sqrt(fmax(square, 0) / cells);
}

/* Steps 1 and 2 for one side. */
static fescue_status side_round(struct evidence *evidence, struct evidence_side *side, struct evidence_side *other)
{
    struct evidence_time *time = evidence->time;
    evidence_side_offer(evidence, other, side);
    if (time != NULL && time->chain_on && side == time->steps) {
        evidence_chain_update(evidence);
        evidence_chain_prior(evidence);
        return FESCUE_OK;
    }
    bool has_fields = evidence->near != NULL && evidence->near->is_on && side == &evidence->columns;
    fescue_status status = has_fields ? evidence_near_update(evidence) : FESCUE_OK;
    if (status != FESCUE_OK)
        return status;
    evidence_side_update(evidence, side, other);
    if (!has_fields)
        evidence_side_prior(evidence, side);
    return FESCUE_OK;
}

static fescue_status evidence_round(struct evidence *evidence, const struct evidence_request *request, uint64_t round,
                                    double *change)
{
    struct evidence_side *rows = &evidence->rows, *columns = &evidence->columns;
    if (round > 0) {
        tall_copy(evidence->context, rows->mean, NULL, rows->old);
        tall_copy(evidence->context, columns->mean, NULL, columns->old);
    }
    bool has_chain = evidence->time != NULL && evidence->time->chain_on;
    bool has_fields = evidence->near != NULL && evidence->near->is_on;
    fescue_status status = FESCUE_OK;
    if (round > 0 && !has_chain && !has_fields && (round < EVIDENCE_ROUND_BASIS || round % EVIDENCE_BASIS_EVERY == 0))
        TRY(evidence_basis_change(evidence));
    if (evidence->time != NULL)
        evidence_time_round(evidence, round);
    if (evidence->near != NULL)
        evidence_near_round(evidence, round);
    TRY(side_round(evidence, rows, columns));
    if (request->noise == EVIDENCE_NOISE_ROWS)
        noise_update(evidence, rows, true);
    TRY(side_round(evidence, columns, rows));
    if (request->noise != EVIDENCE_NOISE_ROWS)
        noise_update(evidence, columns, request->noise == EVIDENCE_NOISE_COLUMNS);
    *change = evidence->time != NULL && evidence->time->residual_on ? evidence->time->change : change_measure(evidence);
done:
    return status;
}

/* Of an equal noise; for normal errors the squares of a line of n cells have a mean of variance 2/n. */
static double noise_spread(const struct evidence_side *side)
{
    double error = 0, cells = 0, spread = 0;
    for (size_t line = 0; line < side->half->lines; line++) {
        error += side->line_error[line];
        cells += (double)(side->half->start[line + 1] - side->half->start[line]);
    }
    for (size_t line = 0; line < side->half->lines; line++) {
        double own = (double)(side->half->start[line + 1] - side->half->start[line]);
        if (own == 0)
            continue;
        double away = side->line_error[line] / own * cells / error - 1;
        spread += own * away * away - 2;
    }
    return spread / cells;
}

/* What effects of the lines that the fit has not would add to the squares of their means: an effect of variance s to n
   cells of noise 1 adds n s. That of the means of n cells without effects, of which the fit has used up some for the
   line's components and some for those of the other side, is (1 - rank/n) (1 - rank * lines of the other side / cells).
   Of lines of twice as many cells as components, which have to hold half of all cells: else INFINITY. */
static double effect_spread(const struct evidence *evidence, const struct evidence_side *side, size_t rank)
{
    const struct half *half = side->half;
    double all = (double)half->start[half->lines], used = (double)rank * (double)half->length / all;
    double squares = 0, expected = 0, cells = 0;
    for (size_t line = 0; line < half->lines; line++) {
        double own = (double)(half->start[line + 1] - half->start[line]);
        if (own == 0 || own < 2 * (double)rank)
            continue;
        squares += side->line_rest[line] * side->line_rest[line] / own;
        expected += (1 - (double)rank / own) * (1 - used);
        cells += own;
    }
    return 2 * cells < all || !(used < 0.5) ? INFINITY : squares / (evidence->noise * expected) - 1;
}

/* Posterior means into a model in the table's units. */
static fescue_status evidence_model(struct evidence *evidence, const struct model *start, struct model *model)
{
    fescue_context *context = evidence->context;
    struct evidence_side *rows = &evidence->rows, *columns = &evidence->columns;
    size_t m = rows->half->lines, n = columns->half->lines, rank = evidence->rank;
    double scale = evidence->problem->scale;
    fescue_status status = FESCUE_OK;
    *model = (struct model){.rows = (uint32_t)m, .columns = (uint32_t)n, .bounds = start->bounds};
    TRY(offsets_copy(context, (uint32_t)m, (uint32_t)n, &start->offsets, &model->offsets));
    for (size_t i = 0; i < m; i++)
        model->offsets.row[i] = rows->variance[rank] > 0 ? scale * MATRIX_AT(rows->mean, i, rows->effect_at) : 0;
    for (size_t j = 0; j < n; j++)
        model->offsets.column[j] =
            columns->variance[rank] > 0 ? scale * MATRIX_AT(columns->mean, j, columns->effect_at) : 0;
    model->offsets.row_ridge = rows->variance[rank] > 0 ? evidence->noise / rows->variance[rank] : INFINITY;
    model->offsets.column_ridge = columns->variance[rank] > 0 ? evidence->noise / columns->variance[rank] : INFINITY;
    TRY(low_rank_from_product(context, matrix_left(rows->mean, rank), matrix_left(columns->mean, rank),
                              &model->low_rank));
    for (size_t k = 0; k < rank; k++)
        model->low_rank.spectrum[k] *= scale;
    if (evidence->time != NULL)
        TRY(evidence_time_part(evidence, &model->time));
    if (evidence->near != NULL)
        evidence_near_part(evidence, &model->near);
done:
    if (status != FESCUE_OK)
        model_free(context, model);
    return status;
}

static void trace_append(struct evidence *evidence, uint64_t round, double change, struct solve_result *result)
{
    struct solve_step *step = &result->trace[result->trace_count++];
    *step = (struct solve_step){.rank = (uint32_t)evidence->rank, .iteration = (uint32_t)round};
    step->rmse = sqrt(evidence->noise);
    step->objective = evidence->noise;
    step->gradient = NAN;
    step->step = change;
    step->seconds = clock_wall() - evidence->started;
}

/* By how much all rounds that are left would move the estimates, each by the share of the one before that the last one
   had. The first change is that from the start, and says nothing of those to come unless the start comes from such
   rounds itself; nor is it always told. */
static double change_left(const struct evidence_request *request, const struct evidence_at *at)
{
    bool is_told = at->round > (request->is_shrunk ? 1 : 2) && isfinite(at->before);
    double share = is_told ? at->change / at->before : INFINITY;
    return share < 1 ? at->change * share / (1 - share) : INFINITY;
}

static bool is_settled(const struct evidence *evidence, const struct evidence_request *request,
                       const struct evidence_at *at)
{
    double deviation = sqrt(evidence->noise);
    if (at->round < 2)
        return false;
    return at->change <= fmax(request->change, request->change_noise * deviation) ||
           change_left(request, at) <= request->change_left * deviation ||
           (evidence->time != NULL && evidence_time_settled(evidence, at->change));
}

/* Whether the rounds end here, and why. */
static bool is_over(struct evidence *evidence, const struct evidence_request *request, const struct evidence_at *at,
                    enum solve_stop *stop)
{
    bool all_on = evidence->near == NULL || evidence->near->is_on;
    if (progress_tell(evidence->context, "evidence", -1) != FESCUE_OK)
        *stop = STOP_CANCELLED;
    else if (all_on && is_settled(evidence, request, at))
        *stop = STOP_CHANGE;
    else if (request->deadline > 0 && clock_wall() > request->deadline)
        *stop = STOP_TIME;
    else
        return false;
    return true;
}

/* From where an earlier run of the job was, if it was in this fit. */
static fescue_status evidence_loop(struct evidence *evidence, const struct evidence_request *request,
                                   const struct memo_work *work, struct solve_result *result)
{
    struct evidence_at at = {.change = INFINITY, .before = INFINITY};
    struct memo_part parts[EVIDENCE_STATE_PARTS];
    size_t count = evidence_state(evidence, request, &at, result, parts);
    bool resumed;
    fescue_status status;
    TRY(memo_resume(work, parts, count, &resumed));
    if (resumed) {
        evidence_at_take(&at, evidence);
        result->trace_count = result->iterations = at.round;
    }
    result->stop = STOP_ITERATIONS;
    while (at.round < request->rounds && !is_over(evidence, request, &at, &result->stop)) {
        at.before = at.change;
        TRY(evidence_round(evidence, request, at.round, &at.change));
        trace_append(evidence, ++at.round, at.change, result);
        result->iterations = at.round;
        evidence_at_note(evidence, &at);
        memo_tell(work, parts, count);
    }
    if (result->stop == STOP_CANCELLED && at.round > 0)
        memo_tell(work, parts, count);
done:
    return status;
}

fescue_status evidence_fit(fescue_context *context, const struct cells *cells, const struct evidence_request *request,
                           const struct model *start, struct evidence_result *out)
{
    struct offsets mean = {0};
    struct problem problem = {0};
    struct evidence evidence = {0};
    fescue_status status = FESCUE_OK;
    *out = (struct evidence_result){.fit.solver = "evidence"};
    assert(request->rank > 0 && request->rank <= cells->rows && request->rank <= cells->columns);
    struct memo_work work = memo_begin(context, evidence_digest(cells, request, start));
    if (work.recalls) {
        status = evidence_recall(context, &work, request, start, out);
        goto done;
    }
    TRY(TAKE(context, request->rounds, &out->fit.trace));
    TRY(offsets_copy(context, cells->rows, cells->columns, &start->offsets, &mean));
    memset(mean.row, 0, cells->rows * sizeof *mean.row);
    memset(mean.column, 0, cells->columns * sizeof *mean.column);
    TRY(problem_create(context, cells, &mean, 0, &problem));
    TRY(evidence_open(&problem, request->rank, &evidence));
    evidence_start(&evidence, start, request);
    if (request->is_shrunk)
        evidence_restore(&evidence);
    if (request->time != NULL && request->time->along != TIME_NONE) {
        TRY(evidence_time_open(&evidence, request));
        evidence_time_begin(&evidence, start);
    }
    if (request->near != NULL) {
        TRY(evidence_near_open(&evidence, request));
        evidence_near_begin(&evidence, start);
    }
    TRY(evidence_loop(&evidence, request, &work, &out->fit));
    TRY(evidence_model(&evidence, start, &out->model));
    out->noise = problem.scale * sqrt(evidence.noise);
    out->scale = problem.scale;
    out->row_spread = noise_spread(&evidence.rows);
    out->column_spread = noise_spread(&evidence.columns);
    out->fit.rmse = sqrt(evidence.noise);
    out->fit.objective = evidence.noise;
    size_t alive = evidence_living(cells, out);
    evidence_trim(&out->model, alive > 0 ? alive : 1);
    out->row_effects = effect_spread(&evidence, &evidence.rows, alive);
    out->column_effects = effect_spread(&evidence, &evidence.columns, alive);
    evidence_keep(&work, out);
done:
    evidence_near_close(&evidence);
    evidence_time_close(&evidence);
    arena_close(context, &evidence.arena);
    problem_free(&problem);
    offsets_free(context, &mean);
    if (status != FESCUE_OK)
        evidence_result_free(context, out);
    return status;
}

void evidence_result_free(fescue_context *context, struct evidence_result *result)
{
    model_free(context, &result->model);
    solve_result_free(context, &result->fit);
}
