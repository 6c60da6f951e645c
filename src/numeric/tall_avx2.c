/* SPDX-License-Identifier: MIT
 *
 * The kernels on tall matrices for processors with AVX2 and FMA.
 */
#include "numeric/tall_internal.h"

#if defined(__x86_64__)
#include <immintrin.h>

#if defined(__clang__)
#pragma clang attribute push(__attribute__((target("avx2,fma"))), apply_to = function)
#else
#pragma GCC target("avx2,fma")
#endif

#define LANES 4
#define TILE_ROWS 4
#define MADD(a, b, c) _mm256_fmadd_pd(a, b, c)
#define TALL_KERNEL tall_avx2
#include "numeric/tall_kernel.h"

#if defined(__clang__)
#pragma clang attribute pop
#endif
#endif
