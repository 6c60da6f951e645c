/* SPDX-License-Identifier: MIT
 *
 * The driver: takes a solver through its iterations, decides when to end, and keeps the trace.
 *
 * After every iteration, in this order, with T the targets, R = P(X - T) on the seen cells, g the gradient on the
 * manifold of matrices of fixed rank:
 *
 *     exact       |R| <= 16 rounding |T|
 *     gradient    |g| <= tolerance |T|  and  |g| <= 1e-3 |R|
 *     change      over the last ten iterations the objective fell by no more than change * objective
 *     stalled     the solver found no better point, or twenty iterations brought neither a lower objective nor a
 *                 smaller gradient; when |g| <= tolerance |T| this counts as `gradient`, and for the absolute loss,
 *                 whose gradient does not vanish at a minimum, as `change`
 *     iterations, time, cancelled
 *
 * |T| is the norm of the gradient at the zero matrix, so the tolerance does not depend on units. The second half of
 * `gradient` tells a minimum from a residual that is merely getting small: on a table without noise g falls together
 * with R, and the run goes on until the cells are met to rounding, instead of leaving an error of tolerance / density.
 * The tolerance is never taken below what the store's precision can show. Of 16 roundings: each residual is the rounded
 * sum of rank + 1 rounded products.
 *
 * The run may be cut anywhere: the point that is given back is the last one accepted, and the one that came when that
 * was no worse. Between create and point_write no memory is taken, but for the trace of runs longer than TRACE_AT_ONCE.
 */
#include "solve/solve_internal.h"

#include <assert.h>
#include <math.h>
#include <string.h>

enum {
    CHANGE_WINDOW = 10,
    STALL_WINDOW = 20,
    TRACE_AT_ONCE = 1 << 16, /* lines: 4 MB; longer traces double */
};
static const double exact_roundings = 16;
static const double gradient_to_residual = 1e-3;

struct run {
    struct field field;
    const struct solver *solver;
    const struct solve_limits *limits;
    struct solve_result *result;
    struct solve_measure measure;
    uint64_t iteration, capacity; /* capacity: of the trace */
    double started;
    double recent[CHANGE_WINDOW]; /* objectives, by iteration modulo the window */
    double lowest, flattest;      /* objective and gradient */
    uint64_t improved;            /* iteration at which either was last lowered */
};

fescue_status values_create(struct field *field, void **values)
{
    const struct cells *target = &field->problem->target;
    size_t size = target->precision == FESCUE_SINGLE ? sizeof(float) : sizeof(double);
    return memory_take(field->problem->context, target->count, size, values);
}

static double rmse_of(const struct problem *problem, double square)
{
    return problem->target.count == 0 ? 0 : sqrt(square / (double)problem->target.count);
}

static double relative_gradient(const struct problem *problem, double gradient)
{
    return problem->norm == 0 ? 0 : gradient / problem->norm;
}

/* ---- the trace -----------------------------------------------------------------------------------------------------
 */

static fescue_status trace_reserve(struct run *run, uint64_t lines)
{
    fescue_context *context = run->field.problem->context;
    if (lines <= run->capacity)
        return FESCUE_OK;
    if (lines > SIZE_MAX / 2)
        return FAIL(context, FESCUE_NO_MEMORY, "a trace of so many iterations cannot be held");
    fescue_status status = RESIZE(context, (size_t)lines, &run->result->trace);
    if (status == FESCUE_OK)
        run->capacity = lines;
    return status;
}

static fescue_status trace_open(struct run *run)
{
    uint64_t lines = run->limits->iterations < TRACE_AT_ONCE ? run->limits->iterations + 1 : TRACE_AT_ONCE;
    run->capacity = run->result->trace_count;
    return trace_reserve(run, run->result->trace_count + lines);
}

static fescue_status trace_add(struct run *run, size_t rank)
{
    struct solve_result *result = run->result;
    fescue_status status = FESCUE_OK;
    if (result->trace_count == run->capacity)
        status = trace_reserve(run, 2 * run->capacity);
    if (status != FESCUE_OK)
        return status;
    result->trace[result->trace_count++] =
        (struct solve_step){.rank = (uint32_t)rank,
                            .iteration = (uint32_t)run->iteration,
                            .objective = run->measure.objective,
                            .rmse = rmse_of(run->field.problem, run->measure.square),
                            .gradient = relative_gradient(run->field.problem, run->measure.gradient),
                            .step = run->measure.step,
                            .seconds = clock_wall() - run->started};
    return FESCUE_OK;
}

/* ---- when to end ---------------------------------------------------------------------------------------------------
 */

static bool is_exact(const struct run *run)
{
    const struct problem *problem = run->field.problem;
    return sqrt(run->measure.square) <= exact_roundings * problem->rounding * problem->norm;
}

/* The gradient has fallen below the tolerance. */
static bool is_small(const struct run *run)
{
    const struct problem *problem = run->field.problem;
    return run->measure.gradient <= fmax(run->limits->gradient, problem->rounding) * problem->norm;
}

static bool is_flat(const struct run *run)
{
    return is_small(run) && run->measure.gradient <= gradient_to_residual * sqrt(run->measure.square);
}

static bool is_unchanged(struct run *run)
{
    double *slot = &run->recent[run->iteration % CHANGE_WINDOW];
    double before = *slot, now = run->measure.objective;
    *slot = now;
    return run->limits->change > 0 && run->iteration >= CHANGE_WINDOW && before - now <= run->limits->change * now;
}

/* Twenty iterations without a lower objective, by more than rounding, or a clearly smaller gradient. */
static bool is_stalled(struct run *run)
{
    const struct solve_measure *now = &run->measure;
    double slack = line_start(run->field.problem, now, 0).slack;
    if (now->objective < run->lowest - slack || now->gradient < 0.9 * run->flattest) {
        run->improved = run->iteration;
        run->lowest = fmin(run->lowest, now->objective);
        run->flattest = fmin(run->flattest, now->gradient);
    }
    return run->iteration - run->improved >= STALL_WINDOW;
}

/* Whether the run ends here, and why. */
static bool run_ends(struct run *run, bool moved)
{
    enum solve_stop *stop = &run->result->stop;
    bool unchanged = is_unchanged(run), stalled = is_stalled(run);
    if (is_exact(run))
        *stop = STOP_EXACT;
    else if (is_flat(run))
        *stop = STOP_GRADIENT;
    else if (!moved || stalled)
        *stop = is_small(run) ? STOP_GRADIENT : run->solver->loss == LOSS_ABSOLUTE ? STOP_CHANGE : STOP_STALLED;
    else if (unchanged)
        *stop = STOP_CHANGE;
    else if (run->iteration >= run->limits->iterations)
        *stop = STOP_ITERATIONS;
    else if (run->limits->deadline > 0 && clock_wall() >= run->limits->deadline)
        *stop = STOP_TIME;
    else
        return false;
    return true;
}

/* ---- the run -------------------------------------------------------------------------------------------------------
 */

/* The objective of a point as it came. One pass. */
static fescue_status objective_of(struct field *field, enum solve_loss loss, const struct low_rank *point,
                                  struct solve_measure *measure)
{
    struct problem *problem = field->problem;
    struct arena arena = {0};
    fescue_status status;
    double size = 0, absolute;
    matrix_reserve(&arena, point->rows, point->rank);
    TRY(arena_open(problem->context, &arena));
    struct matrix scaled = matrix_carve(&arena, point->rows, point->rank);
    matrix_copy(point->left, scaled);
    matrix_scale_columns(scaled, point->spectrum);
    sweep_errors(&field->sweep, field_rows(field), scaled, point->right, &measure->square, &absolute);
    for (size_t k = 0; k < point->rank; k++)
        size += point->spectrum[k] * point->spectrum[k];
    measure->objective = (loss == LOSS_SQUARE ? 0.5 * measure->square : absolute) + 0.5 * problem->lambda * size;
done:
    arena_close(problem->context, &arena);
    return status;
}

static void result_fill(struct run *run)
{
    struct solve_result *result = run->result;
    result->solver = run->solver->name;
    result->start = NULL;
    result->iterations = run->iteration;
    result->objective = run->measure.objective;
    result->rmse = rmse_of(run->field.problem, run->measure.square);
    result->gradient = relative_gradient(run->field.problem, run->measure.gradient);
}

/* Iterates until a rule fires. FESCUE_STOPPED when asked to stop. */
static fescue_status run_iterate(struct run *run, void *state, size_t rank)
{
    fescue_status status;
    bool moved = true;
    for (;;) {
        run->solver->measure(state, &run->measure);
        TRY(trace_add(run, rank));
        if (run_ends(run, moved))
            break;
        status = progress_tell(run->field.problem->context, "fitting", -1);
        if (status != FESCUE_OK) {
            run->result->stop = STOP_CANCELLED;
            break;
        }
        TRY(run->solver->step(state, &moved));
        run->iteration++;
    }
done:
    return status;
}

static double absolute_targets(const struct problem *problem)
{
    double sum = 0;
    for (uint64_t k = 0; k < problem->target.count; k++)
        sum += fabs(cells_value(&problem->target, &problem->target.by_row, k));
    return sum;
}

/* The only matrix of rank 0 is the answer. */
static void run_empty(struct run *run)
{
    const struct problem *problem = run->field.problem;
    run->measure.square = problem->norm * problem->norm;
    run->measure.objective = run->solver->loss == LOSS_SQUARE ? 0.5 * run->measure.square : absolute_targets(problem);
    run->result->stop = problem->norm == 0 ? STOP_EXACT : STOP_GRADIENT;
    result_fill(run);
}

static fescue_status run_afresh(struct problem *problem, const struct solver *solver, const struct solve_limits *limits,
                                struct low_rank *point, struct solve_result *result)
{
    struct run run = {.field.problem = problem, .solver = solver, .limits = limits, .result = result};
    struct solve_measure given = {0};
    fescue_context *context = problem->context;
    void *state = NULL;
    fescue_status status, ended;
    assert(point->rows == problem->target.rows && point->columns == problem->target.columns);
    run.started = clock_wall();
    run.lowest = run.flattest = INFINITY;
    if (point->rank == 0) {
        run_empty(&run);
        return FESCUE_OK;
    }
    TRY(sweep_create(context, &problem->target, point->rank * solver->width, &run.field.sweep));
    TRY(objective_of(&run.field, solver->loss, point, &given));
    TRY(trace_open(&run));
    TRY(solver->create(&run.field, point, &state));
    ended = run_iterate(&run, state, point->rank);
    if (run.measure.objective <= given.objective)
        TRY(solver->point_write(state, point));
    else {
        run.measure.objective = given.objective;
        run.measure.square = given.square;
    }
    result_fill(&run);
    status = ended;
done:
    if (state != NULL)
        solver->destroy(context, &state);
    sweep_destroy(&run.field.sweep);
    return status;
}

/* ---- the memo ------------------------------------------------------------------------------------------------------
 */

/* What a finished run came to, beside its point and its lines of the trace. */
struct run_sums {
    uint64_t iterations, lines;
    int64_t stop;
    double objective, rmse, gradient;
};
enum { RUN_PARTS = 5 };

uint64_t low_rank_digest(uint64_t digest, const struct low_rank *point)
{
    digest = memo_digest(digest, point->spectrum, point->rank * sizeof(double));
    for (size_t i = 0; i < point->left.rows && point->rank > 0; i++)
        digest = memo_digest(digest, &MATRIX_AT(point->left, i, 0), point->rank * sizeof(double));
    for (size_t j = 0; j < point->right.rows && point->rank > 0; j++)
        digest = memo_digest(digest, &MATRIX_AT(point->right, j, 0), point->rank * sizeof(double));
    return digest;
}

static uint64_t run_digest(const struct problem *problem, const struct solver *solver,
                           const struct solve_limits *limits, const struct low_rank *point)
{
    const double reals[] = {problem->lambda, problem->norm, limits->gradient, limits->change};
    const uint64_t counts[] = {problem->target.count, limits->iterations, point->rank};
    uint64_t digest = memo_digest(0, solver->name, strlen(solver->name));
    digest = memo_digest(digest, reals, sizeof reals);
    digest = memo_digest(digest, counts, sizeof counts);
    return low_rank_digest(digest, point);
}

static size_t run_parts(struct run_sums *sums, struct low_rank *point, struct solve_step *trace,
                        struct memo_part parts[RUN_PARTS])
{
    parts[0] = (struct memo_part){sums, sizeof *sums};
    parts[1] = (struct memo_part){point->spectrum, point->rank * sizeof(double)};
    parts[2] = (struct memo_part){point->left.data, point->left.rows * point->left.stride * sizeof(double)};
    parts[3] = (struct memo_part){point->right.data, point->right.rows * point->right.stride * sizeof(double)};
    parts[4] = (struct memo_part){trace, sums->lines * sizeof *trace};
    return RUN_PARTS;
}

static void run_keep(struct memo_work *work, struct low_rank *point, struct solve_result *result, uint64_t before)
{
    struct memo_part parts[RUN_PARTS];
    struct run_sums sums = {.iterations = result->iterations,
                            .lines = result->trace_count - before,
                            .stop = (int64_t)result->stop,
                            .objective = result->objective,
                            .rmse = result->rmse,
                            .gradient = result->gradient};
    memo_keep(work, parts, run_parts(&sums, point, result->trace + before, parts));
}

static fescue_status run_recall(fescue_context *context, struct memo_work *work, const struct solver *solver,
                                struct low_rank *point, struct solve_result *result)
{
    struct run_sums sums = {0};
    struct memo_part parts[RUN_PARTS];
    fescue_status status = FESCUE_OK;
    bool good = memo_get(work, &sums, sizeof sums) && sums.lines <= SIZE_MAX / 2;
    if (good)
        TRY(RESIZE(context, result->trace_count + sums.lines, &result->trace));
    size_t count = good ? run_parts(&sums, point, result->trace + result->trace_count, parts) : 0;
    for (size_t k = 1; k < count && good; k++)
        good = memo_get(work, parts[k].bytes, parts[k].size);
    if (!good)
        TRY(FAIL(context, FESCUE_DEFECT, "the checkpoint holds another fit than the one that was asked for"));
    result->solver = solver->name;
    result->start = NULL;
    result->trace_count += sums.lines;
    result->iterations = sums.iterations;
    result->stop = (enum solve_stop)sums.stop;
    result->objective = sums.objective;
    result->rmse = sums.rmse;
    result->gradient = sums.gradient;
done:
    return status;
}

fescue_status solve_run(struct problem *problem, const struct solver *solver, const struct solve_limits *limits,
                        struct low_rank *point, struct solve_result *result)
{
    if (point->rank == 0)
        return run_afresh(problem, solver, limits, point, result);
    struct memo_work work = memo_begin(problem->context, run_digest(problem, solver, limits, point));
    if (work.recalls)
        return run_recall(problem->context, &work, solver, point, result);
    uint64_t before = result->trace_count;
    fescue_status status = run_afresh(problem, solver, limits, point, result);
    if (status == FESCUE_OK)
        run_keep(&work, point, result, before);
    return status;
}

void solve_result_free(fescue_context *context, struct solve_result *result)
{
    if (result == NULL)
        return;
    GIVE(context, &result->trace);
    *result = (struct solve_result){0};
}
