/* SPDX-License-Identifier: MIT
 *
 * Which vectors the loops over text and packs may use, at run time. FESCUE_KERNEL=portable|avx2|avx512 lowers it, as it
 * does for the kernels over cells; what is read is the same with all of them.
 */
#include "table/table_internal.h"

#include <stdlib.h>
#include <string.h>

enum vectors vectors_choose(void)
{
    enum vectors best = VECTORS_NONE;
#if defined(__x86_64__)
    const char *wish = getenv("FESCUE_KERNEL");
    __builtin_cpu_init();
    if (__builtin_cpu_supports("avx2") && __builtin_cpu_supports("bmi") && __builtin_cpu_supports("bmi2"))
        best = VECTORS_AVX2;
    if (best == VECTORS_AVX2 && __builtin_cpu_supports("avx512f") && __builtin_cpu_supports("avx512vl") &&
        __builtin_cpu_supports("avx512dq"))
        best = VECTORS_AVX512;
    if (wish != NULL && strcmp(wish, "portable") == 0)
        best = VECTORS_NONE;
    if (wish != NULL && strcmp(wish, "avx2") == 0 && best > VECTORS_AVX2)
        best = VECTORS_AVX2;
#endif
    return best;
}
