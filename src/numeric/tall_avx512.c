/* SPDX-License-Identifier: MIT
 *
 * The kernels on tall matrices for processors with AVX-512 (F, VL, DQ).
 */
#include "numeric/tall_internal.h"

#if defined(__x86_64__)
#include <immintrin.h>

#if defined(__clang__)
#pragma clang attribute push(__attribute__((target("avx512f,avx512vl,avx512dq,fma"))), apply_to = function)
#else
#pragma GCC target("avx512f,avx512vl,avx512dq,fma")
#endif

#define LANES 8
#define TILE_ROWS 8
#define MADD(a, b, c) _mm512_fmadd_pd(a, b, c)
#define TALL_KERNEL tall_avx512
#include "numeric/tall_kernel.h"

#if defined(__clang__)
#pragma clang attribute pop
#endif
#endif
