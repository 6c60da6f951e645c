/* SPDX-License-Identifier: MIT
 *
 * The evidence fit from nothing: which components there are. The variational rounds only lose components, and one that
 * starts badly aligned may be lost although the data support it. So:
 *
 *   1  offsets by ridge least squares; the trimmed spectral start gives all components asked for at once
 *   2  rounds until the estimates settle; what the data do not support is pruned
 *   3  leading pairs of the residual join as further components, rounds again: while more live, go on
 *   4  rounds to the final tolerance; where cells are scarce and a component is lost on the way, 3 and 4 once more
 *
 * Which components live: evidence_living.c. Growth by the residual's leading pair is what made nearly every local
 * method converge from few cells; the ridge per component, learnt from the data, is in the spirit of MacKay 1992,
 * "Bayesian interpolation".
 *
 * A large table has the cells to tell at once: the rounds of 2 are those to the final tolerance, and when one of the
 * components offered is gone after them no further ones are. When all live, twice as many are offered from the
 * beginning, which costs no more than all before it.
 */
#include "solve/evidence_internal.h"

#include <math.h>

/* First guess of the noise, as a share of the variance that the offsets leave: with all of it, weak components are lost
   before they have found their direction; with much less, rounds are spent on pruning what is not there. */
#define START_NOISE 0.25
/* Components that join at once: among several the rounds find the directions that one alone may miss. */
enum { GROW_BLOCK = 4 };
/* Steps that align what has joined. */
enum { ALIGN_STEPS = 10 };
/* Cells over unknowns below which components are lost that the data support. */
#define SCARCE 4.0
/* Rounds between two growths, and the tolerance at which they end earlier. */
#define GROW_ROUNDS 10
#define GROW_CHANGE 1e-3
/* Rounds of equal noise before others. */
enum { BEFORE_ROUNDS = 15 };
/* From so many cells on a round costs what four alternations do, and the start is brought near by some of those: with
   the ridge that shrinks an evenly seen table by a twentieth. */
enum { LARGE = 500000 };
enum { APPROACH_STEPS = 3 };
#define APPROACH_RIDGE 0.05

static bool is_late(const struct evidence_request *request)
{
    return request->deadline > 0 && clock_wall() >= request->deadline;
}

static bool is_scarce(const struct cells *cells, size_t rank)
{
    double lines = (double)cells->rows + (double)cells->columns;
    return (double)cells->count < SCARCE * (double)rank * (lines - (double)rank);
}

/* A few unshrunk steps, in which what has joined finds its direction: the leading pair of few cells' residual is mostly
   chance, and the rounds would lose a weak component before they had turned it. Where cells abound the pair will do. */
static fescue_status point_align(struct problem *problem, const struct evidence_request *request,
                                 struct low_rank *point)
{
    const struct solve_limits limits = {.iterations = ALIGN_STEPS, .gradient = 1e-6, .deadline = request->deadline};
    struct solve_result result = {0};
    if (!is_scarce(&problem->target, point->rank))
        return FESCUE_OK;
    fescue_status status = solve_run(problem, solver_find("grassmann-cg"), &limits, point, &result);
    solve_result_free(problem->context, &result);
    return status;
}

bool evidence_is_large(const struct cells *cells)
{
    return cells->count >= LARGE;
}

/* Alternations that bring the spectral start of a large table near, and the noise that they leave, a degree of freedom
   taken off for every unknown. */
static fescue_status point_approach(struct problem *problem, struct evidence_request *request, struct low_rank *point)
{
    const struct solve_limits limits = {.iterations = APPROACH_STEPS, .gradient = 1e-6, .deadline = request->deadline};
    struct solve_result result = {0};
    double rank = (double)point->rank, lines = (double)point->rows + (double)point->columns;
    double cells = (double)problem->target.count, free = cells - rank * (lines - rank);
    problem_set_ridge(problem, APPROACH_RIDGE);
    fescue_status status = solve_run(problem, solver_find("alternating"), &limits, point, &result);
    double noise = result.rmse * result.rmse * problem->scale * problem->scale;
    if (status == FESCUE_OK && free > cells / 2)
        request->noise_start = noise * cells / free;
    solve_result_free(problem->context, &result);
    return status;
}

/* Adds components to *model, of which the offsets stand: the spectral start's `rank` when it has none yet, else a
 * block. */
static fescue_status model_grow(fescue_context *context, const struct cells *cells, struct evidence_request *request,
                                struct model *model)
{
    struct problem problem = {0};
    struct low_rank *point = &model->low_rank;
    fescue_status status;
    bool is_coarse = point->rank == 0 && evidence_is_large(cells); /* a start, to the noise and not beyond */
    TRY(problem_create_in(context, cells, &model->offsets, 0, is_coarse ? FESCUE_SINGLE : cells->precision, &problem));
    if (point->rank == 0) {
        if (!(request->noise_start > 0))
            request->noise_start = START_NOISE * problem.scale * problem.scale;
        low_rank_free(context, point);
        TRY(start_spectral(&problem, request->rank, request->seed, point));
        if (evidence_is_large(cells))
            TRY(point_approach(&problem, request, point));
    } else {
        for (size_t k = 0; k < point->rank; k++)
            point->spectrum[k] /= problem.scale;
        for (size_t k = 0; k < GROW_BLOCK && point->rank < request->rank_most; k++)
            TRY(start_grow(&problem, request->seed + point->rank, point));
        TRY(point_align(&problem, request, point));
    }
    for (size_t k = 0; k < point->rank; k++)
        point->spectrum[k] *= problem.scale;
done:
    problem_free(&problem);
    return status;
}

/* Replaces *fit by a fit that starts from its model and noise, and drops components that died (the last one stays). */
static fescue_status refit(fescue_context *context, const struct cells *cells, const struct evidence_request *request,
                           struct evidence_result *fit)
{
    struct evidence_result next = {0};
    struct evidence_request again = *request;
    if (fit->noise > 0)
        again.noise_start = fit->noise * fit->noise;
    again.rank = fit->model.low_rank.rank;
    fescue_status status = evidence_fit(context, cells, &again, &fit->model, &next);
    if (status != FESCUE_OK)
        return status;
    evidence_result_free(context, fit);
    *fit = next;
    return next.fit.stop == STOP_CANCELLED ? FESCUE_STOPPED : FESCUE_OK;
}

/* What is asked of rounds after which components join or go. */
static struct evidence_request step_of(const struct evidence_request *request, uint64_t rounds)
{
    struct evidence_request step = *request;
    step.noise = EVIDENCE_NOISE_EQUAL;
    step.time = NULL;
    step.near = NULL;
    step.rounds = rounds;
    step.change = GROW_CHANGE;
    return step;
}

/* Components join for as long as more of them live, out->model having its offsets and what has joined already. */
static fescue_status components_grow(fescue_context *context, const struct cells *cells,
                                     const struct evidence_request *request, struct evidence_result *out)
{
    struct evidence_request step = step_of(request, GROW_ROUNDS);
    size_t alive = out->model.low_rank.rank;
    fescue_status status;
    for (;;) {
        TRY(model_grow(context, cells, &step, &out->model));
        TRY(refit(context, cells, &step, out));
        size_t now = evidence_living(cells, out);
        if (now <= alive || now >= request->rank_most || is_late(request))
            break;
        alive = now;
    }
done:
    return status;
}

/* Rounds to the final tolerance, all noise equal, without time and near columns; a few when rounds with other noise
   follow, which settle the components on their own. */
static fescue_status components_settle(fescue_context *context, const struct cells *cells,
                                       const struct evidence_request *request, struct evidence_result *out)
{
    struct evidence_request step = *request;
    step.noise = EVIDENCE_NOISE_EQUAL;
    step.time = NULL;
    step.near = NULL;
    if (request->noise != EVIDENCE_NOISE_EQUAL && step.rounds > BEFORE_ROUNDS)
        step.rounds = BEFORE_ROUNDS;
    return refit(context, cells, &step, out);
}

/* Equal noise, the components of a small table: they settle, and where cells are scarce those that were lost on the way
   are looked for once more. What follows lines in time settles the components on its own. */
static fescue_status components_learn(fescue_context *context, const struct cells *cells,
                                      const struct evidence_request *request, struct evidence_result *out)
{
    fescue_status status;
    TRY(components_grow(context, cells, request, out));
    size_t alive = evidence_living(cells, out);
    if (request->time != NULL)
        return FESCUE_OK;
    TRY(components_settle(context, cells, request, out));
    bool is_last = request->noise == EVIDENCE_NOISE_EQUAL;
    if (is_last && evidence_living(cells, out) < alive && is_scarce(cells, alive) && !is_late(request)) {
        TRY(components_grow(context, cells, request, out));
        TRY(components_settle(context, cells, request, out));
    }
done:
    return status;
}

/* Those of a large table: as many as are asked for, which settle; twice as many, from nothing, for as long as all of
   them live. */
static fescue_status components_offer(fescue_context *context, const struct cells *cells,
                                      const struct evidence_request *request, struct evidence_result *out)
{
    struct evidence_request step = step_of(request, request->rounds);
    size_t most = request->rank_most;
    fescue_status status;
    step.change = request->change;
    for (;;) {
        TRY(model_grow(context, cells, &step, &out->model));
        TRY(refit(context, cells, &step, out));
        if (evidence_living(cells, out) < step.rank || step.rank == most || is_late(request))
            break;
        step.rank = 2 * step.rank < most ? 2 * step.rank : most;
        evidence_trim(&out->model, 0);
    }
done:
    return status;
}

fescue_status evidence_learn(fescue_context *context, const struct cells *cells, const struct evidence_request *request,
                             struct evidence_result *out)
{
    fescue_status status;
    *out = (struct evidence_result){.model = {.rows = cells->rows, .columns = cells->columns}};
    out->model.bounds = (struct fescue_range){-INFINITY, INFINITY};
    TRY(offsets_fit(context, cells, request->offsets, &out->model.offsets));
    TRY(low_rank_create(context, cells->rows, cells->columns, 0, &out->model.low_rank));
    TRY(evidence_is_large(cells) ? components_offer(context, cells, request, out)
                                 : components_learn(context, cells, request, out));
    if (request->noise != EVIDENCE_NOISE_EQUAL || request->time != NULL || request->near != NULL)
        TRY(refit(context, cells, request, out));
    evidence_trim(&out->model, evidence_living(cells, out));
done:
    if (status != FESCUE_OK)
        evidence_result_free(context, out);
    return status;
}
