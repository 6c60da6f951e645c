/* SPDX-License-Identifier: MIT
 *
 * The sweep kernels in single precision for processors with AVX2 and FMA.
 */
#include "numeric/sweep_internal.h"

#if defined(__x86_64__)
#include <immintrin.h>

#if defined(__clang__)
#pragma clang attribute push(__attribute__((target("avx2,fma"))), apply_to = function)
#else
#pragma GCC target("avx2,fma")
#endif

#define REAL float
#define LANES 8
#define GROUP 8
#define MADD(a, b, c) _mm256_fmadd_ps(a, b, c)
#define MADD_WIDE(a, b, c) _mm256_fmadd_pd(a, b, c)
#define WIDES 2
#define WIDEN(x, part) _mm256_cvtps_pd((part) == 0 ? _mm256_castps256_ps128(x) : _mm256_extractf128_ps(x, 1))
#define SPREAD 4
#define SPREAD_LOAD(p) _mm256_broadcast_ps((const __m128 *)(const void *)(p))
#define SPREAD_LANE(x, c) _mm256_permute_ps(x, 0x55 * (c))
#define TWO_PASSES(n) 1
#define TURNED 8
#define TURNED_MOST 1
#define TURNED_WIDTHS(X) X(8, 1, false)
#define MADD_TURNED(a, b, c) (turned) _mm256_fmadd_ps(a, b, c)
#define MSUB_TURNED(a, b, c) (turned) _mm256_fmsub_ps(a, b, c)
#define MADD_PIECE(a, b, c) (piece) _mm_fmadd_ps(a, b, c)
#define TURNED_AHEAD(n) 0
#define TURNED_MIX(a, b) (turned) _mm256_blend_ps(a, b, 0xcc)
#define PIECE_REPEAT(x) (turned) _mm256_broadcast_ps((const __m128 *)(const void *)(x))
#define PIECE_ALONE(x) (turned) _mm256_zextps128_ps256(_mm_loadu_ps(x))
#define COMMON_REGISTERS(X) X(1) X(2) X(3) X(4)
#define SWEEP_KERNEL sweep_avx2_single
#include "numeric/sweep_kernel.h"

#if defined(__clang__)
#pragma clang attribute pop
#endif
#endif
