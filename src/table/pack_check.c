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

/* A direction is looked at in pieces of about so many cells and lines: a cache holds one while it is told of and looked
   at. */
enum { PIECE = 1 << 15 };

struct check {
    const struct cells *cells;
    const struct pack_watch *watch;
    enum vectors vectors;
    struct pack_key key;
    uint64_t row_pieces; /* those of the columns follow */
    _Atomic uint64_t sum[2];
    _Atomic bool is_faulty; /* in positions or values */
};

static bool offsets_are_sound(const struct half *half, uint64_t count)
{
    bool falls = half->start[0] != 0 || half->start[half->lines] != count;
    for (uint32_t i = 0; i < half->lines; i++)
        falls |= half->start[i] > half->start[i + 1];
    return !falls;
}

static uint64_t pieces_of(const struct half *half)
{
    return (half->start[half->lines] + half->lines) / PIECE + 1;
}

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

static void piece_check(void *job, size_t task, size_t worker)
{
    struct check *check = job;
    const bool is_column = task >= check->row_pieces;
    const uint64_t piece = is_column ? task - check->row_pieces : task;
    const struct half *half = is_column ? &check->cells->by_column : &check->cells->by_row;
    const struct pack_lines lines = {
        .half = half,
        .precision = check->cells->precision,
        .is_column = is_column,
        .first = half_line_at_work(half, piece * PIECE),
        .end = half_line_at_work(half, (piece + 1) * PIECE),
        .key = &check->key,
    };
    uint64_t sum;
    (void)worker;
    lines_tell(check, &lines);
    if (!pack_lines_look(&lines, check->vectors, &sum))
        atomic_store(&check->is_faulty, true);
    atomic_fetch_add(&check->sum[is_column], sum);
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
    if (!offsets_are_sound(&cells->by_row, cells->count) || !offsets_are_sound(&cells->by_column, cells->count))
        return "its offsets are out of order";
    key_draw(&check);
    check.row_pieces = pieces_of(&cells->by_row);
    team_run(context, (size_t)(check.row_pieces + pieces_of(&cells->by_column)), piece_check, &check);
    if (atomic_load(&check.is_faulty))
        return "it has positions out of order or outside, or values that are not finite";
    if (check.sum[0] != check.sum[1])
        return "its rows and its columns hold different cells";
    return NULL;
}
