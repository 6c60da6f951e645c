/* SPDX-License-Identifier: MIT
 *
 * Starting strategy: from rank 0 upwards, each new component the leading singular pair of the residual (grow.c), each
 * rank fitted by conjugate gradients before the next, until ten iterations lower the objective by no more than
 * `change`. The cheapest strategy, and enough where cells are not scarce; the larger components are found first, so a
 * spectrum that falls steeply is no obstacle.
 */
#include "solve/recover_internal.h"

fescue_status recover_growth(const struct recover_request *request, struct low_rank *out)
{
    struct problem *problem = request->problem;
    const struct solve_limits limits = {.iterations = (uint64_t)request->steps,
                                        .gradient = 1e-9,
                                        .change = request->weight,
                                        .deadline = request->deadline};
    struct solve_result result = {0};
    fescue_status status = low_rank_create(problem->context, problem->target.rows, problem->target.columns, 0, out);
    while (status == FESCUE_OK && out->rank < request->rank) {
        TRY(start_grow(problem, request->seed, out));
        if (out->rank < request->rank)
            TRY(solve_run(problem, &grassmann_cg_solver, &limits, out, &result));
    }
done:
    solve_result_free(problem->context, &result);
    return status;
}
