/* SPDX-License-Identifier: MIT
 *
 * Whether the two directions of a pack are those of one table.
 *
 * Each direction by itself: offsets that start at 0, never fall and end at the number of cells; positions that ascend
 * within each line and lie inside; finite values. Then both have equally many cells, none twice, and hold the same ones
 * if and only if their matrices are equal, those of ones and those of values (taken as whole numbers by their bits).
 * With random numbers u of the rows, v of the columns and z, both directions sum
 *
 *     S = sum over cells (i,j) of u_i v_j (1 + z w_ij)     modulo 2^64      w_ij the value's bits
 *
 * A difference D of the matrices leaves S equal only if sum u_i (D v)_i = 0 (Freivalds 1977, "Probabilistic machines
 * can use less running time": a random vector tells products apart), which nobody can arrange for numbers that he
 * cannot know: they are drawn with a seed that changes from run to run. Cost: one pass over each direction, and 8 bytes
 * a line. Sums modulo 2^64 do not depend on their order, nor on the number of workers.
 */
#include "table/pack_internal.h"

#include <stdatomic.h>
#include <string.h>

enum { DRAWS_A_PIECE = 1 << 12 }; /* of random numbers: some 40 microseconds */

struct check {
    const struct cells *cells;
    const struct pack_watch *watch;
    size_t pieces;       /* of each direction */
    uint64_t *random[2]; /* u, v */
    uint64_t seed, z;
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

static inline uint64_t value_bits(const struct half *half, uint64_t k, enum fescue_precision precision)
{
    if (precision == FESCUE_SINGLE) {
        uint32_t bits;
        memcpy(&bits, (const float *)half->value + k, sizeof bits);
        return bits;
    }
    uint64_t bits;
    memcpy(&bits, (const double *)half->value + k, sizeof bits);
    return bits;
}

/* All bits of the exponent are set in an infinity and in what is not a number. */
static inline bool is_finite_bits(uint64_t bits, enum fescue_precision precision)
{
    const uint64_t exponent = precision == FESCUE_SINGLE ? UINT64_C(0x7f800000) : UINT64_C(0x7ff0000000000000);
    return (bits & exponent) != exponent;
}

/* One line: false when it is out of order, or a value not finite; its sum of v_j (1 + z w_ij). */
__attribute__((always_inline)) static inline bool line_check(const struct half *half, uint32_t line,
                                                             const uint64_t *random, uint64_t z,
                                                             enum fescue_precision precision, uint64_t *sum)
{
    uint64_t seen = 0, weighed = 0;
    int64_t before = -1;
    bool sound = true;
    for (uint64_t k = half->start[line]; k < half->start[line + 1]; k++) {
        uint32_t across = half->across[k];
        uint64_t v = random[across < half->length ? across : 0], bits = value_bits(half, k, precision);
        sound &= (int64_t)across > before && is_finite_bits(bits, precision);
        before = across;
        seen += v;
        weighed += v * bits;
    }
    *sum = seen + z * weighed;
    return sound && before < (int64_t)half->length;
}

static void lines_check(struct check *check, bool is_column, uint32_t first, uint32_t end)
{
    const struct half *half = is_column ? &check->cells->by_column : &check->cells->by_row;
    const uint64_t *of_line = check->random[is_column], *of_across = check->random[!is_column];
    const bool is_single = check->cells->precision == FESCUE_SINGLE;
    uint64_t sum = 0, line_sum;
    bool sound = true;
    for (uint32_t i = first; i < end; i++) {
        if (half->start[i] > half->start[i + 1] || half->start[i + 1] > check->cells->count) {
            fault_set(check, FAULT_OFFSETS);
            return;
        }
        sound &= is_single ? line_check(half, i, of_across, check->z, FESCUE_SINGLE, &line_sum)
                           : line_check(half, i, of_across, check->z, FESCUE_DOUBLE, &line_sum);
        sum += of_line[i] * line_sum;
    }
    if (!sound)
        fault_set(check, FAULT_POSITIONS);
    atomic_fetch_add(&check->sum[is_column], sum);
}

/* Offsets that are out of order are found by lines_check, and then it does not matter what was told. */
static void lines_tell(const struct check *check, const struct half *half, uint32_t first, uint32_t end)
{
    const uint64_t from = half->start[first], to = half->start[end];
    const size_t size = cell_size(check->cells->precision);
    if (from >= to || to > check->cells->count)
        return;
    check->watch->tell(check->watch->data, half->across + from, half->across + to);
    check->watch->tell(check->watch->data, (const char *)half->value + from * size,
                       (const char *)half->value + to * size);
}

static void piece_check(void *job, size_t piece, size_t worker)
{
    struct check *check = job;
    const bool is_column = piece >= check->pieces;
    const struct half *half = is_column ? &check->cells->by_column : &check->cells->by_row;
    const uint64_t part = piece % check->pieces;
    const uint32_t first = (uint32_t)(half->lines * part / check->pieces),
                   end = (uint32_t)(half->lines * (part + 1) / check->pieces);
    (void)worker;
    lines_tell(check, half, first, end);
    lines_check(check, is_column, first, end);
}

/* ---- random numbers --------------------------------------------------------------------------------------------- */

static void piece_draw(void *job, size_t piece, size_t worker)
{
    struct check *check = job;
    const size_t lines[2] = {check->cells->rows, check->cells->columns};
    const size_t row_pieces = (lines[0] + DRAWS_A_PIECE - 1) / DRAWS_A_PIECE;
    bool is_column = piece >= row_pieces;
    size_t first = (is_column ? piece - row_pieces : piece) * DRAWS_A_PIECE;
    struct random_stream stream = random_open(check->seed, RANDOM_PROBE, is_column);
    (void)worker;
    stream.index = first;
    for (size_t i = first; i < first + DRAWS_A_PIECE && i < lines[is_column]; i++)
        check->random[is_column][i] = random_bits(&stream);
}

/* By a seed that whoever made the file cannot know: where we lie, and when. */
static void numbers_draw(fescue_context *context, struct check *check)
{
    double now = clock_wall();
    memcpy(&check->seed, &now, sizeof check->seed);
    check->seed ^= (uint64_t)(uintptr_t)check << 16;
    struct random_stream stream = random_open(check->seed, RANDOM_PROBE, 2);
    check->z = random_bits(&stream);
    size_t pieces = (check->cells->rows + (size_t)DRAWS_A_PIECE - 1) / DRAWS_A_PIECE +
                    (check->cells->columns + (size_t)DRAWS_A_PIECE - 1) / DRAWS_A_PIECE;
    team_run(context, pieces, piece_draw, check);
}

fescue_status pack_check_cells(fescue_context *context, const struct cells *cells, const struct pack_watch *watch,
                               const char **fault)
{
    fescue_status status = FESCUE_OK;
    struct check check = {.cells = cells, .watch = watch, .pieces = CELLS_MOST_BLOCKS};
    const struct half *rows = &cells->by_row, *columns = &cells->by_column;
    *fault = fault_texts[FAULT_OFFSETS];
    if (rows->start[0] != 0 || rows->start[rows->lines] != cells->count || columns->start[0] != 0 ||
        columns->start[columns->lines] != cells->count)
        return FESCUE_OK;
    TRY(TAKE(context, cells->rows, &check.random[0]));
    TRY(TAKE(context, cells->columns, &check.random[1]));
    numbers_draw(context, &check);
    team_run(context, 2 * check.pieces, piece_check, &check);
    unsigned faults = atomic_load(&check.faults);
    if (faults == 0 && check.sum[0] != check.sum[1])
        faults = 1u << FAULT_DIFFERENCE;
    *fault = faults == 0 ? NULL : fault_texts[__builtin_ctz(faults)];
done:
    GIVE(context, &check.random[0]);
    GIVE(context, &check.random[1]);
    return status;
}
