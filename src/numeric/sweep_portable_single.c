/* SPDX-License-Identifier: MIT
 *
 * The sweep kernels in single precision in plain C.
 */
#include "numeric/sweep_internal.h"

#define REAL float
#define LANES 4
#define GROUP 4
#define MADD(a, b, c) ((a) * (b) + (c))
#define MADD_WIDE(a, b, c) ((a) * (b) + (c))
#define WIDES 2
#define WIDEN(x, part)                                                                                                 \
    __builtin_convertvector((part) == 0 ? __builtin_shufflevector(x, x, 0, 1) : __builtin_shufflevector(x, x, 2, 3),   \
                            wide)
#define TWO_PASSES(n) 1
#define COMMON_REGISTERS(X) X(4)
#define SWEEP_KERNEL sweep_portable_single
#include "numeric/sweep_kernel.h"
