/* SPDX-License-Identifier: MIT
 *
 * The sweep kernels in single precision for processors with AVX-512 (F, VL, DQ).
 */
#include "numeric/sweep_internal.h"

#if defined(__x86_64__)
#include <immintrin.h>

#if defined(__clang__)
#pragma clang attribute push(__attribute__((target("avx512f,avx512vl,avx512dq,fma"))), apply_to = function)
#else
#pragma GCC target("avx512f,avx512vl,avx512dq,fma")
#endif

#define REAL float
#define LANES 16
#define MADD(a, b, c) _mm512_fmadd_ps(a, b, c)
#define MADD_WIDE(a, b, c) _mm512_fmadd_pd(a, b, c)
#define WIDES 2
#define LOWER(x) _mm512_cvtps_pd(_mm512_castps512_ps256(x))
#define UPPER(x) _mm512_cvtps_pd(_mm512_extractf32x8_ps(x, 1))
#define WIDEN_FOUR(x) _mm256_cvtps_pd(x)
#define COMMON_REGISTERS(X) X(1) X(2)
#define SWEEP_KERNEL sweep_avx512_single
#include "numeric/sweep_kernel.h"

#if defined(__clang__)
#pragma clang attribute pop
#endif
#endif
