/* SPDX-License-Identifier: MIT
 *
 * OpenBLAS as a whole: how many threads it has, and which of its sets of kernels it took.
 *
 * It takes one when it is loaded, before main, by the model of the processor. One that is younger than the library it
 * takes for the plainest there is ("Prescott": SSE3), which multiplies at a fifth of what the processor can do. The
 * environment variable OPENBLAS_CORETYPE names another; it is read only then.
 */
#include "base/base.h"

#include <stdlib.h>
#include <string.h>

/* Its header is not part of the CBLAS standard, hence the declarations. */
void openblas_set_num_threads(int threads);
char *openblas_get_corename(void);

void openblas_hold(void)
{
    openblas_set_num_threads(1);
}

const char *openblas_kernels(void)
{
    return openblas_get_corename();
}

/* The names are OpenBLAS's, what each needs is what it is compiled for. */
static const char *kernels_possible(void)
{
#if defined(__x86_64__)
    enum vectors vectors = vectors_there();
    if (vectors == VECTORS_AVX512 && __builtin_cpu_supports("avx512cd") && __builtin_cpu_supports("avx512bw"))
        return __builtin_cpu_supports("avx512vnni") && __builtin_cpu_supports("avx512bf16") ? "Cooperlake" : "SkylakeX";
    return vectors >= VECTORS_AVX2 ? "Haswell" : NULL;
#else
    return NULL;
#endif
}

const char *fescue_openblas_kernels_missed(void)
{
    if (getenv("OPENBLAS_CORETYPE") != NULL || strcmp(openblas_kernels(), "Prescott") != 0)
        return NULL;
    return kernels_possible();
}
