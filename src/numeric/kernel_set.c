/* SPDX-License-Identifier: MIT
 *
 * The kernels of each instruction set.
 */
#include "numeric/kernel_internal.h"

static const struct kernel_set sets[] = {
    [VECTORS_NONE] = {"portable", {&sweep_portable_double, &sweep_portable_single}, &batch_portable, &tall_portable},
#if defined(__x86_64__)
    [VECTORS_AVX2] = {"avx2", {&sweep_avx2_double, &sweep_avx2_single}, &batch_avx2, &tall_avx2},
    [VECTORS_AVX512] = {"avx512", {&sweep_avx512_double, &sweep_avx512_single}, &batch_avx512, &tall_avx512},
#endif
};

const struct kernel_set *kernel_set_choose(void)
{
    return &sets[vectors_choose()];
}
