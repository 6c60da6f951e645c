/* SPDX-License-Identifier: MIT
 *
 * Variance-reduced stochastic gradient steps on the Grassmann manifold, preconditioned (after Sato, Kasai, Mishra 2019,
 * "Riemannian stochastic variance reduced gradient algorithm with retraction and vector transport", algorithm 1):
 * minibatch.c has the method, stream.c the frame.
 *
 * Departures from the paper: the step is by rule; the first pass of a cold run, from a random basis whose gradient
 * tells nothing about where it leads, goes without variance reduction; the basis that the next pass starts from is the
 * mean of the last half of the iterates. So the first pass reads the table once; a later one twice, once for the
 * gradient of all lines (which is the evaluation that every iteration ends with) and once for the steps.
 */
#include "solve/stream_internal.h"

static fescue_status reduced_pass(struct stream *stream)
{
    static const struct minibatch_rules rules = {.reduced = true};
    return minibatch_pass(stream, &rules);
}

static const struct stream_kind reduced_kind = {
    .own = sizeof(struct minibatch),
    .width = minibatch_width,
    .reserve = minibatch_reserve,
    .carve = minibatch_carve,
    .pass = reduced_pass,
    .keep = minibatch_keep,
};

static fescue_status reduced_create(struct field *field, const struct low_rank *point, void **state)
{
    return stream_create(&reduced_kind, field, point, state);
}

const struct solver grassmann_variance_reduced_solver = {
    .name = "grassmann-variance-reduced",
    .summary = "gradient steps over a few lines at a time, corrected by the gradient of all, then Newton steps",
    .width = 1,
    .create = reduced_create,
    .measure = stream_measure,
    .step = stream_step,
    .keep = stream_keep,
    .resume = stream_resume,
    .point_write = stream_point_write,
    .destroy = stream_destroy,
};
