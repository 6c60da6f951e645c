/* SPDX-License-Identifier: MIT
 *
 * The sweep kernels in double precision for processors with AVX2 and FMA.
 */
#include "numeric/sweep_internal.h"

#if defined(__x86_64__)
#include <immintrin.h>

#if defined(__clang__)
#pragma clang attribute push(__attribute__((target("avx2,fma"))), apply_to = function)
#else
#pragma GCC target("avx2,fma")
#endif

#define REAL double
#define REAL_IS_DOUBLE
#define LANES 4
#define GROUP 4
#define MADD(a, b, c) _mm256_fmadd_pd(a, b, c)
#define MADD_WIDE(a, b, c) _mm256_fmadd_pd(a, b, c)
#define WIDES 1
#define SPREAD 2
#define SPREAD_LOAD(p) _mm256_broadcast_pd((const __m128d *)(const void *)(p))
#define SPREAD_LANE(x, c) _mm256_permute_pd(x, 0xf * (c))
#define TWO_PASSES(n) ((n) <= 2)
#define TURNED 4
#define TURNED_MOST 2
#define TURNED_WIDTHS(X) X(8, 2, false)
#define MADD_TURNED(a, b, c) (turned) _mm256_fmadd_pd(a, b, c)
#define MSUB_TURNED(a, b, c) (turned) _mm256_fmsub_pd(a, b, c)
#define MADD_PIECE(a, b, c) (piece) _mm_fmadd_pd(a, b, c)
#define TURNED_AHEAD(n) 0
#define TURNED_MIX(a, b) (turned) _mm256_blend_pd(a, b, 0xa)
#define PIECE_REPEAT(x) (turned) _mm256_broadcast_pd((const __m128d *)(const void *)(x))
#define PIECE_ALONE(x) (turned) _mm256_zextpd128_pd256(_mm_loadu_pd(x))
#define COMMON_REGISTERS(X) X(2) X(4) X(6) X(8)
#define SWEEP_KERNEL sweep_avx2_double
#include "numeric/sweep_kernel.h"

#if defined(__clang__)
#pragma clang attribute pop
#endif
#endif
