/* SPDX-License-Identifier: MIT
 *
 * Residual and gradient of narrow rows, by turning them; part of sweep_kernel.h, which says what is defined here.
 *
 * A register of the widest kind consists of pieces of 16 bytes, of PIECE numbers each. The rows of PIECE cells a, b, ..
 * are read as they are and turned within their pieces, so that number c of a piece is always cell c's (here of 4
 * floats):
 *
 *     a0 a1 a2 a3 | ..          a0 a1 b2 b3 | ..    a2 a3 b0 b1 | ..          a0 b2 c0 d2 | ..     p_0
 *     b0 b1 b2 b3 | ..   --->   c0 c1 d2 d3 | ..    c2 c3 d0 d1 | ..   --->   a1 b3 c1 d3 | ..     p_1
 *     c0 ..                        by choosing         by shuffling           a2 b0 c2 d0 | ..     p_2
 *     d0 ..                                                                   a3 b1 c3 d1 | ..     p_3
 *
 * With the line's row spread alike (l_0 = l0 l2 l0 l2 | ..), everything goes on side by side:
 *
 *     s    = sum over k of l_k p_k           then its pieces added up, so that each holds the sum of every cell
 *     r    = s - x                           x in every piece
 *     g_k += r p_k                           in the end turned back, and added up
 *
 * No cell needs a register of its own for its partial sums, no r has to be brought into all lanes, and rows are read
 * once, in one or two operations each: 7 to 9 operations a cell of 8 or 16 floats in 512 bits, beside the 11 to 16 of
 * the loops of sweep_kernel.h, so that more cells are on their way at once. Where a row fills but half of a register
 * (paired), the row of another cell is the other half. A row that is only multiplied, not added, is not worth turning.
 *
 * Time goes to what multiplies, which shuffles share; choosing (TURNED_MIX) may be done anywhere, and so turning takes
 * two choices and six shuffles for four rows of floats, one and one for two of doubles, not eight and two shuffles.
 * Each group is begun before the one before it is ended, as far as registers reach (TURNED_AHEAD). Rows of 8, 16 and 32
 * floats take Zen 4 some 0.8, 0.75 and 0.8 of the time of those loops, rows of 8, 16, 24 and 32 doubles 0.65, 0.75,
 * 0.87 and 0.92, on 909 778 cells in lines of 90 and 144. With 256 bits, where there are 16 registers, rows of 8 floats
 * take some 0.8, of 8 doubles 0.85 to 1. Without gain: two chains for four products; 256 bits where there are 32
 * registers (fewer halves to do, more to read); to ask for rows that are near.
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
#define CROSSED(i) (PIECE_OF(i) + ((i) + PIECE / 2) % PIECE + (i) % PIECE / (PIECE / 2) * TURNED)
#define EVEN(i) (PIECE_OF(i) + (i) % 2 * 2 + (i) % PIECE / 2 * TURNED)
#define ODD(i) (EVEN(i) + 1)
#define EVEN_TWICE(i) (PIECE_OF(i) + (i) % 2 * 2)
#define ODD_TWICE(i) (EVEN_TWICE(i) + 1)
#define SWAPPED(i) ((i) ^ 1)
#define LOW(i) (PIECE_OF(i) + (i) % PIECE / 2 + (i) % 2 * TURNED)
#define HIGH(i) (LOW(i) + PIECE / 2)
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
    p[0] = TURNED_MIX(row[0], row[1]);
    p[1] = SHUFFLE(row[0], row[1], CROSSED);
#else
    turned ab = TURNED_MIX(row[0], row[1]), cd = TURNED_MIX(row[2], row[3]);
    p[0] = SHUFFLE(ab, cd, EVEN);
    p[1] = SHUFFLE(ab, cd, ODD);
    ab = SHUFFLE(row[0], row[1], CROSSED), cd = SHUFFLE(row[2], row[3], CROSSED);
    p[2] = SHUFFLE(ab, cd, EVEN);
    p[3] = SHUFFLE(ab, cd, ODD);
#endif
}

/* Of PIECE rows turned, their sum. */
INLINE turned turned_sum(const turned p[PIECE])
{
#ifdef REAL_IS_DOUBLE
    return p[0] + SHUFFLE(p[1], p[1], SWAPPED);
#else
    turned even = p[0] + SHUFFLE(p[2], p[2], SWAPPED), odd = p[1] + SHUFFLE(p[3], p[3], SWAPPED);
    return SHUFFLE(even, odd, LOW) + SHUFFLE(even, odd, HIGH);
#endif
}

/* What is read or written once a line comes in registers of LANES: so many a row of n registers, or of half of one. */
#define ROW_REGISTERS(n, paired) ((paired) ? 1 : (n)*TURNED / LANES)
#if TURNED == LANES
#define PARTS_JOIN(first, last) ((void)(last), *(first))
#else
#define PARTS_JOIN(first, last) __builtin_shufflevector(*(first), *(last), LIST_16(ITSELF))
#endif

/* A piece of a register, and the first of two. */
#ifdef REAL_IS_DOUBLE
#define PIECE_AT(a, at) __builtin_shufflevector(a, a, at, (at) + 1)
#define FIRST_PIECES(a, b) __builtin_shufflevector(PIECE_AT(a, 0), PIECE_AT(b, 0), LIST_4(ITSELF))
#else
#define PIECE_AT(a, at) __builtin_shufflevector(a, a, at, (at) + 1, (at) + 2, (at) + 3)
#define FIRST_PIECES(a, b) __builtin_shufflevector(PIECE_AT(a, 0), PIECE_AT(b, 0), LIST_8(ITSELF))
#endif
typedef REGISTER_OF(REAL, PIECE) piece;
typedef REGISTER_OF(double, PIECE) piece_wide;

#ifndef HALVES_JOIN
#define HALVES_JOIN(low, high) (*(const turned *)((void)(high), low))
#define HALVES_TWICE(x) PIECE_REPEAT(x)
#define HALVES_APART(x) PIECE_ALONE(x)
#define HALVES_ONCE(x) FIRST_PIECES(x, x)
#endif

/* What PIECE rows p_0, p_1, .. turned have in every piece, row by row: l_k. */
INLINE void row_spread(const turned *row, turned l[PIECE])
{
#ifdef REAL_IS_DOUBLE
    l[0] = *row;
    l[1] = SHUFFLE(*row, *row, SWAPPED);
#else
    l[0] = SHUFFLE(*row, *row, EVEN_TWICE);
    l[1] = SHUFFLE(*row, *row, ODD_TWICE);
    l[2] = SHUFFLE(l[0], l[0], SWAPPED);
    l[3] = SHUFFLE(l[1], l[1], SWAPPED);
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
    row_load(left, line, part, ROW_REGISTERS(n, paired));
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

/* A step on its way: its rows turned, and of each cell what l . p_c - x_c is the sum of, in its numbers of all pieces,
   or, where rows are paired, of either half. */
struct turned_step {
    turned p[TURNED_MOST * PIECE], parts;
};

INLINE void step_begin(const struct span *span, struct chunk chunk, size_t c, const turned *l, struct turned_step *step,
                       const size_t n, const bool paired)
{
    const size_t chains = n * PIECE > 4 ? 2 : 1; /* one more addition, worth it where one chain would be long */
    const turned *p = step->p;
    step_turn(&span->right, chunk.across + c, step->p, n, paired);
    turned s[2] = {MSUB_TURNED(l[0], p[0], numbers_read_once(chunk.values + c, paired)), l[chains - 1] * p[chains - 1]};
    for (size_t k = chains; k < n * PIECE; k++)
        s[k % chains] = MADD_TURNED(l[k], p[k], s[k % chains]);
    if (chains == 2)
        s[0] += s[1];
    step->parts = s[0];
}

/* What a chunk comes to: g_k, and r^2 of its cells. */
struct turned_sums {
    turned g[TURNED_MOST * PIECE];
    piece square;
};

INLINE void squares_take(const turned *r, struct turned_sums *sums, const bool paired)
{
    piece number = (piece)PIECE_AT(*r, 0);
    sums->square = MADD_PIECE(number, number, sums->square);
    if (!paired)
        return;
    number = (piece)PIECE_AT(*r, TURNED / 2);
    sums->square = MADD_PIECE(number, number, sums->square);
}

/* r of a step's cells, as often as they stand in p_k: from cell `at` of a group on, of which `left` cells are there. */
INLINE turned step_end(const struct turned_step *step, size_t at, size_t left, struct turned_sums *sums, const size_t n,
                       const bool paired)
{
    turned r = step->parts;
    r += SHUFFLE(r, r, NEIGHBOUR);
    if (PIECES == 4 && !paired)
        r += SHUFFLE(r, r, OPPOSITE);
    if (__builtin_expect(left < GROUP, 0)) {
        const void *there = cells_there + (GROUP - left) + at;
        r = (turned)((turned_bits)r & (turned_bits)numbers_read(there, paired));
    }
    for (size_t k = 0; k < n * PIECE; k++)
        sums->g[k] = MADD_TURNED(r, step->p[k], sums->g[k]);
    squares_take(&r, sums, paired);
    return r;
}

/* The numbers of a group, from those of its steps. */
INLINE void numbers_keep(const turned *r, size_t left, REAL *to, const bool paired)
{
    cells number;
    if (paired)
        number = HALVES_ONCE(r[0]);
    else
        number = FIRST_PIECES(r[0], r[1]);
    group_store(&number, left, to);
}

/* Turned back and added up, in the order of a row: sum += */
INLINE void turned_add(const turned *g, wide *sum, const size_t n, const bool paired)
{
    for (size_t v = 0; v < n; v++) {
        turned row = turned_sum(g + v * PIECE);
        const vec *part = (const vec *)&row;
        vec halves = part[0] + part[TURNED / LANES - 1];
        for (size_t at = 0; at < ROW_REGISTERS(1, paired); at++)
            wide_add(sum + (v * TURNED / LANES + at) * WIDES, paired ? &halves : part + at);
    }
}

/* Cells of a step, and steps of a group. */
#define STEP_CELLS(paired) ((paired) ? GROUP : PIECE)
#define STEPS(paired) (GROUP / STEP_CELLS(paired))
enum { STEPS_MOST = GROUP / PIECE };

INLINE void group_begin(const struct span *span, struct chunk chunk, size_t c, const turned *l,
                        struct turned_step *step, const size_t n, const bool paired)
{
    for (size_t t = 0; t < STEPS(paired); t++)
        step_begin(span, chunk, c + t * STEP_CELLS(paired), l, step + t, n, paired);
}

INLINE void group_end(const struct turned_step *step, size_t left, struct turned_sums *sums, REAL *to, const size_t n,
                      const bool paired)
{
    turned r[STEPS_MOST];
    for (size_t t = 0; t < STEPS(paired); t++)
        r[t] = step_end(step + t, t * STEP_CELLS(paired), left, sums, n, paired);
    if (to != NULL)
        numbers_keep(r, left, to, paired);
}

/* Each group is begun before the one before it is ended: its rows are on their way while that one's r is waited for. */
INLINE void chunk_ahead(const struct span *span, uint64_t k, struct chunk chunk, const turned *l,
                        struct turned_sums *sums, const bool kept, const size_t n, const bool paired)
{
    struct turned_step step[STEPS_MOST], next[STEPS_MOST];
    size_t c = 0;
    span_prefetch(span, k, false, ROW_REGISTERS(n, paired));
    group_begin(span, chunk, 0, l, step, n, paired);
    for (; c + GROUP < chunk.count; c += GROUP) {
        span_prefetch(span, k + c + GROUP, false, ROW_REGISTERS(n, paired));
        group_begin(span, chunk, c + GROUP, l, next, n, paired);
        group_end(step, GROUP, sums, kept ? span->residual + k + c : NULL, n, paired);
        memcpy(step, next, sizeof step);
    }
    group_end(step, chunk.count - c, sums, kept ? span->residual + k + c : NULL, n, paired);
}

/* One step after another. */
INLINE void chunk_in_turn(const struct span *span, uint64_t k, struct chunk chunk, const turned *l,
                          struct turned_sums *sums, const bool kept, const size_t n, const bool paired)
{
    for (size_t c = 0; c < chunk.count; c += GROUP) {
        turned r[STEPS_MOST];
        span_prefetch(span, k + c, false, ROW_REGISTERS(n, paired));
        for (size_t t = 0; t < STEPS(paired); t++) {
            struct turned_step step;
            step_begin(span, chunk, c + t * STEP_CELLS(paired), l, &step, n, paired);
            r[t] = step_end(&step, t * STEP_CELLS(paired), chunk.count - c, sums, n, paired);
        }
        if (kept)
            numbers_keep(r, chunk.count - c, span->residual + k + c, paired);
    }
}

INLINE void turned_line(const struct span *span, uint64_t k, uint64_t end, const turned *l, wide *product,
                        piece_wide *square, const bool kept, const size_t n, const bool paired)
{
    struct chunk chunk;
    struct chunk_room room;
    for (; k < end; k += chunk.count) {
        struct turned_sums chunk_sums = {0};
        chunk = chunk_find(span, k, end, &room, n * TURNED / LANES);
        if (TURNED_AHEAD(n))
            chunk_ahead(span, k, chunk, l, &chunk_sums, kept, n, paired);
        else
            chunk_in_turn(span, k, chunk, l, &chunk_sums, kept, n, paired);
        *square += __builtin_convertvector(chunk_sums.square, piece_wide);
        turned_add(chunk_sums.g, product, n, paired);
    }
}

/* Rows of n registers, or of half of one. */
INLINE double turned_lines(const struct sweep_job *job, size_t block, const bool kept, const size_t n,
                           const bool paired, const size_t stride)
{
    const size_t registers = ROW_REGISTERS(n, paired);
    struct span span = span_of(job, block, stride);
    piece_wide square = {0};
    for (uint32_t line = span.line; line < span.last; line++) {
        turned l[TURNED_MOST * PIECE];
        wide product[TURNED_MOST * TURNED / LANES * WIDES];
        left_spread(&job->left, line, l, n, paired);
        if (line + 1 < span.last)
            left_prefetch(&job->left, line + 1, registers);
        product_begin(job, line, span.last, product, registers);
        turned_line(&span, span.start[line], span.start[line + 1], l, product, &square, kept, n, paired);
        product_store(job, line, product, registers);
    }
    double sum = 0;
    for (size_t c = 0; c < PIECE; c++)
        sum += square[c];
    return sum;
}
