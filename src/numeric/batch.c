/* SPDX-License-Identifier: MIT
 *
 * Eight small systems side by side: what batch_kernel.h does, by the kernel of the instruction set.
 */
#include "numeric/kernel_internal.h"

#include <float.h>

const char *kernel_name(void)
{
    return kernel_set_choose()->name;
}

const struct batch_kernel *batch_kernel_choose(void)
{
    return kernel_set_choose()->batch;
}

unsigned packed_batch_solve(const struct batch_kernel *kernel, double *a, size_t k, double *b, double *inverse)
{
    return kernel->solve(a, k, b, inverse, DBL_EPSILON);
}

void gram_add(const struct batch_kernel *kernel, const double *left, const double *right, size_t count, size_t size,
              double *square)
{
    kernel->gram(left, right, count, size, factor_stride(size), square);
}

void packed_batch_unpack(const struct batch_kernel *kernel, const double *batch, size_t size,
                         double *const line[BATCH_LANES])
{
    kernel->unpack(batch, size, line);
}
