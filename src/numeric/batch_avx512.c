/* SPDX-License-Identifier: MIT
 *
 * The kernels on batches of lines for processors with AVX-512 (F, VL, DQ).
 */
#include "numeric/batch_internal.h"

#if defined(__x86_64__)
#include <immintrin.h>

#if defined(__clang__)
#pragma clang attribute push(__attribute__((target("avx512f,avx512vl,avx512dq,fma"))), apply_to = function)
#else
#pragma GCC target("avx512f,avx512vl,avx512dq,fma")
#endif

#define LANES 8
#define MADD(a, b, c) _mm512_fmadd_pd(a, b, c)
#define SQRT(x) _mm512_sqrt_pd(x)
#define BATCH_KERNEL batch_avx512
#include "numeric/batch_kernel.h"

#if defined(__clang__)
#pragma clang attribute pop
#endif
#endif
