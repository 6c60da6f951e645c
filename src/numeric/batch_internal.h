/* SPDX-License-Identifier: MIT
 *
 * Between the operations on batches of eight (batch.c, moments.c) and their kernels (batch_kernel.h, included once for
 * each instruction set).
 */
#ifndef FESCUE_NUMERIC_BATCH_INTERNAL_H
#define FESCUE_NUMERIC_BATCH_INTERNAL_H

#include "numeric/numeric.h"

/* Cells of one line whose moments are added in one go. 48 positions of 512 bytes (a tile of moments.c) leave room in a
   nearest cache of 32 KB for the sums. */
enum { BATCH_STRETCH = 48 };
/* Cells ahead of which moments in halves are asked for, some hundred nanoseconds; half as many where they are in
   doubles. */
enum { BATCH_AHEAD = 16 };
/* Numbers in a block of halves: a line of the caches. */
enum { BATCH_BLOCK = 16 };
struct batch_stretch {
    size_t count;
    bool is_far; /* halves lie in main memory: they are asked into the second cache, which can wait for more of them at
                    once than the first */
    size_t offset[BATCH_STRETCH + BATCH_AHEAD]; /* of the position's moment, in doubles; of halves, in words. And of the
                                                   cells ahead, where they are asked for */
    double factor[BATCH_STRETCH];               /* its weight c */
    double pull[BATCH_STRETCH];                 /* c z */
};

struct batch_kernel {
    /* sum[0 .. size-1] += sum over the stretch of factor * data[offset + 0 .. size-1], size rounded up to 8. Where it
       is not near, what the cells ahead will need is asked for. */
    void (*add)(const double *data, const struct batch_stretch *stretch, const double *factor, size_t size, bool ahead,
                double *sum);
    /* The same, always asking ahead, of `blocks` blocks of halves, and of the first of them, which hold `mean` numbers,
       with pull into target. sum and target have room for whole blocks, target for two at least; one of them may be
       NULL. */
    void (*add_halves)(const uint64_t *data, const struct batch_stretch *stretch, size_t blocks, size_t mean,
                       double *sum, double *target);
    void (*gram)(const double *left, const double *right, size_t count, size_t size, size_t stride, double *square);
    /* epsilon: of the arithmetic that A was summed up in */
    unsigned (*solve)(double *a, size_t k, double *b, double *inverse, double epsilon);
    void (*pack)(const double *lines, size_t stride, size_t size, double *batch);
    void (*unpack)(const double *batch, size_t size, double *const line[BATCH_LANES]);
};
/* A line's sums in the order of halves become a packed triangle, in place, by way of d numbers of room. */
void moments_restore(size_t d, size_t one, double *room, double *numbers);

extern const struct batch_kernel batch_portable;
#if defined(__x86_64__)
extern const struct batch_kernel batch_avx2, batch_avx512;
#endif

#endif
