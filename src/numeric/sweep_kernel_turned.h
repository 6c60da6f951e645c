/* SPDX-License-Identifier: MIT
 *
 * Residual and gradient of narrow rows, by turning them; part of sweep_kernel.h, which says what is defined here.
 *
 * A register of the widest kind consists of pieces of 16 bytes, of PIECE numbers each. The rows of PIECE cells a, b, ..
 * are read as they are and turned within their pieces (here of 4 floats):
 *
 *     a0 a1 a2 a3 | a4 a5 a6 a7 | ..               a0 b0 c0 d0 | a4 b4 c4 d4 | ..     p_0
 *     b0 b1 b2 b3 | b4 b5 b6 b7 | ..     --->      a1 b1 c1 d1 | a5 b5 c5 d5 | ..     p_1
 *     c0 ..                                        ..
 *
 * With the line's row spread alike (l_0 = l0 l0 l0 l0 | l4 l4 l4 l4 | ..), everything goes on side by side:
 *
 *     s    = sum over k of l_k p_k           then its pieces added up, so that each holds the sum of every cell
 *     r    = s - x                           x in every piece
 *     g_k += r p_k                           in the end turned back, and added up
 *
 * No cell needs a register of its own for its partial sums, no r has to be brought into all lanes, and rows are read
 * once, in one or two operations each: 7 to 9 operations a cell of 8 or 16 floats in 512 bits, beside the 11 to 16 of
 * the loops of sweep_kernel.h, so that more cells are on their way at once. Where a row fills but half of a register
 * (paired), the row of another cell is the other half. Rows of 8, 16 and 32 floats take Zen 4 some 0.78, 0.78 and 0.83
 * of the time of those loops, rows of 8 and 16 doubles 0.84 and 0.80, on 909 778 cells in lines of 90 and 144; at 24
 * and 32 doubles nothing is gained. With 256 bits, where there are 16 registers, rows of 8 floats take some 0.75, of 8
 * doubles 0.85.
 *
 * g_k and sums of squares are REAL over a chunk: in single precision a term meets CHUNK / PIECE roundings and some
 * more. The line's row, a step's rows and g, PIECE registers each for a register of the row, limit how wide rows may be
 * (TURNED_MOST).
 */

enum { PIECE = 16 / sizeof(REAL), PIECES = TURNED / PIECE };
typedef REGISTER_OF(REAL, TURNED) turned;
typedef REGISTER_OF(BITS, TURNED) turned_bits;

/* Where number i of what a shuffle makes comes from: the numbers of the second operand begin at TURNED. */
#define PIECE_OF(i) ((i) / PIECE * PIECE)
#define INTERLEAVED(i, from) (PIECE_OF(i) + (from) + (i) % PIECE / 2 + (i) % 2 * TURNED)
#define LOW(i) INTERLEAVED(i, 0)
#define HIGH(i) INTERLEAVED(i, PIECE / 2)
#define LOW_PAIR(i) (PIECE_OF(i) + (i) % 2 + (i) % PIECE / 2 * TURNED)
#define HIGH_PAIR(i) (LOW_PAIR(i) + 2)
#define EACH_0(i) PIECE_OF(i)
#define EACH_1(i) (PIECE_OF(i) + 1)
#define EACH_2(i) (PIECE_OF(i) + 2)
#define EACH_3(i) (PIECE_OF(i) + 3)
#define ITSELF(i) i
#define NEIGHBOUR(i) ((i) ^ PIECE)
#define OPPOSITE(i) ((i) ^ (2 * PIECE))
#define LIST_4(f) f(0), f(1), f(2), f(3)
#define LIST_8(f) LIST_4(f), f(4), f(5), f(6), f(7)
#define LIST_16(f) LIST_8(f), f(8), f(9), f(10), f(11), f(12), f(13), f(14), f(15)
#if TURNED == 16
#define SHUFFLE(a, b, f) __builtin_shufflevector(a, b, LIST_16(f))
#elif TURNED == 8
#define SHUFFLE(a, b, f) __builtin_shufflevector(a, b, LIST_8(f))
#else
#define SHUFFLE(a, b, f) __builtin_shufflevector(a, b, LIST_4(f))
#endif

INLINE void rows_turn(const turned row[PIECE], turned p[PIECE])
{
#ifdef REAL_IS_DOUBLE
    p[0] = SHUFFLE(row[0], row[1], LOW);
    p[1] = SHUFFLE(row[0], row[1], HIGH);
#else
    turned ab = SHUFFLE(row[0], row[1], LOW), cd = SHUFFLE(row[2], row[3], LOW);
    p[0] = SHUFFLE(ab, cd, LOW_PAIR);
    p[1] = SHUFFLE(ab, cd, HIGH_PAIR);
    ab = SHUFFLE(row[0], row[1], HIGH), cd = SHUFFLE(row[2], row[3], HIGH);
    p[2] = SHUFFLE(ab, cd, LOW_PAIR);
    p[3] = SHUFFLE(ab, cd, HIGH_PAIR);
#endif
}

/* What is read once a line comes in registers of LANES. */
#if TURNED == LANES
#define PARTS_JOIN(first, last) ((void)(last), *(first))
#else
#define PARTS_JOIN(first, last) __builtin_shufflevector(*(first), *(last), LIST_16(ITSELF))
#endif

/* The first pieces of two registers. */
#ifdef REAL_IS_DOUBLE
#define FIRST_PIECE(a) __builtin_shufflevector(a, a, 0, 1)
#define FIRST_PIECES(a, b) __builtin_shufflevector(FIRST_PIECE(a), FIRST_PIECE(b), LIST_4(ITSELF))
#else
#define FIRST_PIECE(a) __builtin_shufflevector(a, a, 0, 1, 2, 3)
#define FIRST_PIECES(a, b) __builtin_shufflevector(FIRST_PIECE(a), FIRST_PIECE(b), LIST_8(ITSELF))
#endif

#ifndef HALVES_JOIN
#define HALVES_JOIN(low, high) (*(const turned *)((void)(high), low))
#define HALVES_TWICE(x) PIECE_REPEAT(x)
#define HALVES_APART(x) PIECE_ALONE(x)
#define HALVES_ONCE(x) FIRST_PIECES(x, x)
#endif

/* What PIECE rows p_0, p_1, .. turned have in every piece, row by row: l_k. */
INLINE void row_spread(const turned *row, turned l[PIECE])
{
    l[0] = SHUFFLE(*row, *row, EACH_0);
    l[1] = SHUFFLE(*row, *row, EACH_1);
#ifndef REAL_IS_DOUBLE
    l[2] = SHUFFLE(*row, *row, EACH_2);
    l[3] = SHUFFLE(*row, *row, EACH_3);
#endif
}

INLINE turned row_read(const REAL *row, const REAL *later, const bool paired)
{
    return paired ? HALVES_JOIN(row, later) : *(const turned *)row;
}

/* l_k of a line's row, n registers of it; of half a register, in both halves. */
INLINE void left_spread(const struct matrix *left, uint32_t line, turned *l, const size_t n, const bool paired)
{
    vec part[TURNED_MOST * TURNED / LANES];
    row_load(left, line, part, paired ? 1 : n * TURNED / LANES);
    for (size_t v = 0; v < n; v++) {
        const vec *first = part + v * TURNED / LANES, *last = paired ? first : first + TURNED / LANES - 1;
        turned row = (turned)PARTS_JOIN(first, last);
        row_spread(&row, l + v * PIECE);
    }
}

/* A number for each cell of a step, as its r will stand; and but once, with zeros where it would stand again. */
INLINE turned numbers_read(const REAL *number, const bool paired)
{
    return paired ? HALVES_TWICE(number) : PIECE_REPEAT(number);
}
INLINE turned numbers_read_once(const REAL *number, const bool paired)
{
    return paired ? HALVES_APART(number) : PIECE_ALONE(number);
}

/* p_k of the rows of a step's cells, n registers of them. */
INLINE void step_turn(const struct sweep_rows *rows, const uint32_t *across, turned *p, const size_t n,
                      const bool paired)
{
    turned row[PIECE];
    const REAL *data = rows->data;
    for (size_t v = 0; v < n; v++) {
        for (size_t c = 0; c < PIECE; c++)
            row[c] = row_read(data + across[c] * rows->stride + v * TURNED,
                              data + across[paired ? c + PIECE : c] * rows->stride, paired);
        rows_turn(row, p + v * PIECE);
    }
}

/* l . p_c - x_c of each cell, in every piece; of paired rows twice those of the first half, then twice the others. */
INLINE turned step_residual(const turned *l, const turned *p, const REAL *x, const size_t n, const bool paired)
{
    const size_t chains = n * PIECE > 4 ? 2 : 1; /* one more addition, worth it where one chain would be long */
    turned s[2] = {MSUB_TURNED(l[0], p[0], numbers_read_once(x, paired)), l[chains - 1] * p[chains - 1]};
    for (size_t k = chains; k < n * PIECE; k++)
        s[k % chains] = MADD_TURNED(l[k], p[k], s[k % chains]);
    if (chains == 2)
        s[0] += s[1];
    s[0] += SHUFFLE(s[0], s[0], NEIGHBOUR);
    if (PIECES == 4 && !paired)
        s[0] += SHUFFLE(s[0], s[0], OPPOSITE);
    return s[0];
}

/* What a chunk comes to: g_k, and r^2 and |r| of every cell, PIECES times, or twice where rows are paired. */
struct turned_sums {
    turned g[TURNED_MOST * PIECE], square, absolute;
};

/* The numbers of a group: g_k only when asked for, and |r| only otherwise. */
INLINE void turned_group(const struct span *span, struct chunk chunk, size_t c, const turned *l,
                         struct turned_sums *sums, turned r[2], const bool gradient, const size_t n, const bool paired)
{
    turned p[TURNED_MOST * PIECE];
    const size_t together = paired ? GROUP : PIECE;
    for (size_t at = 0, step = 0; at < GROUP; at += together, step++) {
        step_turn(&span->right, chunk.across + c + at, p, n, paired);
        r[step] = step_residual(l, p, chunk.values + c + at, n, paired);
        if (__builtin_expect(chunk.count - c < GROUP, 0)) {
            const void *there = cells_there + (GROUP - (chunk.count - c)) + at;
            r[step] = (turned)((turned_bits)r[step] & (turned_bits)numbers_read(there, paired));
        }
        sums->square = MADD_TURNED(r[step], r[step], sums->square);
        if (!gradient)
            sums->absolute += (turned)((turned_bits)r[step] & (sizeof(REAL) == sizeof(double) ? INT64_MAX : INT32_MAX));
        for (size_t k = 0; gradient && k < n * PIECE; k++)
            sums->g[k] = MADD_TURNED(r[step], p[k], sums->g[k]);
    }
}

INLINE void group_keep(const turned r[2], size_t left, REAL *to, const bool paired)
{
    cells number;
    if (paired)
        number = HALVES_ONCE(r[0]);
    else
        number = FIRST_PIECES(r[0], r[1]);
    group_store(&number, left, to);
}

/* The numbers of a register in any order: sum += */
INLINE void parts_add(const turned *x, wide sum[WIDES])
{
    for (size_t at = 0; at < TURNED / LANES; at++)
        wide_add(sum, (const vec *)x + at);
}

/* Turned back and added up, in the order of a row: sum += */
INLINE void turned_add(const turned *g, wide *sum, const size_t n, const bool paired)
{
    for (size_t v = 0; v < n; v++) {
        turned row[PIECE];
        rows_turn(g + v * PIECE, row);
        for (size_t k = 1; k < PIECE; k++)
            row[0] += row[k];
        const vec *part = (const vec *)row;
        vec halves = part[0] + part[TURNED / LANES - 1];
        for (size_t at = 0; at < (paired ? 1 : TURNED / LANES); at++)
            wide_add(sum + (v * TURNED / LANES + at) * WIDES, paired ? &halves : part + at);
    }
}

INLINE void turned_line(const struct span *span, uint64_t k, uint64_t end, const turned *l, wide *product,
                        wide (*sums)[WIDES], const bool gradient, const bool kept, const size_t n, const bool paired)
{
    struct chunk chunk;
    struct chunk_room room;
    for (; k < end; k += chunk.count) {
        struct turned_sums chunk_sums = {0};
        chunk = chunk_find(span, k, end, &room, n * TURNED / LANES);
        for (size_t c = 0; c < chunk.count; c += GROUP) {
            turned r[2];
            span_prefetch(span, k + c, false, paired ? 1 : n * TURNED / LANES);
            turned_group(span, chunk, c, l, &chunk_sums, r, gradient, n, paired);
            if (kept)
                group_keep(r, chunk.count - c, span->residual + k + c, paired);
        }
        parts_add(&chunk_sums.square, sums[0]);
        if (gradient)
            turned_add(chunk_sums.g, product, n, paired);
        else
            parts_add(&chunk_sums.absolute, sums[1]);
    }
}

/* Rows of n registers, or of half of one. */
INLINE void turned_lines(const struct sweep_job *job, size_t block, double *out, const bool gradient, const bool kept,
                         const size_t n, const bool paired, const size_t stride)
{
    const size_t registers = paired ? 1 : n * TURNED / LANES;
    struct span span = span_of(job, block, stride);
    wide sums[2][WIDES] = {{{0}}};
    for (uint32_t line = span.line; line < span.last; line++) {
        turned l[TURNED_MOST * PIECE];
        wide product[TURNED_MOST * TURNED / LANES * WIDES];
        left_spread(&job->left, line, l, n, paired);
        if (line + 1 < span.last)
            left_prefetch(&job->left, line + 1, registers);
        if (gradient)
            product_begin(job, line, span.last, product, registers);
        turned_line(&span, span.start[line], span.start[line + 1], l, product, sums, gradient, kept, n, paired);
        if (gradient)
            product_store(job, line, product, registers);
    }
    for (size_t s = 0; s < 2; s++)
        for (size_t at = 0; at < LANES; at++) /* each number was added as often as it stood there */
            out[s] += sums[s][at / WIDE_LANES][at % WIDE_LANES] / (paired ? 2 : PIECES);
}
