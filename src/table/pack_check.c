/* SPDX-License-Identifier: MIT
 *
 * Whether the two directions of a pack are those of one table.
 *
 * Each direction by itself: offsets that start at 0, never fall and end at the number of cells; positions that ascend
 * within each line and lie inside; finite values. Then both have equally many cells, none twice, and hold the same ones
 * if and only if they are equal as sets of (row, column, value's bits). Both directions sum a number that is made of
 * each cell (pack_lines.c) modulo 2^64: equal sets have equal sums, in whatever order they come and however many
 * workers add. Sets that differ in one cell never have, since the number is one to one in its position and in its
 * value; others would have to be made so that the differences cancel, which nobody can arrange for multipliers that he
 * cannot know: they are drawn with a seed that changes from run to run. (Sums of hashes for sets: Clarke et al. 2003,
 * "Incremental multiset hash functions and their application to memory integrity checking", Asiacrypt, section 5; the
 * mixing by products and shifts is ours, and promises less than theirs.) Cost: one pass over each direction.
 */
#include "table/pack_internal.h"

#include <stdatomic.h>
#include <string.h>

/* Of each direction: pieces so small that a cache holds one while it is told of and looked at; and runs of them for one
   worker, since what is told of a piece brings much of the next ones into its cache. */
enum { PIECES = 256, PIECES_A_RUN = 4, RUNS = PIECES / PIECES_A_RUN };

struct check {
    const struct cells *cells;
    const struct pack_watch *watch;
    enum vectors vectors;
    struct pack_key key;
    _Atomic uint64_t sum[2];
    _Atomic unsigned faults; /* bits by enum fault */
};

enum fault { FAULT_OFFSETS, FAULT_POSITIONS, FAULT_DIFFERENCE, FAULTS };
static const char *const fault_texts[FAULTS] = {
    [FAULT_OFFSETS] = "its offsets are out of order",
    [FAULT_POSITIONS] = "it has positions out of order or outside, or values that are not finite",
    [FAULT_DIFFERENCE] = "its rows and its columns hold different cells",
};

static void fault_set(struct check *check, enum fault fault)
{
    atomic_fetch_or(&check->faults, 1u << fault);
}

/* A half's first and last offsets are right, and those of the lines ascend: so their cells are inside. */
static void lines_tell(const struct check *check, const struct pack_lines *lines)
{
    const struct half *half = lines->half;
    const uint64_t from = half->start[lines->first], to = half->start[lines->end];
    const size_t size = cell_size(lines->precision);
    if (from == to)
        return;
    check->watch->tell(check->watch->data, half->across + from, half->across + to);
    check->watch->tell(check->watch->data, (const char *)half->value + from * size,
                       (const char *)half->value + to * size);
}

static void piece_check(struct check *check, bool is_column, uint64_t piece)
{
    const struct half *half = is_column ? &check->cells->by_column : &check->cells->by_row;
    const struct pack_lines lines = {
        .half = half,
        .precision = check->cells->precision,
        .is_column = is_column,
        .first = (uint32_t)(half->lines * piece / PIECES),
        .end = (uint32_t)(half->lines * (piece + 1) / PIECES),
        .key = &check->key,
    };
    uint64_t sum;
    if (!pack_offsets_ascend(&lines) || half->start[lines.end] > check->cells->count) {
        fault_set(check, FAULT_OFFSETS);
        return;
    }
    lines_tell(check, &lines);
    if (!pack_lines_look(&lines, check->vectors, &sum))
        fault_set(check, FAULT_POSITIONS);
    atomic_fetch_add(&check->sum[is_column], sum);
}

static void run_check(void *job, size_t run, size_t worker)
{
    (void)worker;
    for (uint64_t k = 0; k < PIECES_A_RUN; k++)
        piece_check(job, run >= RUNS, run % RUNS * PIECES_A_RUN + k);
}

/* By a seed that whoever made the file cannot know: where we lie, and when. */
static void key_draw(struct check *check)
{
    uint64_t seed;
    double now = clock_wall();
    memcpy(&seed, &now, sizeof seed);
    struct random_stream stream = random_open(seed ^ (uint64_t)(uintptr_t)check << 16, RANDOM_PROBE, 0);
    check->key.added = random_bits(&stream);
    for (int k = 0; k < 3; k++)
        check->key.odd[k] = random_bits(&stream) | 1;
}

const char *pack_check_cells(fescue_context *context, const struct cells *cells, const struct pack_watch *watch,
                             enum vectors vectors)
{
    struct check check = {.cells = cells, .watch = watch, .vectors = vectors};
    const struct half *rows = &cells->by_row, *columns = &cells->by_column;
    if (rows->start[0] != 0 || rows->start[rows->lines] != cells->count || columns->start[0] != 0 ||
        columns->start[columns->lines] != cells->count)
        return fault_texts[FAULT_OFFSETS];
    key_draw(&check);
    team_run(context, 2 * (size_t)RUNS, run_check, &check);
    unsigned faults = atomic_load(&check.faults);
    if (faults == 0 && check.sum[0] != check.sum[1])
        faults = 1u << FAULT_DIFFERENCE;
    return faults == 0 ? NULL : fault_texts[__builtin_ctz(faults)];
}
