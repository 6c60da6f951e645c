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

enum {
    CHANGE_WINDOW = 10,
    STALL_WINDOW = 20,
    TRACE_AT_ONCE = 1 << 16, /* lines: 4 MB; longer traces double */
};
static const double exact_roundings = 16;
static const double gradient_to_residual = 1e-3;

struct run_at { /* where the driver stands, before a step */
    uint64_t iteration;
    double recent[CHANGE_WINDOW]; /* objectives, by iteration modulo the window */
    double lowest, flattest;      /* objective and gradient */
    uint64_t improved;            /* iteration at which either was last lowered */
    double seconds;               /* since it began */
};
struct run {
    struct field field;
    const struct solver *solver;
    const struct solve_limits *limits;
    const struct memo_work *work;
    struct solve_result *result;
    struct solve_measure measure;
    struct run_at at;
    uint64_t capacity, first; /* lines of the trace: how many there may be, of earlier runs */
    double started;
};

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
    run->capacity = run->first = run->result->trace_count;
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
                            .iteration = (uint32_t)run->at.iteration,
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
    double *slot = &run->at.recent[run->at.iteration % CHANGE_WINDOW];
    double before = *slot, now = run->measure.objective;
    *slot = now;
    return run->limits->change > 0 && run->at.iteration >= CHANGE_WINDOW && before - now <= run->limits->change * now;
}

/* Twenty iterations without a lower objective, by more than rounding, or a clearly smaller gradient. */
static bool is_stalled(struct run *run)
{
    const struct solve_measure *now = &run->measure;
    double slack = line_start(run->field.problem, now, 0).slack;
    if (now->objective < run->at.lowest - slack || now->gradient < 0.9 * run->at.flattest) {
        run->at.improved = run->at.iteration;
        run->at.lowest = fmin(run->at.lowest, now->objective);
        run->at.flattest = fmin(run->at.flattest, now->gradient);
    }
    return run->at.iteration - run->at.improved >= STALL_WINDOW;
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
    else if (run->at.iteration >= run->limits->iterations)
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
    tall_copy(problem->context, point->left, point->spectrum, scaled);
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
    result->iterations = run->at.iteration;
    result->objective = run->measure.objective;
    result->rmse = rmse_of(run->field.problem, run->measure.square);
    result->gradient = relative_gradient(run->field.problem, run->measure.gradient);
}

/* What a later run of the job goes on from: the driver, its lines of the trace, the solver. */
enum { STATE_PARTS = 2 + SOLVER_PARTS };

static size_t state_parts(struct run *run, void *state, uint64_t lines, struct memo_part parts[STATE_PARTS])
{
    struct solve_step *trace = run->result->trace;
    parts[0] = (struct memo_part){&run->at, sizeof run->at};
    parts[1] = (struct memo_part){trace == NULL ? NULL : trace + run->first, (size_t)lines * sizeof *trace};
    return 2 + run->solver->keep(state, parts + 2);
}

static void run_tell(struct run *run, void *state)
{
    struct memo_part parts[STATE_PARTS];
    if (run->work->memo == NULL || run->at.iteration == 0) /* before that there is nothing to be saved */
        return;
    run->at.seconds = clock_wall() - run->started;
    memo_tell(run->work, parts, state_parts(run, state, run->result->trace_count - run->first, parts));
}

/* To where an earlier run of the job was, if it was in this fit. */
static fescue_status run_resume(struct run *run, void *state, bool *resumed)
{
    struct memo_part parts[STATE_PARTS];
    struct run_at before = run->at;
    uint64_t size = memo_state_size(run->work), fixed = 0, lines;
    fescue_status status;
    *resumed = false;
    size_t count = size == 0 ? 0 : state_parts(run, state, 0, parts);
    for (size_t k = 0; k < count; k++)
        fixed += parts[k].size;
    if (size <= fixed)
        return FESCUE_OK;
    lines = (size - fixed) / sizeof *run->result->trace; /* if that is not whole it does not fit, and is not taken */
    TRY(trace_reserve(run, run->first + lines));
    TRY(memo_resume(run->work, parts, state_parts(run, state, lines, parts), resumed));
    if (!*resumed)
        goto done;
    run->result->trace_count += lines;
    run->started -= run->at.seconds;
    run->solver->resume(state);
    run->solver->measure(state, &run->measure);
done:
    if (!*resumed)
        run->at = before;
    return status;
}

/* Iterates until a rule fires. FESCUE_STOPPED when asked to stop. */
static fescue_status run_iterate(struct run *run, void *state, size_t rank)
{
    fescue_status status;
    bool moved = true, resumed;
    TRY(run_resume(run, state, &resumed));
    for (;; resumed = false) {
        if (!resumed) {
            run->solver->measure(state, &run->measure);
            TRY(trace_add(run, rank));
            if (run_ends(run, moved))
                break;
        }
        status = progress_tell(run->field.problem->context, "fitting", -1);
        run_tell(run, state);
        if (status != FESCUE_OK) {
            run->result->stop = STOP_CANCELLED;
            break;
        }
        TRY(run->solver->step(state, &moved));
        run->at.iteration++;
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

static fescue_status run_afresh(const struct run *asked, struct low_rank *point)
{
    struct run run = *asked;
    struct problem *problem = run.field.problem;
    const struct solver *solver = run.solver;
    struct solve_measure given = {0};
    fescue_context *context = problem->context;
    void *state = NULL;
    fescue_status status, ended;
    assert(point->rows == problem->target.rows && point->columns == problem->target.columns);
    run.started = clock_wall();
    run.at.lowest = run.at.flattest = INFINITY;
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

fescue_status solve_run(struct problem *problem, const struct solver *solver, const struct solve_limits *limits,
                        struct low_rank *point, struct solve_result *result)
{
    struct run run = {.field.problem = problem, .solver = solver, .limits = limits, .result = result};
    if (point->rank == 0)
        return run_afresh(&run, point);
    struct memo_work work = memo_begin(problem->context, run_digest(problem, solver, limits, point));
    if (work.recalls)
        return run_recall(problem->context, &work, solver, point, result);
    uint64_t before = result->trace_count;
    run.work = &work;
    fescue_status status = run_afresh(&run, point);
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
