/* SPDX-License-Identifier: MIT
 *
 * The kernels on batches of lines in plain C.
 */
#include "numeric/batch_internal.h"

#define LANES 2
#define MADD(a, b, c) ((a) * (b) + (c))
#define SQRT(x) ((vec){sqrt((x)[0]), sqrt((x)[1])})
#define BATCH_KERNEL batch_portable
#include "numeric/batch_kernel.h"
