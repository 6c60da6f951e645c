/* SPDX-License-Identifier: MIT
 *
 * What the machine does at best, on one thread: matrix products in both precisions, bytes copied (read and written,
 * both counted), and bytes that zlib inflates from the kind of text that tables are.
 *
 * And what two threads give over one, of products that a cache holds and of copies that none holds: on a virtual
 * machine whose processors share a core, or that has other work, that is less than two, and not always the same. So it
 * is measured again beside every figure that is compared with it.
 */
#include "figures.h"

#include "numeric/numeric.h"

#include <cblas.h>
#include <stdio.h>
#include <stdlib.h>
#include <string.h>
#include <zlib.h>

enum { SIZE = 768, COPY_BYTES = 256 << 20, TEXT_BYTES = 16 << 20 };

static double *gemm_room(void)
{
    static double *room;
    if (room == NULL) {
        struct matrix none = {0};
        matrix_multiply(1, none, false, none, false, 0, none); /* holds OpenBLAS at one thread */
        room = bench_take(3 * SIZE * SIZE, sizeof *room);
    }
    return room;
}

void gemm_double_run(void *none)
{
    double *a = gemm_room();
    (void)none;
    cblas_dgemm(CblasRowMajor, CblasNoTrans, CblasNoTrans, SIZE, SIZE, SIZE, 1, a, SIZE, a + SIZE * SIZE, SIZE, 0,
                a + 2 * SIZE * SIZE, SIZE);
}

void gemm_single_run(void *none)
{
    float *a = (float *)(void *)gemm_room();
    (void)none;
    cblas_sgemm(CblasRowMajor, CblasNoTrans, CblasNoTrans, SIZE, SIZE, SIZE, 1, a, SIZE, a + SIZE * SIZE, SIZE, 0,
                a + 2 * SIZE * SIZE, SIZE);
}

struct bytes {
    unsigned char *from, *to;
    size_t from_size, to_size;
};

static void copy_run(void *argument)
{
    struct bytes *bytes = argument;
    memcpy(bytes->to, bytes->from, bytes->from_size);
}

static void inflate_run(void *argument)
{
    struct bytes *bytes = argument;
    uLongf size = bytes->to_size;
    if (uncompress(bytes->to, &size, bytes->from, bytes->from_size) != Z_OK)
        exit(1);
}

static double copy_rate(void)
{
    struct bytes bytes = {bench_take(COPY_BYTES, 1), bench_take(COPY_BYTES, 1), COPY_BYTES, COPY_BYTES};
    double seconds = bench_seconds(1, copy_run, &bytes);
    free(bytes.from);
    free(bytes.to);
    return 2.0 * COPY_BYTES / seconds;
}

static double inflate_rate(void)
{
    struct bytes bytes = {bench_take(TEXT_BYTES, 1), bench_take(TEXT_BYTES + 64, 1), TEXT_BYTES, TEXT_BYTES};
    struct random_stream stream = random_open(1, RANDOM_TEST, 0);
    size_t size = 0;
    while (size + 40 < TEXT_BYTES)
        size +=
            (size_t)sprintf((char *)bytes.to + size, "%u %u %.1f\n", 1 + (unsigned)(size / 1400),
                            1 + (unsigned)random_below(&stream, 20000), 0.5 * (double)(1 + random_below(&stream, 10)));
    uLongf packed = TEXT_BYTES;
    if (compress2(bytes.from, &packed, bytes.to, size, 6) != Z_OK)
        exit(1);
    bytes.from_size = packed;
    double seconds = bench_seconds(1, inflate_run, &bytes);
    free(bytes.from);
    free(bytes.to);
    return (double)size / seconds;
}

/* ---- two threads -------------------------------------------------------------------------------------------------
 */

enum { TWO_SIZE = 384, TWO_COPY = 32 << 20, TWO_ROUNDS = 7 };

struct two {
    fescue_context *context; /* of two threads */
    double *room[2];         /* three matrices, or two stretches of bytes */
};

static void two_multiply(void *job, size_t block, size_t worker)
{
    double *a = ((struct two *)job)->room[block];
    (void)worker;
    for (int k = 0; k < 2; k++)
        cblas_dgemm(CblasRowMajor, CblasNoTrans, CblasNoTrans, TWO_SIZE, TWO_SIZE, TWO_SIZE, 1, a, TWO_SIZE,
                    a + TWO_SIZE * TWO_SIZE, TWO_SIZE, 0, a + 2 * TWO_SIZE * TWO_SIZE, TWO_SIZE);
}

static void two_copy(void *job, size_t block, size_t worker)
{
    char *bytes = (char *)((struct two *)job)->room[block];
    (void)worker;
    memcpy(bytes + TWO_COPY, bytes, TWO_COPY);
}

/* Processor seconds of both blocks on this thread, over wall seconds of a block on each of two. */
static double two_times(struct two *two, team_task *task)
{
    double times[TWO_ROUNDS];
    for (int k = 0; k < TWO_ROUNDS; k++) {
        double cpu = clock_cpu();
        task(two, 0, 0);
        task(two, 1, 0);
        double wall = clock_wall();
        cpu = clock_cpu() - cpu;
        team_run(two->context, 2, task, two);
        times[k] = cpu / (clock_wall() - wall);
    }
    return bench_median(times, TWO_ROUNDS);
}

static const double block_seconds = 10e-6;

static void two_wait(void *job, size_t block, size_t worker)
{
    (void)job, (void)block, (void)worker;
    for (double end = clock_wall() + block_seconds; clock_wall() < end;)
        ;
}

/* Seconds of a round of two short blocks over those of one block: what calling the other thread costs. */
static double two_call(struct two *two)
{
    enum { ROUNDS = 1000 };
    double seconds[TWO_ROUNDS];
    for (int k = 0; k < TWO_ROUNDS; k++) {
        double wall = clock_wall();
        for (int round = 0; round < ROUNDS; round++)
            team_run(two->context, 2, two_wait, two);
        seconds[k] = (clock_wall() - wall) / ROUNDS - block_seconds;
    }
    return bench_median(seconds, TWO_ROUNDS);
}

static struct two *two_open(void)
{
    static struct two two;
    if (two.context != NULL)
        return &two;
    if (fescue_context_create(NULL, &two.context) != FESCUE_OK)
        exit(1);
    bench_check(two.context, team_resize(two.context, 2));
    gemm_room();
    for (int k = 0; k < 2; k++)
        two.room[k] = bench_take(2, TWO_COPY);
    return &two;
}

void figure_times_add(json_t *figure, double times)
{
    struct two *two = two_open();
    json_object_set_new(figure, "times one thread", json_real(times));
    json_object_set_new(figure, "of products", json_real(two_times(two, two_multiply)));
    json_object_set_new(figure, "of copies", json_real(two_times(two, two_copy)));
}

/* ---- one thread --------------------------------------------------------------------------------------------------
 */

static void limit_add(struct bench *bench, enum bench_limit limit, const char *what, const char *unit, double rate)
{
    bench->limit[limit] = rate;
    figure_add(bench, json_pack("{s:s, s:i, s:f}", "what", what, "threads", 1, unit, rate / 1e9));
}

void limits_measure(struct bench *bench)
{
    figure_add(bench, json_pack("{s:s, s:s}", "what", "limit: products", "kernels", openblas_kernels()));
    limit_add(bench, LIMIT_DGEMM, "limit: dgemm", "GFLOP/s", GEMM_FLOPS / bench_seconds(1, gemm_double_run, NULL));
    limit_add(bench, LIMIT_SGEMM, "limit: sgemm", "GFLOP/s", GEMM_FLOPS / bench_seconds(1, gemm_single_run, NULL));
    limit_add(bench, LIMIT_COPY, "limit: copy, read and written", "GB/s", copy_rate());
    limit_add(bench, LIMIT_INFLATE, "limit: inflate, text out", "GB/s", inflate_rate());
    struct two *two = two_open();
    bench->limit[LIMIT_TWO_DGEMM] = two_times(two, two_multiply);
    bench->limit[LIMIT_TWO_COPY] = two_times(two, two_copy);
    figure_add(bench, json_pack("{s:s, s:i, s:f, s:f}", "what", "limit: times one thread", "threads", 2, "of products",
                                bench->limit[LIMIT_TWO_DGEMM], "of copies", bench->limit[LIMIT_TWO_COPY]));
    figure_add(bench, json_pack("{s:s, s:i, s:f}", "what", "limit: calling the other", "threads", 2, "us",
                                1e6 * two_call(two)));
}
