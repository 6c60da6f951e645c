/* SPDX-License-Identifier: MIT
 *
 * The sweep kernels in double precision for processors with AVX-512 (F, VL, DQ).
 */
#include "numeric/sweep_internal.h"

#if defined(__x86_64__)
#include <immintrin.h>

#if defined(__clang__)
#pragma clang attribute push(__attribute__((target("avx512f,avx512vl,avx512dq,fma"))), apply_to = function)
#else
#pragma GCC target("avx512f,avx512vl,avx512dq,fma")
#endif

#define REAL double
#define REAL_IS_DOUBLE
#define LANES 8
#define GROUP 4
#define MADD(a, b, c) _mm512_fmadd_pd(a, b, c)
#define MADD_WIDE(a, b, c) _mm512_fmadd_pd(a, b, c)
#define MADD_SQUARES(a, b, c) _mm256_fmadd_pd(a, b, c)
#define WIDES 1
#define NARROW &sweep_avx2_double /* whose four lanes need no halving of sums */
#define TWO_PASSES(n) 0
#define TURNED 8
#define TURNED_MOST 4
#define TURNED_WIDTHS(X) X(8, 1, false) X(16, 2, false) X(24, 3, false) X(32, 4, false)
#define MADD_TURNED(a, b, c) (turned) _mm512_fmadd_pd(a, b, c)
#define MSUB_TURNED(a, b, c) (turned) _mm512_fmsub_pd(a, b, c)
#define MADD_PIECE(a, b, c) (piece) _mm_fmadd_pd(a, b, c)
#define TURNED_AHEAD(n) ((n) <= 2)
#define TURNED_MIX(a, b) (turned) _mm512_mask_blend_pd(0xaa, a, b)
#define PIECE_REPEAT(x) (turned) _mm512_broadcast_f64x2(_mm_loadu_pd(x))
#define PIECE_ALONE(x) (turned) _mm512_zextpd128_pd512(_mm_loadu_pd(x))
#define COMMON_REGISTERS(X) X(1) X(2) X(3) X(4)
#define SWEEP_KERNEL sweep_avx512_double
#include "numeric/sweep_kernel.h"

#if defined(__clang__)
#pragma clang attribute pop
#endif
#endif
