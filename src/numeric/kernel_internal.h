/* SPDX-License-Identifier: MIT
 *
 * Which instruction set the kernels are taken for: all of them for the same.
 */
#ifndef FESCUE_NUMERIC_KERNEL_INTERNAL_H
#define FESCUE_NUMERIC_KERNEL_INTERNAL_H

#include "numeric/batch_internal.h"
#include "numeric/sweep_internal.h"
#include "numeric/tall_internal.h"

struct kernel_set {
    const char *name;
    const struct sweep_kernel *sweep[2]; /* by enum fescue_precision */
    const struct batch_kernel *batch;
    const struct tall_kernel *tall;
};

/* The best that this processor can run, or the one FESCUE_KERNEL names, as far as the processor has it. */
const struct kernel_set *kernel_set_choose(void);

#endif
