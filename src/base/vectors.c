/* SPDX-License-Identifier: MIT
 *
 * Which vector instructions may be used, at run time. FESCUE_KERNEL=portable|avx2|avx512 lowers it. What is read, and
 * the bits of what is computed for one choice, do not depend on where that choice was made.
 */
#include "base/base.h"

#include <stdlib.h>
#include <string.h>

enum vectors vectors_there(void)
{
#if defined(__x86_64__)
    __builtin_cpu_init();
    if (!__builtin_cpu_supports("avx2") || !__builtin_cpu_supports("fma") || !__builtin_cpu_supports("bmi") ||
        !__builtin_cpu_supports("bmi2"))
        return VECTORS_NONE;
    if (__builtin_cpu_supports("avx512f") && __builtin_cpu_supports("avx512vl") && __builtin_cpu_supports("avx512dq"))
        return VECTORS_AVX512;
    return VECTORS_AVX2;
#else
    return VECTORS_NONE;
#endif
}

enum vectors vectors_choose(void)
{
    static const char *const names[] = {
        [VECTORS_NONE] = "portable", [VECTORS_AVX2] = "avx2", [VECTORS_AVX512] = "avx512"};
    const char *wish = getenv("FESCUE_KERNEL");
    enum vectors most = vectors_there();
    for (enum vectors k = VECTORS_NONE; wish != NULL && k <= most; k++)
        if (strcmp(wish, names[k]) == 0)
            return k;
    return most;
}
