/* SPDX-License-Identifier: MIT
 *
 * What a finished run of the driver leaves in the memo: its point, its lines of the trace, why it ended; and by what it
 * is known. What a run leaves while it lasts is in run.c.
 */
#include "solve/solve_internal.h"

#include <string.h>

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

uint64_t run_digest(const struct problem *problem, const struct solver *solver, const struct solve_limits *limits,
                    const struct low_rank *point)
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

void run_keep(struct memo_work *work, struct low_rank *point, struct solve_result *result, uint64_t before)
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

fescue_status run_recall(fescue_context *context, struct memo_work *work, const struct solver *solver,
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
