/* SPDX-License-Identifier: MIT
 *
 * Cells put in order by counting, on all workers.
 *
 *     n[p][i]   while counting: the cells of line i in piece p; while placing: where the next of them goes
 *
 * The input is cut into P pieces of equally many cells, in their order, and every worker counts a piece. The places
 * follow line by line, and within a line piece by piece; so each piece knows where its cells go, whatever the others
 * do, and cells of a line keep the order of the input for any P: the result does not depend on the number of workers.
 * (Counting sort: Knuth 1998, The Art of Computer Programming 3, section 5.2, algorithm D; a transposition that reads
 * sorted lines is the second pass of a radix sort, section 5.2.5.)
 *
 * The counters of the last piece lie in start[], which is right when they have moved on to the next line's first cell
 * and are shifted by one place. The other pieces need (P - 1) lines counters; P is held so small that these are at most
 * half the bytes of the cells themselves, so that a table with hardly more cells than lines is sorted by one worker.
 *
 * Cost: two passes over the cells, the second with a write to a random line, and one over P lines counters.
 */
#include "table/table_internal.h"

#include <assert.h>
#include <string.h>

/* One sort: either runs of cells, or the cells of another half. */
struct sorting {
    struct half *to;
    const struct cell_run *runs;
    size_t run_count;
    const struct half *from;
    enum fescue_precision precision;
    uint64_t cells;
    size_t pieces;
    uint64_t *counters; /* of all pieces but the last */
};

static uint64_t *counters_of(const struct sorting *sorting, size_t piece)
{
    return piece + 1 == sorting->pieces ? sorting->to->start : sorting->counters + piece * (size_t)sorting->to->lines;
}

/* The cells of a piece are first .. end-1; the product fits, there being at most 2^10 workers and 2^50 cells. */
static uint64_t piece_first(const struct sorting *sorting, size_t piece)
{
    return sorting->cells * piece / sorting->pieces;
}

/* ---- runs of cells ---------------------------------------------------------------------------------------------- */

/* What of a run, whose first cell is cell `before` of the input, lies in the piece. */
static struct cell_run run_cut(const struct sorting *sorting, size_t piece, const struct cell_run *run, uint64_t before)
{
    uint64_t first = piece_first(sorting, piece), end = piece_first(sorting, piece + 1);
    size_t size = cell_size(sorting->precision);
    struct cell_run cut = *run;
    first = first < before ? 0 : first - before;
    end = end < before ? 0 : end - before < run->count ? end - before : run->count;
    if (first >= end)
        return (struct cell_run){0};
    cut.line += first;
    cut.across += first;
    cut.value = (const char *)run->value + first * size;
    cut.count = end - first;
    return cut;
}

static void run_count(const struct cell_run *run, uint64_t *counter)
{
    if (run->mirror == MIRROR_NONE)
        for (uint64_t k = 0; k < run->count; k++)
            counter[run->line[k]]++;
    else
        for (uint64_t k = 0; k < run->count; k++)
            counter[run->line[k]] += run->line[k] != run->across[k];
}

/* The loops below are compiled once for each size of a value, which is copied unseen. */
__attribute__((always_inline)) static inline void run_place_plain(struct half *to, const struct cell_run *run,
                                                                  uint64_t *counter, size_t size)
{
    const char *value = run->value;
    for (uint64_t k = 0; k < run->count; k++) {
        uint64_t at = counter[run->line[k]]++;
        to->across[at] = run->across[k];
        memcpy((char *)to->value + at * size, value + k * size, size);
    }
}

static void run_place_mirrored(struct half *to, const struct cell_run *run, uint64_t *counter,
                               enum fescue_precision precision)
{
    bool negated = run->mirror == MIRROR_NEGATED;
    for (uint64_t k = 0; k < run->count; k++) {
        if (run->line[k] == run->across[k])
            continue;
        uint64_t at = counter[run->line[k]]++;
        to->across[at] = run->across[k];
        if (precision == FESCUE_SINGLE) {
            float value = ((const float *)run->value)[k];
            ((float *)to->value)[at] = negated ? -value : value;
        } else {
            double value = ((const double *)run->value)[k];
            ((double *)to->value)[at] = negated ? -value : value;
        }
    }
}

static void run_place(struct half *to, const struct cell_run *run, uint64_t *counter, enum fescue_precision precision)
{
    if (run->mirror != MIRROR_NONE)
        run_place_mirrored(to, run, counter, precision);
    else if (precision == FESCUE_SINGLE)
        run_place_plain(to, run, counter, sizeof(float));
    else
        run_place_plain(to, run, counter, sizeof(double));
}

static void runs_count_piece(void *job, size_t piece, size_t worker)
{
    const struct sorting *sorting = job;
    uint64_t before = 0;
    (void)worker;
    for (size_t r = 0; r < sorting->run_count; before += sorting->runs[r++].count) {
        struct cell_run cut = run_cut(sorting, piece, &sorting->runs[r], before);
        run_count(&cut, counters_of(sorting, piece));
    }
}

static void runs_place_piece(void *job, size_t piece, size_t worker)
{
    const struct sorting *sorting = job;
    uint64_t before = 0;
    (void)worker;
    for (size_t r = 0; r < sorting->run_count; before += sorting->runs[r++].count) {
        struct cell_run cut = run_cut(sorting, piece, &sorting->runs[r], before);
        run_place(sorting->to, &cut, counters_of(sorting, piece), sorting->precision);
    }
}

/* ---- another half ----------------------------------------------------------------------------------------------- */

/* The first line whose cells begin at or behind the first cell of the piece: lines are not split. */
static uint32_t piece_line(const struct sorting *sorting, size_t piece)
{
    uint64_t first = piece_first(sorting, piece);
    uint32_t low = 0, high = sorting->from->lines;
    if (piece == sorting->pieces)
        return high;
    while (low < high) {
        uint32_t middle = low + (high - low) / 2;
        if (sorting->from->start[middle] < first)
            low = middle + 1;
        else
            high = middle;
    }
    return low;
}

static void half_count_piece(void *job, size_t piece, size_t worker)
{
    const struct sorting *sorting = job;
    const struct half *from = sorting->from;
    uint64_t *counter = counters_of(sorting, piece);
    uint64_t end = from->start[piece_line(sorting, piece + 1)];
    (void)worker;
    for (uint64_t k = from->start[piece_line(sorting, piece)]; k < end; k++)
        counter[from->across[k]]++;
}

__attribute__((always_inline)) static inline void lines_place(const struct half *from, struct half *to,
                                                              const uint32_t lines[2], uint64_t *counter, size_t size)
{
    const char *source = from->value;
    char *target = to->value;
    for (uint32_t i = lines[0]; i < lines[1]; i++)
        for (uint64_t k = from->start[i]; k < from->start[i + 1]; k++) {
            uint64_t at = counter[from->across[k]]++;
            to->across[at] = i;
            memcpy(target + at * size, source + k * size, size);
        }
}

static void half_place_piece(void *job, size_t piece, size_t worker)
{
    const struct sorting *sorting = job;
    const uint32_t lines[2] = {piece_line(sorting, piece), piece_line(sorting, piece + 1)};
    (void)worker;
    if (sorting->precision == FESCUE_SINGLE)
        lines_place(sorting->from, sorting->to, lines, counters_of(sorting, piece), sizeof(float));
    else
        lines_place(sorting->from, sorting->to, lines, counters_of(sorting, piece), sizeof(double));
}

/* ---- sorting ---------------------------------------------------------------------------------------------------- */

/* Below this many cells a worker is not worth waking. */
enum { LEAST_PIECE = 1 << 14 };

static size_t pieces_choose(const fescue_context *context, const struct sorting *sorting)
{
    uint64_t workers = team_workers(context), bytes = sizeof(uint32_t) + cell_size(sorting->precision);
    uint64_t affordable = 1 + sorting->cells * bytes / 2 / (sizeof(uint64_t) * ((uint64_t)sorting->to->lines + 1));
    uint64_t worthwhile = 1 + sorting->cells / LEAST_PIECE;
    uint64_t pieces = workers < affordable ? workers : affordable;
    return (size_t)(pieces < worthwhile ? pieces : worthwhile);
}

/* Counts become places. */
static void counters_sum(const struct sorting *sorting)
{
    uint64_t before = 0, *start = sorting->to->start;
    size_t lines = sorting->to->lines;
    for (size_t i = 0; i < lines; i++) {
        for (size_t p = 0; p + 1 < sorting->pieces; p++) {
            uint64_t *counter = &sorting->counters[p * lines + i], here = *counter;
            *counter = before;
            before += here;
        }
        uint64_t here = start[i];
        start[i] = before;
        before += here;
    }
    start[lines] = before;
}

static fescue_status sort(fescue_context *context, struct sorting *sorting, team_task *count, team_task *place)
{
    struct half *to = sorting->to;
    sorting->pieces = pieces_choose(context, sorting);
    fescue_status status = TAKE(context, (sorting->pieces - 1) * (size_t)to->lines, &sorting->counters);
    if (status != FESCUE_OK)
        return status;
    memset(to->start, 0, ((size_t)to->lines + 1) * sizeof *to->start);
    team_run(context, sorting->pieces, count, sorting);
    counters_sum(sorting);
    team_run(context, sorting->pieces, place, sorting);
    if (to->lines > 0)
        memmove(to->start + 1, to->start, to->lines * sizeof *to->start);
    to->start[0] = 0;
    GIVE(context, &sorting->counters);
    return FESCUE_OK;
}

fescue_status half_sort(fescue_context *context, const struct cell_run *runs, size_t count,
                        enum fescue_precision precision, struct half *half)
{
    struct sorting sorting = {.to = half, .runs = runs, .run_count = count, .precision = precision};
    for (size_t r = 0; r < count; r++)
        sorting.cells += runs[r].count;
    return sort(context, &sorting, runs_count_piece, runs_place_piece);
}

fescue_status half_transpose(fescue_context *context, const struct half *from, struct half *to,
                             enum fescue_precision precision)
{
    struct sorting sorting = {.to = to, .from = from, .precision = precision, .cells = from->start[from->lines]};
    assert(from->lines == to->length && from->length == to->lines);
    return sort(context, &sorting, half_count_piece, half_place_piece);
}
