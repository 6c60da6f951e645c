/* SPDX-License-Identifier: MIT
 *
 * The kernels on batches of lines for processors with AVX2 and FMA.
 */
#include "numeric/batch_internal.h"

#if defined(__x86_64__)
#include <immintrin.h>

#if defined(__clang__)
#pragma clang attribute push(__attribute__((target("avx2,fma"))), apply_to = function)
#else
#pragma GCC target("avx2,fma")
#endif

#define LANES 4
#define MADD(a, b, c) _mm256_fmadd_pd(a, b, c)
#define SQRT(x) _mm256_sqrt_pd(x)
#define BATCH_KERNEL batch_avx2
#include "numeric/batch_kernel.h"

#if defined(__clang__)
#pragma clang attribute pop
#endif
#endif
