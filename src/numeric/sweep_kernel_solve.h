/* SPDX-License-Identifier: MIT
 *
 * Ridge least squares of every line on its own; part of sweep_kernel.h, which says what is defined here.
 *
 *     G = sum over the line's cells of p p' + diag(ridge),    h = sum of x p,    G = U'U,    w = U^-1 U'^-1 h
 *
 * SWEEP_CHUNK right rows are gathered side by side, then the upper triangle of their products is made in tiles of 4
 * rows x up to 3 registers, which stay in registers over the chunk: 4 + 3 loads feed 12 multiply-adds. Within a chunk
 * sums are REAL, over chunks double.
 *
 * Up to rank 64 eight lines go together and their systems are solved side by side (batch_kernel.h). Above, a factor is
 * made row by row in double, a whole row in registers or in the nearest cache:
 *     U_i = (G_i - sum over j < i of U_ji U_j) / sqrt(the i-th number of that)
 * with numbers left of the diagonal that mean nothing, and set down as a column of U' as well. A pivot below rank eps
 * G_ii, eps that of REAL, has lost all its digits: then sweep_line_solve, with its rule for such matrices, takes over
 * from G.
 *
 * Cost, in multiply-adds: rank^2/2 a cell and rank^3/6 + rank^2 a line.
 */

enum { TILE_ROWS = 4, TILE_REGISTERS = 3 };

/* gram(row .. row+3, first .. first + registers*LANES - 1) += sum over the chunk's rows p of p p' */
INLINE void tile_add(const REAL *rows, size_t count, size_t width, size_t row, size_t first, double *gram,
                     const size_t registers)
{
    vec sum[TILE_ROWS][TILE_REGISTERS] = {{{0}}};
    for (const REAL *p = rows; p < rows + count * width; p += width)
        for (size_t t = 0; t < TILE_ROWS; t++)
            for (size_t v = 0; v < registers; v++)
                sum[t][v] = MADD(splat(p[row + t]), *(const vec *)(p + first + v * LANES), sum[t][v]);
    for (size_t t = 0; t < TILE_ROWS; t++)
        for (size_t v = 0; v < registers; v++)
            wide_add((wide *)(gram + (row + t) * width + first + v * LANES), &sum[t][v]);
}

/* The upper triangle of the chunk's products, and what whole tiles cover beside it. */
static void chunk_gram(const REAL *rows, size_t count, size_t width, double *gram)
{
    for (size_t row = 0; row < width; row += TILE_ROWS) {
        size_t first = row / LANES * LANES, left = (width - first) / LANES;
        for (; left >= TILE_REGISTERS; left -= TILE_REGISTERS, first += TILE_REGISTERS * LANES)
            tile_add(rows, count, width, row, first, gram, TILE_REGISTERS);
        if (left == 2)
            tile_add(rows, count, width, row, first, gram, 2);
        else if (left == 1)
            tile_add(rows, count, width, row, first, gram, 1);
    }
}

/* side += sum over the chunk of x_c row_c, four cells at a time so that no sum waits for the one before it. */
static void chunk_side(const REAL *rows, const REAL *values, size_t count, size_t width, double *side)
{
    for (size_t at = 0; at < width; at += LANES) {
        vec sum[4] = {{0}};
        size_t c = 0;
        for (; c + 4 <= count; c += 4)
            for (size_t part = 0; part < 4; part++)
                sum[part] = MADD(splat(values[c + part]), *(const vec *)(rows + (c + part) * width + at), sum[part]);
        for (; c < count; c++)
            sum[0] = MADD(splat(values[c]), *(const vec *)(rows + c * width + at), sum[0]);
        sum[0] = (sum[0] + sum[2]) + (sum[1] + sum[3]);
        wide_add((wide *)(side + at), &sum[0]);
    }
}

/* The chunk's rows; those of the chunk behind the next one, be it of this line or another, are asked for. They are
   asked into the second cache: it waits for more of them at once than the first, and where rows come from memory that
   is half of the time. */
static void chunk_take(const struct sweep_job *job, uint64_t k, size_t count, uint64_t stop, REAL *rows)
{
    const uint32_t *across = job->half->across + k;
    const REAL *data = job->right.data;
    size_t left = stop - k, ahead = left < 3 * SWEEP_CHUNK ? left : 3 * SWEEP_CHUNK;
    for (size_t c = 0; c < count; c++) {
        const REAL *from = data + across[c] * job->right.stride;
        for (size_t at = 0; at < job->width; at += LANES)
            *(vec *)(rows + c * job->width + at) = *(const vec *)(from + at);
    }
    for (size_t c = count + SWEEP_CHUNK; c < count + 2 * SWEEP_CHUNK && c < ahead; c++)
        for (size_t at = 0; at < job->width; at += CACHE_LINE / sizeof(REAL))
            __builtin_prefetch(data + across[c] * job->right.stride + at, 0, 2);
}

static void line_gather(const struct sweep_job *job, const struct sweep_room *room, uint32_t line, uint64_t stop)
{
    const struct half *half = job->half;
    size_t width = job->width;
    memset(room->gram, 0, width * width * sizeof *room->gram);
    memset(room->side, 0, width * sizeof *room->side);
    uint64_t end = half->start[line + 1];
    for (uint64_t k = half->start[line]; k < end; k += SWEEP_CHUNK) {
        size_t count = end - k < SWEEP_CHUNK ? end - k : SWEEP_CHUNK;
        chunk_take(job, k, count, stop, room->rows);
        chunk_gram(room->rows, count, width, room->gram);
        chunk_side(room->rows, (const REAL *)half->value + k, count, width, room->side);
    }
    for (size_t i = 0; job->ridge != NULL && i < job->rank; i++)
        room->gram[i * width + i] += job->ridge[i];
}

/* Row i of U from those above it, column i of U'; 1 / U_ii, or 0 when the pivot broke down. */
INLINE double row_factor(const struct sweep_room *room, size_t i, size_t rank, size_t width, const size_t registers)
{
    size_t first = i / WIDE_LANES;
    wide row[SWEEP_MOST_WIDTH / WIDE_LANES];
    double *to = room->factor + i * width;
    for (size_t v = first; v < registers; v++)
        row[v] = *(const wide *)(room->gram + i * width + v * WIDE_LANES);
    for (size_t j = 0; j < i; j++) {
        const double *above = room->factor + j * width;
        wide share = splat_wide(-above[i]);
        for (size_t v = first; v < registers; v++)
            row[v] = MADD_WIDE(share, *(const wide *)(above + v * WIDE_LANES), row[v]);
    }
    for (size_t v = first; v < registers; v++)
        *(wide *)(to + v * WIDE_LANES) = row[v];
    double pivot = to[i];
    if (!(pivot > (double)rank * REAL_EPSILON * room->gram[i * width + i]) || !(pivot < DBL_MAX))
        return 0;
    double inverse = 1 / sqrt(pivot);
    for (size_t v = first; v < registers; v++)
        *(wide *)(to + v * WIDE_LANES) = row[v] * inverse;
    for (size_t j = i; j < rank; j++)
        room->lower[j * width + i] = to[j];
    return inverse;
}

/* U, U', and the inverses of the diagonal; false on breakdown. G is left as it is. */
static bool line_factor(const struct sweep_room *room, size_t rank, size_t width)
{
    size_t registers = width / WIDE_LANES;
    for (size_t i = 0; i < rank; i++) {
        double inverse = row_factor(room, i, rank, width, registers);
        if (inverse == 0)
            return false;
        room->inverse[i] = inverse;
    }
    return true;
}

/* side -= x row, from register `first` on or up to register `last`. */
INLINE void side_subtract(double *side, const double *row, double x, size_t first, size_t last)
{
    wide share = splat_wide(-x);
    for (size_t v = first; v < last; v++) {
        wide *to = (wide *)(side + v * WIDE_LANES);
        *to = MADD_WIDE(share, *(const wide *)(row + v * WIDE_LANES), *to);
    }
}

/* solution = U^-1 U'^-1 side. Both ways go by rows, those of U and those of U': a number is read from what a register
   wrote, which is quick, and never the other way round. */
static void line_substitute(const struct sweep_room *room, size_t rank, size_t width)
{
    size_t registers = width / WIDE_LANES;
    double *x = room->solution;
    for (size_t i = 0; i < rank; i++) {
        x[i] = room->side[i] * room->inverse[i];
        side_subtract(room->side, room->factor + i * width, x[i], i / WIDE_LANES, registers);
    }
    memcpy(room->side, x, rank * sizeof *x);
    for (size_t i = rank; i-- > 0;) {
        x[i] = room->side[i] * room->inverse[i];
        side_subtract(room->side, room->lower + i * width, x[i], 0, i / WIDE_LANES + 1);
    }
}

static void lines_solve(const struct sweep_job *job, const struct sweep_room *room, const struct span *span)
{
    for (uint32_t line = span->line; line < span->last; line++) {
        line_gather(job, room, line, span->stop);
        bool empty = span->start[line] == span->start[line + 1];
        if (!empty && line_factor(room, job->rank, job->width)) {
            line_substitute(room, job->rank, job->width);
            sweep_line_store(job, room, line);
        } else {
            sweep_line_solve(job, room, line);
        }
    }
}

/* G and h of a line into its lane. */
static void lane_write(const struct sweep_job *job, const struct sweep_room *room, size_t lane)
{
    double *to = room->systems + lane;
    for (size_t i = 0; i < job->rank; i++) {
        for (size_t j = 0; j <= i; j++, to += BATCH_LANES)
            *to = room->gram[j * job->width + i];
        room->sides[i * BATCH_LANES + lane] = room->side[i];
    }
}

static void lane_clear(const struct sweep_job *job, const struct sweep_room *room, size_t lane)
{
    for (size_t at = 0; at < packed_size(job->rank); at++)
        room->systems[at * BATCH_LANES + lane] = 0;
    for (size_t i = 0; i < job->rank; i++) {
        room->systems[(packed_size(i) + i) * BATCH_LANES + lane] = 1;
        room->sides[i * BATCH_LANES + lane] = 0;
    }
}

/* Lines without cells, and those whose factor breaks down, are done again on their own. */
static void batch_solve(const struct sweep_job *job, const struct sweep_room *room, const struct span *span,
                        uint32_t first)
{
    unsigned apart = 0;
    size_t count = span->last - first < BATCH_LANES ? span->last - first : BATCH_LANES;
    for (size_t lane = 0; lane < BATCH_LANES; lane++) {
        uint32_t line = first + (uint32_t)lane;
        if (lane >= count || span->start[line] == span->start[line + 1]) {
            lane_clear(job, room, lane);
            apart |= 1U << lane;
            continue;
        }
        line_gather(job, room, line, span->stop);
        lane_write(job, room, lane);
    }
    apart |= job->sweep->batch->solve(room->systems, job->rank, room->sides, NULL, REAL_EPSILON);
    for (size_t lane = 0; lane < count; lane++) {
        uint32_t line = first + (uint32_t)lane;
        if (apart >> lane & 1) {
            line_gather(job, room, line, span->stop);
            sweep_line_solve(job, room, line);
        } else
            sweep_lane_store(job, room, line, lane);
    }
}

static void solve_block(const struct sweep_job *job, size_t block, size_t worker, double sums[SWEEP_SUMS])
{
    struct span span = span_of(job, block, 0);
    struct sweep_room room = sweep_room_of(job->sweep, worker);
    (void)sums;
    if (job->rank > SWEEP_BATCH_RANK)
        lines_solve(job, &room, &span);
    for (uint32_t line = span.line; job->rank <= SWEEP_BATCH_RANK && line < span.last; line += BATCH_LANES)
        batch_solve(job, &room, &span, line);
}
