/* SPDX-License-Identifier: MIT
 *
 * Stochastic gradient steps on the Grassmann manifold, preconditioned, with steps that shrink by rule and the mean of
 * the iterates along geodesics: minibatch.c has the method, stream.c the frame. A step costs what its batch does; the
 * noise of the batches is averaged out as the steps shrink, and the error falls like one over the number of steps.
 */
#include "solve/stream_internal.h"

static fescue_status stochastic_pass(struct stream *stream)
{
    static const struct minibatch_rules rules = {.shrinking = true};
    return minibatch_pass(stream, &rules);
}

static const struct stream_kind stochastic_kind = {
    .own = sizeof(struct minibatch),
    .width = minibatch_width,
    .reserve = minibatch_reserve,
    .carve = minibatch_carve,
    .pass = stochastic_pass,
    .keep = minibatch_keep,
};

static fescue_status stochastic_create(struct field *field, const struct low_rank *point, void **state)
{
    return stream_create(&stochastic_kind, field, point, state);
}

const struct solver grassmann_stochastic_solver = {
    .name = "grassmann-stochastic",
    .summary = "gradient steps over a few lines at a time, shrinking and averaged along geodesics, then Newton steps",
    .width = 1,
    .create = stochastic_create,
    .measure = stream_measure,
    .step = stream_step,
    .keep = stream_keep,
    .resume = stream_resume,
    .point_write = stream_point_write,
    .destroy = stream_destroy,
};
