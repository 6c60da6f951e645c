/* SPDX-License-Identifier: MIT
 *
 * The sweep kernels in double precision in plain C.
 */
#include "numeric/sweep_internal.h"

#define REAL double
#define REAL_IS_DOUBLE
#define LANES 2
#define GROUP 2
#define MADD(a, b, c) ((a) * (b) + (c))
#define MADD_WIDE(a, b, c) ((a) * (b) + (c))
#define WIDES 1
#define TWO_PASSES(n) 1
#define COMMON_REGISTERS(X) X(8)
#define SWEEP_KERNEL sweep_portable_double
#include "numeric/sweep_kernel.h"
