/* SPDX-License-Identifier: MIT
 *
 * The inner loops over batches of eight lines and their small systems, once for every instruction set. The including
 * file defines
 *
 *     LANES                doubles in a register: 2, 4 or 8
 *     MADD(a, b, c)        a b + c on registers
 *     SQRT(x)              square roots of a register's numbers
 *     BATCH_KERNEL         the name of the table this gives
 *
 * Eight symmetric matrices of one size stand side by side: number `at` of the packed lower triangle of matrix `lane` is
 * a[8 at + lane] (packed.c says where entry (i, j) is in a triangle), so that one register holds the same entry of
 * several matrices and no operation goes across a register. For each matrix
 *
 *     A = L L'         L_ij = (A_ij - sum_{l<j} L_il L_jl) / L_jj         1 / L_jj is what stands on the diagonal
 *     b <- A^-1 b      forwards by rows of L, backwards by columns
 *     N = L^-1         N_ij = -1/L_ii sum_{j<=p<i} L_ip N_pj
 *     A^-1 = N'N       A^-1_ij = sum_{p>=i} N_pi N_pj, row by row in place of N
 *
 * with four entries (i, j .. j+3) at a time, so that five loads feed four multiply-adds and no sum waits for another.
 * k^3 / 2 multiply-adds a matrix in all. A pivot below k epsilon A_ii has lost all its digits: its lane is reported,
 * and its numbers mean nothing.
 *
 * What a lane gives depends on LANES not at all, and on MADD only in whether products are rounded before they are
 * added.
 */
#include <float.h>
#include <math.h>
#include <string.h>

#define INLINE static inline __attribute__((always_inline))
typedef double vec __attribute__((vector_size(LANES * sizeof(double)), aligned(sizeof(double)), may_alias));
typedef int64_t vec_bits __attribute__((vector_size(LANES * sizeof(double)), aligned(sizeof(double)), may_alias));

/* Registers of sums in flight: of 32 twelve, since with 24 moments take longer; of 16 eight. */
enum { TILE = LANES == 8 ? 12 : 8 };
enum { FOUR = 4 }; /* entries of a row at a time */

INLINE vec splat(double x)
{
    return x - (vec){0};
}

/* ---- sums of weighted moments -------------------------------------------------------------------------------------
 */

INLINE void tile_add(const double *data, const struct batch_stretch *stretch, const double *factor, double *sum,
                     const size_t registers, const bool ahead)
{
    vec total[TILE];
    for (size_t v = 0; v < registers; v++)
        total[v] = *(const vec *)(sum + v * LANES);
    for (size_t c = 0; c < stretch->count; c++) {
        const double *moment = data + stretch->offset[c];
        vec share = splat(factor[c]);
        for (size_t v = 0; ahead && v < registers; v += 8 / LANES)
            __builtin_prefetch(data + stretch->offset[c + BATCH_AHEAD / 2] + v * LANES);
        for (size_t v = 0; v < registers; v++)
            total[v] = MADD(share, *(const vec *)(moment + v * LANES), total[v]);
    }
    for (size_t v = 0; v < registers; v++)
        *(vec *)(sum + v * LANES) = total[v];
}

#define TILE_CASE(n)                                                                                                   \
    case n:                                                                                                            \
        if (TILE < n)                                                                                                  \
            break;                                                                                                     \
        if (ahead)                                                                                                     \
            tile_add(data, stretch, factor, sum, n, true);                                                             \
        else                                                                                                           \
            tile_add(data, stretch, factor, sum, n, false);                                                            \
        break;

static void tile_add_any(const double *data, const struct batch_stretch *stretch, const double *factor, double *sum,
                         size_t registers, bool ahead)
{
    switch (registers) {
        TILE_CASE(1)
        TILE_CASE(2)
        TILE_CASE(3)
        TILE_CASE(4)
        TILE_CASE(5)
        TILE_CASE(6)
        TILE_CASE(7)
        TILE_CASE(8)
        TILE_CASE(9)
        TILE_CASE(10)
        TILE_CASE(11)
        TILE_CASE(12)
    default:
        break;
    }
}

/* Tiles of nearly the same size. */
static void stretch_add(const double *data, const struct batch_stretch *stretch, const double *factor, size_t size,
                        bool ahead, double *sum)
{
    size_t left = (size + LANES - 1) / LANES;
    for (size_t tiles = (left + TILE - 1) / TILE; tiles > 0; tiles--) {
        size_t now = (left + tiles - 1) / tiles;
        tile_add_any(data, stretch, factor, sum, now, ahead);
        data += now * LANES;
        sum += now * LANES;
        left -= now;
    }
}

/* ---- sums of weighted moments in halves ---------------------------------------------------------------------------
 */

/* Blocks whose sums stay in registers: of 32 of them, of 16. */
#if LANES == 8
enum { HALVES_MOST = 11, HALVES_PULLED = 2 };
#elif LANES == 4
enum { HALVES_MOST = 3, HALVES_PULLED = 0 };
#else
enum { HALVES_MOST = 1, HALVES_PULLED = 0 };
#endif
enum { BLOCK_PARTS = 8 / LANES, BLOCK_SUMS = 2 * BLOCK_PARTS };

/* Sum v of a block: which of its numbers it begins with. */
INLINE size_t halves_at(size_t v)
{
    return v / BLOCK_SUMS * BATCH_BLOCK + v % 2 * 8 + v % BLOCK_SUMS / 2 * LANES;
}

INLINE void halves_tile(const uint64_t *data, const struct batch_stretch *stretch, const double *factor, double *sum,
                        double *target, const size_t blocks, const size_t pulled, const bool is_far)
{
    vec total[HALVES_MOST * BLOCK_SUMS], also[HALVES_PULLED * BLOCK_SUMS + 1];
    for (size_t v = 0; v < blocks * BLOCK_SUMS; v++)
        total[v] = (vec){0};
    for (size_t v = 0; v < pulled * BLOCK_SUMS; v++)
        also[v] = (vec){0};
    for (size_t c = 0; c < stretch->count; c++) {
        const uint64_t *moment = data + stretch->offset[c], *ahead = data + stretch->offset[c + BATCH_AHEAD];
        vec share = splat(factor[c]), pull = splat(stretch->pull[c]);
        for (size_t b = 0; b < blocks; b++)
            if (is_far)
                __builtin_prefetch(ahead + b * 8, 0, 2);
            else
                __builtin_prefetch(ahead + b * 8, 0, 3);
        for (size_t v = 0; v < blocks * BLOCK_SUMS; v += 2) {
            vec_bits word = *(const vec_bits *)(moment + v / 2 * LANES);
            vec high = (vec)word, low = (vec)(word << 32);
            total[v] = MADD(share, high, total[v]);
            total[v + 1] = MADD(share, low, total[v + 1]);
            if (v < pulled * BLOCK_SUMS) {
                also[v] = MADD(pull, high, also[v]);
                also[v + 1] = MADD(pull, low, also[v + 1]);
            }
        }
    }
    for (size_t v = 0; v < blocks * BLOCK_SUMS; v++)
        *(vec *)(sum + halves_at(v)) += total[v];
    for (size_t v = 0; v < pulled * BLOCK_SUMS; v++)
        *(vec *)(target + halves_at(v)) += also[v];
}

#define HALVES_CASE(n)                                                                                                 \
    case n:                                                                                                            \
        if (HALVES_MOST < n)                                                                                           \
            break;                                                                                                     \
        if (HALVES_PULLED > 0 && n > 1 && target != NULL && stretch->is_far)                                           \
            halves_tile(data, stretch, factor, sum, target, n, HALVES_PULLED, true);                                   \
        else if (HALVES_PULLED > 0 && n > 1 && target != NULL)                                                         \
            halves_tile(data, stretch, factor, sum, target, n, HALVES_PULLED, false);                                  \
        else if (stretch->is_far)                                                                                      \
            halves_tile(data, stretch, factor, sum, NULL, n, 0, true);                                                 \
        else                                                                                                           \
            halves_tile(data, stretch, factor, sum, NULL, n, 0, false);                                                \
        break;

static void halves_tile_any(const uint64_t *data, const struct batch_stretch *stretch, const double *factor,
                            double *sum, double *target, size_t blocks)
{
    switch (blocks) {
        HALVES_CASE(1)
        HALVES_CASE(2)
        HALVES_CASE(3)
        HALVES_CASE(4)
        HALVES_CASE(5)
        HALVES_CASE(6)
        HALVES_CASE(7)
        HALVES_CASE(8)
        HALVES_CASE(9)
        HALVES_CASE(10)
        HALVES_CASE(11)
    default:
        break;
    }
}

/* Tiles of nearly the same size; target, when it is not NULL, in the first of them. */
static void halves_sum(const uint64_t *data, const struct batch_stretch *stretch, const double *factor, double *sum,
                       double *target, size_t blocks)
{
    for (size_t tiles = (blocks + HALVES_MOST - 1) / HALVES_MOST; tiles > 0; tiles--) {
        size_t now = (blocks + tiles - 1) / tiles;
        halves_tile_any(data, stretch, factor, sum, target, now);
        data += now * 8;
        sum += now * BATCH_BLOCK;
        blocks -= now;
        target = NULL;
    }
}

static void halves_add(const uint64_t *data, const struct batch_stretch *stretch, size_t blocks, size_t mean,
                       double *sum, double *target)
{
    bool at_once = sum != NULL && mean <= HALVES_PULLED * BATCH_BLOCK && blocks > 1;
    if (sum != NULL)
        halves_sum(data, stretch, stretch->factor, sum, at_once ? target : NULL, blocks);
    if (target != NULL && !at_once)
        halves_sum(data, stretch, stretch->pull, target, NULL, (mean + BATCH_BLOCK - 1) / BATCH_BLOCK);
}

/* ---- products of rows ---------------------------------------------------------------------------------------------
 */

enum { GRAM_REGISTERS = 3 };

/* square(0 .. 3, 0 .. registers*LANES - 1) += sum over rows of left(0 .. 3) right(0 .. registers*LANES - 1) */
INLINE void gram_tile(const double *left, const double *right, size_t count, size_t stride, double *square,
                      const size_t registers)
{
    vec sum[FOUR][GRAM_REGISTERS];
    for (size_t t = 0; t < FOUR; t++)
        for (size_t v = 0; v < registers; v++)
            sum[t][v] = *(const vec *)(square + t * stride + v * LANES);
    for (size_t c = 0; c < count; c++, left += stride, right += stride)
        for (size_t t = 0; t < FOUR; t++)
            for (size_t v = 0; v < registers; v++)
                sum[t][v] = MADD(splat(left[t]), *(const vec *)(right + v * LANES), sum[t][v]);
    for (size_t t = 0; t < FOUR; t++)
        for (size_t v = 0; v < registers; v++)
            *(vec *)(square + t * stride + v * LANES) = sum[t][v];
}

static void rows_gram(const double *left, const double *right, size_t count, size_t size, size_t stride, double *square)
{
    for (size_t row = 0; row < size; row += FOUR) {
        double *to = square + row * stride;
        size_t first = 0, registers = (row + FOUR + LANES - 1) / LANES;
        for (; registers >= GRAM_REGISTERS; registers -= GRAM_REGISTERS, first += GRAM_REGISTERS * LANES)
            gram_tile(left + row, right + first, count, stride, to + first, GRAM_REGISTERS);
        if (registers == 2)
            gram_tile(left + row, right + first, count, stride, to + first, 2);
        else if (registers == 1)
            gram_tile(left + row, right + first, count, stride, to + first, 1);
    }
}

/* ---- systems ------------------------------------------------------------------------------------------------------
 */

/* Row i of a packed triangle of batches, from the lanes that `a` points at. */
INLINE double *row_of(double *a, size_t i)
{
    return a + packed_size(i) * BATCH_LANES;
}

INLINE vec *at(double *row, size_t j)
{
    return (vec *)(row + j * BATCH_LANES);
}

/* L_ij .. L_i,j+count-1, and their squares off the pivot. */
INLINE void entries_factor(double *a, double *row, size_t j, vec *pivot, const size_t count)
{
    vec sum[FOUR];
    double *other[FOUR];
    for (size_t c = 0; c < count; c++) {
        other[c] = row_of(a, j + c);
        sum[c] = (vec){0};
    }
    for (size_t l = 0; l < j; l++) {
        vec x = *at(row, l);
        for (size_t c = 0; c < count; c++)
            sum[c] = MADD(x, *at(other[c], l), sum[c]);
    }
    for (size_t c = 0; c < count; c++) {
        for (size_t e = 0; e < c; e++)
            sum[c] = MADD(*at(row, j + e), *at(other[c], j + e), sum[c]);
        vec entry = (*at(row, j + c) - sum[c]) * *at(other[c], j + c);
        *at(row, j + c) = entry;
        *pivot = MADD(-entry, entry, *pivot);
    }
}

/* N_ij .. N_i,j+count-1 from the rows of N above. */
INLINE void entries_invert(double *l_row, double *n, size_t i, size_t j, const size_t count)
{
    vec sum[FOUR], scale = -*at(l_row, i);
    for (size_t c = 0; c < count; c++)
        sum[c] = (vec){0};
    for (size_t p = j; p < j + count; p++) { /* the triangle that N begins with */
        double *above = row_of(n, p);
        for (size_t c = 0; c < count; c++)
            if (c <= p - j)
                sum[c] = MADD(*at(l_row, p), *at(above, j + c), sum[c]);
    }
    for (size_t p = j + count; p < i; p++) {
        double *above = row_of(n, p);
        vec x = *at(l_row, p);
        for (size_t c = 0; c < count; c++)
            sum[c] = MADD(x, *at(above, j + c), sum[c]);
    }
    for (size_t c = 0; c < count; c++)
        *at(row_of(n, i), j + c) = scale * sum[c];
}

/* Entries (i, j .. j+count-1) of N'N, in place. */
INLINE void entries_square(double *n, size_t k, size_t i, size_t j, const size_t count)
{
    vec sum[FOUR];
    for (size_t c = 0; c < count; c++)
        sum[c] = (vec){0};
    for (size_t p = i; p < k; p++) {
        double *row = row_of(n, p);
        vec x = *at(row, i);
        for (size_t c = 0; c < count; c++)
            sum[c] = MADD(x, *at(row, j + c), sum[c]);
    }
    for (size_t c = 0; c < count; c++)
        *at(row_of(n, i), j + c) = sum[c];
}

/* CALL(j, count) for j = 0, 4, 8, ... below end. */
#define BY_FOUR(end)                                                                                                   \
    do {                                                                                                               \
        size_t j_ = 0;                                                                                                 \
        for (; j_ + FOUR <= (end); j_ += FOUR)                                                                         \
            CALL(j_, FOUR);                                                                                            \
        if ((end)-j_ == 3)                                                                                             \
            CALL(j_, 3);                                                                                               \
        else if ((end)-j_ == 2)                                                                                        \
            CALL(j_, 2);                                                                                               \
        else if ((end)-j_ == 1)                                                                                        \
            CALL(j_, 1);                                                                                               \
    } while (0)

static void lanes_factor(double *a, size_t k, double epsilon, vec_bits *broken)
{
    for (size_t i = 0; i < k; i++) {
        double *row = row_of(a, i);
        vec pivot = *at(row, i), least = pivot * ((double)k * epsilon);
#define CALL(j, count) entries_factor(a, row, j, &pivot, count)
        BY_FOUR(i);
#undef CALL
        *broken |= ~((pivot > least) & (pivot <= splat(DBL_MAX)));
        *at(row, i) = 1 / SQRT(pivot);
    }
}

static void lanes_solve(double *a, size_t k, double *b)
{
    for (size_t i = 0; i < k; i++) {
        double *row = row_of(a, i);
        vec sum[2] = {{0}, {0}};
        size_t j = 0;
        for (; j + 2 <= i; j += 2) {
            sum[0] = MADD(*at(row, j), *at(b, j), sum[0]);
            sum[1] = MADD(*at(row, j + 1), *at(b, j + 1), sum[1]);
        }
        if (j < i)
            sum[0] = MADD(*at(row, j), *at(b, j), sum[0]);
        *at(b, i) = (*at(b, i) - (sum[0] + sum[1])) * *at(row, i);
    }
    for (size_t i = k; i-- > 0;) {
        double *row = row_of(a, i);
        vec x = *at(b, i) * *at(row, i);
        *at(b, i) = x;
        for (size_t j = 0; j < i; j++)
            *at(b, j) = MADD(-x, *at(row, j), *at(b, j));
    }
}

static void lanes_invert(double *a, size_t k, double *inverse)
{
    for (size_t i = 0; i < k; i++) {
        double *row = row_of(a, i);
#define CALL(j, count) entries_invert(row, inverse, i, j, count)
        BY_FOUR(i);
#undef CALL
        *at(row_of(inverse, i), i) = *at(row, i);
    }
    for (size_t i = 0; i < k; i++) {
#define CALL(j, count) entries_square(inverse, k, i, j, count)
        BY_FOUR(i + 1);
#undef CALL
    }
}

static unsigned lanes_all(double *a, size_t k, double *b, double *inverse, double epsilon)
{
    unsigned lanes = 0;
    for (size_t first = 0; first < BATCH_LANES; first += LANES) {
        vec_bits broken = {0};
        lanes_factor(a + first, k, epsilon, &broken);
        lanes_solve(a + first, k, b + first);
        if (inverse != NULL)
            lanes_invert(a + first, k, inverse + first);
        for (size_t lane = 0; lane < LANES; lane++)
            lanes |= broken[lane] != 0 ? 1U << (first + lane) : 0;
    }
    return lanes;
}

/* ---- between lines one after another and lines side by side -------------------------------------------------------
 */

#if LANES == 2
enum { BLOCK = 2 };
typedef vec part;
INLINE void block_transpose(part x[BLOCK])
{
    part low = __builtin_shufflevector(x[0], x[1], 0, 2);
    x[1] = __builtin_shufflevector(x[0], x[1], 1, 3);
    x[0] = low;
}
#else
enum { BLOCK = 4 };
typedef double part __attribute__((vector_size(4 * sizeof(double)), aligned(sizeof(double)), may_alias));
INLINE void block_transpose(part x[BLOCK])
{
    part a = __builtin_shufflevector(x[0], x[1], 0, 4, 2, 6), b = __builtin_shufflevector(x[0], x[1], 1, 5, 3, 7);
    part c = __builtin_shufflevector(x[2], x[3], 0, 4, 2, 6), d = __builtin_shufflevector(x[2], x[3], 1, 5, 3, 7);
    x[0] = __builtin_shufflevector(a, c, 0, 1, 4, 5);
    x[1] = __builtin_shufflevector(b, d, 0, 1, 4, 5);
    x[2] = __builtin_shufflevector(a, c, 2, 3, 6, 7);
    x[3] = __builtin_shufflevector(b, d, 2, 3, 6, 7);
}
#endif

static void lines_pack(const double *lines, size_t stride, size_t size, double *batch)
{
    for (size_t first = 0; first < size; first += BLOCK)
        for (size_t lane = 0; lane < BATCH_LANES; lane += BLOCK) {
            part x[BLOCK];
            for (size_t b = 0; b < BLOCK; b++)
                x[b] = *(const part *)(lines + (lane + b) * stride + first);
            block_transpose(x);
            for (size_t b = 0; b < BLOCK; b++)
                *(part *)(batch + (first + b) * BATCH_LANES + lane) = x[b];
        }
}

static void lines_unpack(const double *batch, size_t size, double *const line[BATCH_LANES])
{
    for (size_t first = 0; first < size; first += BLOCK)
        for (size_t lane = 0; lane < BATCH_LANES; lane += BLOCK) {
            part x[BLOCK];
            for (size_t b = 0; b < BLOCK; b++)
                x[b] = *(const part *)(batch + (first + b) * BATCH_LANES + lane);
            block_transpose(x);
            for (size_t b = 0; b < BLOCK; b++)
                *(part *)(line[lane + b] + first) = x[b];
        }
}

const struct batch_kernel BATCH_KERNEL = {stretch_add, halves_add, rows_gram, lanes_all, lines_pack, lines_unpack};
