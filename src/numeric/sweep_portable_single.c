/* SPDX-License-Identifier: MIT
 *
 * The sweep kernels in single precision in plain C.
 */
#include "numeric/sweep_internal.h"

#define REAL float
#define LANES 4
#define MADD(a, b, c) ((a) * (b) + (c))
#define SWEEP_KERNEL sweep_portable_single
#include "numeric/sweep_kernel.h"
