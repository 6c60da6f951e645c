/* SPDX-License-Identifier: MIT
 *
 * The sweep kernels in single precision for processors with AVX-512 (F, VL, DQ).
 *
 * Eight floats a register, so that rank 5 or 8 is not half padding, and eight doubles to add them up in. Processors
 * that do 512 bits in two halves (such as Zen 4, where this was measured) lose nothing by it at any rank, and have 32
 * of these registers. Sixteen where rows are turned.
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
#define TURNED 16
#define TURNED_MOST 2
#define TURNED_WIDTHS(X) X(8, 1, true) X(16, 1, false) X(32, 2, false)
#define MADD_TURNED(a, b, c) (turned) _mm512_fmadd_ps(a, b, c)
#define MSUB_TURNED(a, b, c) (turned) _mm512_fmsub_ps(a, b, c)
#define MADD_PIECE(a, b, c) (piece) _mm_fmadd_ps(a, b, c)
#define TURNED_AHEAD(n) ((n) == 1)
#define TURNED_MIX(a, b) (turned) _mm512_mask_blend_ps(0xcccc, a, b)
#define PIECE_REPEAT(x) (turned) _mm512_broadcast_f32x4(_mm_loadu_ps(x))
#define PIECE_ALONE(x) (turned) _mm512_zextps128_ps512(_mm_loadu_ps(x))
#define EIGHT(x) _mm512_castps256_ps512(_mm256_loadu_ps(x))
#define HALVES_JOIN(low, high) (turned) _mm512_mask_broadcast_f32x8(EIGHT(low), 0xff00, _mm256_loadu_ps(high))
/* two pieces as 0 0 1 1, and back; and as 0 . . 1 */
#define HALVES_TWICE(x) (turned) _mm512_shuffle_f32x4(EIGHT(x), EIGHT(x), 0x50)
#define HALVES_APART(x) (turned) _mm512_maskz_broadcast_f32x8(0xf00f, _mm256_loadu_ps(x))
#define HALVES_ONCE(x) (cells) _mm256_blend_ps(_mm512_castps512_ps256(x), _mm512_extractf32x8_ps(x, 1), 0xf0)
#define COMMON_REGISTERS(X) X(1) X(2) X(3) X(4)
#define SWEEP_KERNEL sweep_avx512_single
#include "numeric/sweep_kernel.h"

#if defined(__clang__)
#pragma clang attribute pop
#endif
#endif
