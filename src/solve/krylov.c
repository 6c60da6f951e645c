/* SPDX-License-Identifier: MIT
 *
 * Leading singular triplets of a sparse matrix A (short x long) by randomised block Krylov iteration (Musco, Musco
 * 2015, "Randomized block Krylov methods for stronger and faster approximate singular value decomposition", algorithm
 * 2).
 *
 *     symbol   shape                 what
 *     G        long x b              normal numbers; row j from a stream of its own
 *     Q        short x b (q+1)       orthonormal basis of [A G, (AA')A G, ..., (AA')^q A G], block by block
 *     H        b(q+1) x b(q+1)       Q'AA'Q
 *     E        b(q+1) x r            its leading eigenvectors
 *
 * Each block is A A' times the one before, made orthogonal to all earlier ones twice and by QR within (block Lanczos
 * with full orthogonalisation); the inner products that this needs are the columns of H. Then Y = Q E spans the leading
 * left space and the thin SVD A'Y = P S Z' gives the triplets (Y Z, S, P): the singular values are those of A on that
 * space, with the full relative precision that squares would lose.
 *
 * Departure: orthogonalised block by block instead of one QR of the raw Krylov matrix, which loses the small singular
 * values of an ill-conditioned A.
 *
 * b is the rank and four more, rounded up to a full stride, which costs nothing, at most 256; q = 4. Where
 * b(q+1) would pass the shorter side one block as wide as that side is taken, and everything is exact; beyond 256 as
 * many blocks as fit. Cost: 2(q+1) + 3 passes of 2b flops a cell, and short (b(q+1))^2. Parallel in the
 * passes and in all that goes over the lines.
 */
#include "solve/solve_internal.h"

#include <assert.h>

enum {
    BLOCKS_MOST = 5,
    WIDTH_MOST = 256, /* the widest factor that the sweeps take, in full strides, and the largest rank */
};

struct krylov {
    const struct sparse_operator *sparse;
    struct arena arena;
    size_t width, blocks;
    struct matrix basis, raw;               /* Q; A A' times a block: short x b */
    struct matrix across;                   /* long x b */
    struct matrix scaled;                   /* short x b */
    struct matrix left, left_scaled;        /* Y: short x r */
    struct matrix gram, coefficients, tops; /* H; Q'raw, b(q+1) x b; E */
    struct matrix small;                    /* r x r */
    double *eigenvalues, *dense;
};

static size_t smaller(size_t a, size_t b)
{
    return a < b ? a : b;
}

size_t krylov_width(size_t rank, size_t shorter)
{
    size_t width = smaller(factor_stride(rank + 4), WIDTH_MOST);
    return shorter <= BLOCKS_MOST * width && shorter <= WIDTH_MOST ? shorter : width;
}

static void krylov_reserve(struct krylov *k, size_t rank)
{
    size_t shorter = k->sparse->by_short->lines, longer = k->sparse->by_long->lines, all = k->width * k->blocks;
    matrix_reserve(&k->arena, shorter, all);
    matrix_reserve(&k->arena, shorter, k->width);
    matrix_reserve(&k->arena, shorter, k->width);
    matrix_reserve(&k->arena, longer, k->width);
    matrix_reserve(&k->arena, all, all);
    matrix_reserve(&k->arena, all, k->width);
    matrix_reserve(&k->arena, all, rank);
    matrix_reserve(&k->arena, rank, rank);
    matrix_reserve(&k->arena, shorter, rank);
    matrix_reserve(&k->arena, shorter, rank);
    arena_reserve(&k->arena, all, sizeof(double));
    arena_reserve(&k->arena, dense_work_size(longer, all), sizeof(double));
}

static void krylov_carve(struct krylov *k, size_t rank)
{
    size_t shorter = k->sparse->by_short->lines, longer = k->sparse->by_long->lines, all = k->width * k->blocks;
    k->basis = matrix_carve(&k->arena, shorter, all);
    k->raw = matrix_carve(&k->arena, shorter, k->width);
    k->scaled = matrix_carve(&k->arena, shorter, k->width);
    k->across = matrix_carve(&k->arena, longer, k->width);
    k->gram = matrix_carve(&k->arena, all, all);
    k->coefficients = matrix_carve(&k->arena, all, k->width);
    k->tops = matrix_carve(&k->arena, all, rank);
    k->small = matrix_carve(&k->arena, rank, rank);
    k->left = matrix_carve(&k->arena, shorter, rank);
    k->left_scaled = matrix_carve(&k->arena, shorter, rank);
    k->eigenvalues = arena_carve(&k->arena, all, sizeof(double));
    k->dense = arena_carve(&k->arena, dense_work_size(longer, all), sizeof(double));
}

/* to = A from. */
static void apply(struct krylov *k, struct matrix from, struct matrix to)
{
    sweep_multiply(k->sparse->sweep, k->sparse->by_short, k->sparse->short_values, from, to);
    if (k->sparse->short_scale != NULL)
        tall_scale_lines(k->sparse->sweep->context, to, k->sparse->short_scale, to);
}

/* to = A'from; scaled: room of from's shape. */
static void apply_transposed(struct krylov *k, struct matrix from, struct matrix scaled, struct matrix to)
{
    if (k->sparse->short_scale != NULL) {
        tall_scale_lines(k->sparse->sweep->context, from, k->sparse->short_scale, scaled);
        from = scaled;
    }
    sweep_multiply(k->sparse->sweep, k->sparse->by_long, k->sparse->long_values, from, to);
}

/* raw minus its part in the first `count` columns of the basis; coefficients receives that part. */
static void project_out(struct krylov *k, size_t count)
{
    struct matrix done = matrix_left(k->basis, count);
    struct matrix part = k->coefficients;
    part.rows = count;
    if (count == 0)
        return;
    tall_cross(k->sparse->sweep->context, done, k->raw, part, k->dense);
    tall_multiply(k->sparse->sweep->context, -1, done, part, 1, k->raw);
}

/* raw becomes block `b` of the basis. The second round after the QR keeps it orthogonal to the earlier blocks when raw
   was nearly in their span. */
static fescue_status block_add(struct krylov *k, size_t b)
{
    struct matrix none = {0};
    fescue_status status = FESCUE_OK;
    for (int round = 0; round < 2 && status == FESCUE_OK; round++) {
        project_out(k, b * k->width);
        status = dense_qr(k->sparse->sweep->context, k->raw, none, k->dense);
    }
    tall_copy(k->sparse->sweep->context, k->raw, NULL, matrix_columns(k->basis, b * k->width, k->width));
    return status;
}

/* G, so that the numbers of a line depend on the seed and the line alone. */
struct filling {
    struct matrix g;
    uint64_t seed;
};
enum { FILL_LINES = 1024 }; /* a piece for one worker: some 300 us */

static void fill_piece(void *job, size_t piece, size_t worker)
{
    const struct filling *filling = job;
    struct matrix g = filling->g;
    size_t first = piece * FILL_LINES, last = first + FILL_LINES < g.rows ? first + FILL_LINES : g.rows;
    (void)worker;
    for (size_t i = first; i < last; i++) {
        struct random_stream stream = random_open(filling->seed, RANDOM_START, (uint32_t)i);
        for (size_t j = 0; j < g.columns; j++)
            MATRIX_AT(g, i, j) = random_normal(&stream);
    }
}

/* Q and H. */
static fescue_status basis_build(struct krylov *k, uint64_t seed)
{
    fescue_status status;
    struct filling filling = {k->across, seed};
    team_run(k->sparse->sweep->context, (k->across.rows + FILL_LINES - 1) / FILL_LINES, fill_piece, &filling);
    apply(k, k->across, k->raw);
    for (size_t b = 0; b < k->blocks; b++) {
        TRY(block_add(k, b));
        apply_transposed(k, k->raw, k->scaled, k->across);
        apply(k, k->across, k->raw);
        struct matrix part = matrix_columns(k->gram, b * k->width, k->width);
        part.rows = (b + 1) * k->width;
        tall_cross(k->sparse->sweep->context, matrix_left(k->basis, part.rows), k->raw, part, k->dense);
    }
done:
    return status;
}

fescue_status krylov_triplets(const struct sparse_operator *sparse, size_t rank, uint64_t seed, struct matrix of_short,
                              double *spectrum, struct matrix of_long)
{
    size_t shorter = sparse->by_short->lines;
    struct krylov k = {.sparse = sparse, .width = krylov_width(rank, shorter)};
    fescue_context *context = sparse->sweep->context;
    fescue_status status;
    assert(rank >= 1 && rank <= shorter && of_short.rows == shorter);
    k.blocks = smaller(BLOCKS_MOST, shorter / k.width);
    krylov_reserve(&k, rank);
    TRY(arena_open(context, &k.arena));
    krylov_carve(&k, rank);
    TRY(basis_build(&k, seed));
    TRY(dense_eigen(context, k.gram, k.eigenvalues, k.dense));
    for (size_t i = 0; i < k.gram.rows; i++)
        for (size_t j = 0; j < rank; j++)
            MATRIX_AT(k.tops, i, j) = MATRIX_AT(k.gram, i, k.gram.columns - 1 - j);
    tall_multiply(context, 1, k.basis, k.tops, 0, k.left);
    apply_transposed(&k, k.left, k.left_scaled, of_long);
    TRY(dense_svd(context, of_long, spectrum, k.small, k.dense));
    tall_multiply(context, 1, k.left, k.small, 0, of_short);
done:
    arena_close(context, &k.arena);
    return status;
}
