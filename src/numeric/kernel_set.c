/* SPDX-License-Identifier: MIT
 *
 * The choice among the kernels' instruction sets, at run time. FESCUE_KERNEL=portable|avx2|avx512 overrules it.
 */
#include "numeric/kernel_internal.h"

#include <stdlib.h>
#include <string.h>

static const struct kernel_set portable_set = {
    "portable", {&sweep_portable_double, &sweep_portable_single}, &batch_portable};

#if defined(__x86_64__)
static const struct kernel_set avx2_set = {"avx2", {&sweep_avx2_double, &sweep_avx2_single}, &batch_avx2};
static const struct kernel_set avx512_set = {"avx512", {&sweep_avx512_double, &sweep_avx512_single}, &batch_avx512};

/* The sets this processor can run, the best first; NULL past the end. */
static const struct kernel_set *kernel_set_at(size_t k)
{
    const struct kernel_set *set[4] = {NULL};
    size_t count = 0;
    __builtin_cpu_init();
    if (__builtin_cpu_supports("avx512f") && __builtin_cpu_supports("avx512vl") && __builtin_cpu_supports("avx512dq"))
        set[count++] = &avx512_set;
    if (__builtin_cpu_supports("avx2") && __builtin_cpu_supports("fma"))
        set[count++] = &avx2_set;
    set[count] = &portable_set;
    return k <= count ? set[k] : NULL;
}
#else
static const struct kernel_set *kernel_set_at(size_t k)
{
    return k == 0 ? &portable_set : NULL;
}
#endif

const struct kernel_set *kernel_set_choose(void)
{
    const char *wish = getenv("FESCUE_KERNEL");
    for (size_t k = 0; wish != NULL && kernel_set_at(k) != NULL; k++)
        if (strcmp(wish, kernel_set_at(k)->name) == 0)
            return kernel_set_at(k);
    return kernel_set_at(0);
}
