/* SPDX-License-Identifier: MIT
 *
 * The sweep kernels in single precision for processors with AVX-512 (F, VL, DQ).
 *
 * Eight floats a register, so that rank 5 or 8 is not half padding, and eight doubles to add them up in. Processors
 * that do 512 bits in two halves (such as Zen 4, where this was measured) lose nothing by it at any rank, and have 32
 * of these registers.
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
#define LANES 8
#define GROUP 8
#define MADD(a, b, c) _mm256_fmadd_ps(a, b, c)
#define MADD_WIDE(a, b, c) _mm512_fmadd_pd(a, b, c)
#define WIDES 1
#define WIDEN(x, part) _mm512_cvtps_pd(x)
#define SPREAD 4
#define SPREAD_LOAD(p) _mm256_broadcast_ps((const __m128 *)(const void *)(p))
#define SPREAD_LANE(x, c) _mm256_permute_ps(x, 0x55 * (c))
#define TWO_PASSES(n) 1
#define COMMON_REGISTERS(X) X(1) X(2) X(3) X(4)
#define SWEEP_KERNEL sweep_avx512_single
#include "numeric/sweep_kernel.h"

#if defined(__clang__)
#pragma clang attribute pop
#endif
#endif
