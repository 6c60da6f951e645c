/* SPDX-License-Identifier: MIT
 *
 * A random motion that no seen cell notices.
 *
 * J is the linear map from motions of the open lines (settled ones stand still) to what they do to the seen cells,
 *
 *     (J z)_ij = z_i . f_j + z_j . f_i,
 *
 * at random factors, which tell for nearly all factors (Singer, Cucuringu 2010, "Uniqueness of low-rank matrix
 * completion by rigidity theory", theorem 2.2). Its null space holds the motions that leave all seen cells as they are;
 * an unseen cell is determined when they leave it too. A random element of the null space is what the least-squares
 * solution of least norm leaves of a random x,
 *
 *     z = x - D y,      y = argmin |J D y - J x|, least |y|,
 *
 * by LSQR (Paige, Saunders 1982, "LSQR: an algorithm for sparse linear equations and sparse least squares", section 4),
 * with D the inverse lengths of the columns of J. The system is consistent; it ends when the residual has fallen by
 * 1e-10, which leaves less than 1e-8 of what is typical at cells that no motion moves. The threshold is 1e-6: the null
 * space may be small beside the whole, so that a motion is as well, and at 1e-4 two motions of small tables let one
 * moved cell in some thousand pass.
 *
 *     x, v, w, g   one set of `stride` numbers an open line, in the scale of D; z in that of the factors
 *     residual     J v - (alpha/beta) times the last one: twice, as seen from its row and from its column, so that
 * every line sums over its own cells and nothing has to be transposed
 *
 * One pass a iteration over the open lines' cells makes the residual and J' of it together. Blocks of lines go to the
 * team; each writes its own lines, and sums over blocks run in their order: the same bits for any number of workers.
 *
 * In a block that is free (peel) all lines take part, and the motion of the frame is taken off again as the change G
 * (peel) that it amounts to, by least squares over the frame. Cost: some hundred passes, each 6 stride multiplications
 * a cell and direction; their number is limited so that a call stays below `work_most`.
 */
#include "judge/determined_internal.h"

#include <math.h>

enum { BLOCKS_MOST = 256, ITERATIONS_LEAST = 200 };
static const double fallen = 1e-10;   /* of the residual */
static const double still = 1e-6;     /* numbers of a motion, itself of size one, below which a line does not move */
static const double work_most = 1e10; /* multiplications of a call: some ten seconds of one processor */

struct null_system {
    struct rigid *rigid;
    size_t stride, open, taking; /* open lines, and with the settled ones they have cells with */
    uint64_t *line;              /* of `taking` lines, the open ones first */
    uint64_t *start;             /* open + 1; the cells of open line v are across[start[v]] .. */
    uint32_t *across;            /* places in `line` */
    double *residual;
    double *factor, *z;                   /* taking x stride */
    double *x, *v, *w, *g, *scale, *draw; /* open x stride */
    size_t blocks;
    size_t block[BLOCKS_MOST + 1];
    double partial[BLOCKS_MOST];
    double keep, grown, along, turn; /* the coefficients of the pass at hand */
};

/* ---- the system ---------------------------------------------------------------------------------------------------
 */

void rigid_factor(const struct rigid *rigid, uint64_t line, double *factor)
{
    size_t rank = rigid->rank;
    bool is_row = line < rigid->cells->rows;
    for (size_t k = 0; k < rank; k++)
        factor[k] = 2 * random_uniform_at(1, RANDOM_PROBE, 0, line * rigid->stride + k) - 1;
    factor[rank] = !is_row && rigid->row_need > rank;
    factor[rank + 1] = is_row && rigid->column_need > rank;
}

/* The motion that a line is given at first; nothing where it has no unknown. */
static void line_draw(const struct rigid *rigid, uint64_t line, uint32_t which, double *draw)
{
    size_t rank = rigid->rank;
    bool is_row = line < rigid->cells->rows;
    for (size_t k = 0; k < rigid->stride; k++)
        draw[k] = 2 * random_uniform_at(1, RANDOM_PROBE, 1 + which, line * rigid->stride + k) - 1;
    if (!is_row || rigid->row_need == rank)
        draw[rank] = 0;
    if (is_row || rigid->column_need == rank)
        draw[rank + 1] = 0;
}

static bool takes_part(const struct rigid *rigid, uint64_t line)
{
    return rigid->state[line] == LINE_OPEN || rigid->state[line] == LINE_SETTLED;
}

/* Counts the open lines, their cells, and the settled lines beside them; gives those that take part their places. */
static fescue_status lines_place(struct null_system *system, uint32_t *place, uint64_t *cells)
{
    fescue_status status = FESCUE_OK;
    const struct rigid *rigid = system->rigid;
    uint64_t taking = 0;
    for (uint64_t line = 0; line < rigid->lines; line++)
        if (rigid->state[line] == LINE_OPEN)
            place[line] = (uint32_t)++taking;
    system->open = taking;
    *cells = 0;
    for (uint64_t line = 0; line < rigid->lines; line++) {
        struct ties ties = rigid_ties(rigid, line);
        for (uint64_t k = 0; rigid->state[line] == LINE_OPEN && k < ties.count; k++) {
            uint64_t other = ties.across[k] + ties.shift;
            *cells += takes_part(rigid, other);
            if (takes_part(rigid, other) && place[other] == 0)
                place[other] = (uint32_t)++taking;
        }
    }
    system->taking = taking;
    TRY(TAKE(rigid->context, taking, &system->line));
    for (uint64_t line = 0; line < rigid->lines; line++)
        if (place[line] != 0)
            system->line[place[line] - 1] = line;
done:
    return status;
}

static void cells_place(struct null_system *system, const uint32_t *place)
{
    const struct rigid *rigid = system->rigid;
    uint64_t next = 0;
    for (size_t v = 0; v < system->open; v++) {
        struct ties ties = rigid_ties(rigid, system->line[v]);
        for (uint64_t k = 0; k < ties.count; k++)
            if (takes_part(rigid, ties.across[k] + ties.shift))
                system->across[next++] = place[ties.across[k] + ties.shift] - 1;
        system->start[v + 1] = next;
    }
}

/* Blocks of about equal work. */
static void blocks_cut(struct null_system *system)
{
    uint64_t all = system->start[system->open] + system->open, share = all / BLOCKS_MOST + 64, done = 0;
    system->blocks = 0;
    for (size_t v = 0; v < system->open; v++) {
        done += system->start[v + 1] - system->start[v] + 1;
        if (done >= share * (system->blocks + 1) && system->blocks + 1 < BLOCKS_MOST)
            system->block[++system->blocks] = v + 1;
    }
    if (system->block[system->blocks] < system->open)
        system->block[++system->blocks] = system->open;
}

static fescue_status system_open(struct rigid *rigid, struct null_system *system)
{
    fescue_status status = FESCUE_OK;
    fescue_context *context = rigid->context;
    uint32_t *place = NULL;
    uint64_t cells;
    *system = (struct null_system){.rigid = rigid, .stride = rigid->stride};
    TRY(TAKE(context, rigid->lines, &place));
    TRY(lines_place(system, place, &cells));
    size_t own = system->open * system->stride, all = system->taking * system->stride;
    TRY(TAKE(context, system->open + 1, &system->start));
    TRY(TAKE(context, cells, &system->across));
    TRY(TAKE(context, cells, &system->residual));
    TRY(TAKE(context, all, &system->factor));
    TRY(TAKE(context, all, &system->z));
    double **vectors[] = {&system->x, &system->v, &system->w, &system->g, &system->scale, &system->draw};
    for (size_t k = 0; k < sizeof vectors / sizeof vectors[0]; k++)
        TRY(TAKE(context, own, vectors[k]));
    cells_place(system, place);
    blocks_cut(system);
    for (size_t v = 0; v < system->taking; v++)
        rigid_factor(rigid, system->line[v], system->factor + v * system->stride);
done:
    GIVE(context, &place);
    return status;
}

static void system_close(struct null_system *system)
{
    fescue_context *context = system->rigid->context;
    double **vectors[] = {&system->x,    &system->v, &system->w,        &system->g,     &system->scale,
                          &system->draw, &system->z, &system->residual, &system->factor};
    for (size_t k = 0; k < sizeof vectors / sizeof vectors[0]; k++)
        GIVE(context, vectors[k]);
    GIVE(context, &system->line);
    GIVE(context, &system->start);
    GIVE(context, &system->across);
}

/* ---- passes -------------------------------------------------------------------------------------------------------
 */

/* D: the lengths of the columns of J. */
static void lines_scale(void *job, size_t block, size_t worker)
{
    struct null_system *system = job;
    size_t stride = system->stride;
    (void)worker;
    for (size_t v = system->block[block]; v < system->block[block + 1]; v++) {
        double *scale = system->scale + v * stride;
        for (uint64_t e = system->start[v]; e < system->start[v + 1]; e++)
            for (size_t k = 0; k < stride; k++) {
                double f = system->factor[system->across[e] * stride + k];
                scale[k] += f * f;
            }
        for (size_t k = 0; k < stride; k++)
            scale[k] = scale[k] > 0 ? 1 / sqrt(scale[k]) : 0;
    }
}

/* residual = J z - keep * residual, g = J' residual, partial = |residual|^2 over the cells that count here: a cell of
   two open lines counts in its row. */
static void lines_pass(void *job, size_t block, size_t worker)
{
    struct null_system *system = job;
    size_t stride = system->stride;
    double square = 0;
    (void)worker;
    for (size_t v = system->block[block]; v < system->block[block + 1]; v++) {
        const double *z = system->z + v * stride, *factor = system->factor + v * stride;
        double *g = system->g + v * stride;
        bool is_row = system->line[v] < system->rigid->cells->rows;
        for (size_t k = 0; k < stride; k++)
            g[k] = 0;
        for (uint64_t e = system->start[v]; e < system->start[v + 1]; e++) {
            const double *other = system->factor + system->across[e] * stride,
                         *moved = system->z + system->across[e] * stride;
            double mine = 0, theirs = 0;
            for (size_t k = 0; k < stride; k++) {
                mine += z[k] * other[k];
                theirs += moved[k] * factor[k];
            }
            double left = mine + theirs - system->keep * system->residual[e];
            system->residual[e] = left;
            for (size_t k = 0; k < stride; k++)
                g[k] += left * other[k];
            if (is_row || system->across[e] >= system->open)
                square += left * left;
        }
    }
    system->partial[block] = square;
}

/* v = D g / grown - along v, partial = |v|^2. */
static void lines_turn(void *job, size_t block, size_t worker)
{
    struct null_system *system = job;
    double square = 0;
    (void)worker;
    for (size_t k = system->block[block] * system->stride; k < system->block[block + 1] * system->stride; k++) {
        system->v[k] = system->scale[k] * system->g[k] / system->grown - system->along * system->v[k];
        square += system->v[k] * system->v[k];
    }
    system->partial[block] = square;
}

/* v /= grown, x += along w, w = v - turn w, z = D v. */
static void lines_step(void *job, size_t block, size_t worker)
{
    struct null_system *system = job;
    (void)worker;
    for (size_t k = system->block[block] * system->stride; k < system->block[block + 1] * system->stride; k++) {
        system->v[k] /= system->grown;
        system->x[k] += system->along * system->w[k];
        system->w[k] = system->v[k] - system->turn * system->w[k];
        system->z[k] = system->scale[k] * system->v[k];
    }
}

static double pass_run(struct null_system *system, team_task *task)
{
    double square = 0;
    team_run(system->rigid->context, system->blocks, task, system);
    team_sum(system->rigid->context, system->partial, system->blocks, 1, &square);
    return sqrt(square);
}

/* ---- LSQR ---------------------------------------------------------------------------------------------------------
 */

/* The first two of the bidiagonal: beta u = J x, alpha v = J' u. Returns beta. */
static double lsqr_begin(struct null_system *system, double *alpha)
{
    double beta = pass_run(system, lines_pass);
    system->grown = beta > 0 ? beta : 1;
    system->along = 0;
    *alpha = pass_run(system, lines_turn);
    system->grown = *alpha > 0 ? *alpha : 1;
    system->along = system->turn = 0;
    pass_run(system, lines_step);
    return beta;
}

/* Leaves y in x, *size = |J x|. Whether the residual fell as far as it should; the names are those of the paper. */
static bool lsqr_run(struct null_system *system, uint64_t iterations, double *size)
{
    double alpha, first = lsqr_begin(system, &alpha), beta = first, phi_bar = first, rho_bar = alpha;
    for (uint64_t n = 0; n < iterations && alpha > 0 && phi_bar > fallen * first; n++) {
        system->keep = alpha / beta;
        beta = pass_run(system, lines_pass);
        if (is_cancelled(system->rigid->context))
            break;
        double rho = hypot(rho_bar, beta), cosine = rho_bar / rho, sine = beta / rho;
        system->grown = beta > 0 ? beta : 1;
        system->along = beta;
        alpha = beta > 0 ? pass_run(system, lines_turn) : 0;
        system->grown = alpha > 0 ? alpha : 1;
        system->along = cosine * phi_bar / rho;
        system->turn = sine * alpha / rho;
        pass_run(system, lines_step);
        rho_bar = -cosine * alpha;
        phi_bar *= sine;
    }
    *size = first;
    return phi_bar <= fallen * first || alpha == 0;
}

/* ---- the motion ---------------------------------------------------------------------------------------------------
 */

/* The change G that the frame of a block was moved by, stride x stride: z_f = G f_f over its lines. */
static void change_find(const struct null_system *system, const double *const *frame, size_t count, double *normal,
                        double *change)
{
    size_t stride = system->stride;
    for (size_t k = 0; k < packed_size(stride); k++)
        normal[k] = 0;
    for (size_t k = 0; k < stride * stride; k++)
        change[k] = 0;
    for (size_t m = 0; m < count; m++) {
        const double *factor = frame[2 * m], *z = frame[2 * m + 1];
        for (size_t a = 0; a < stride; a++) {
            for (size_t b = 0; b <= a; b++)
                normal[packed_size(a) + b] += factor[a] * factor[b];
            for (size_t b = 0; b < stride; b++)
                change[a * stride + b] += z[a] * factor[b];
        }
    }
    for (size_t a = 0; a < stride; a++) /* of what no line of this side has */
        if (normal[packed_size(a) + a] == 0)
            normal[packed_size(a) + a] = 1;
    packed_cholesky(normal, stride);
    for (size_t a = 0; a < stride; a++)
        packed_solve(normal, stride, change + a * stride);
}

/* Takes the change off a line: z -= G f on the side of the frame, z += G' f on the other. */
static void change_undo(const struct null_system *system, size_t v, bool same_side, const double *change)
{
    size_t stride = system->stride;
    const double *factor = system->factor + v * stride;
    double *z = system->z + v * stride;
    for (size_t a = 0; a < stride; a++)
        for (size_t b = 0; b < stride; b++) {
            if (same_side)
                z[a] -= change[a * stride + b] * factor[b];
            else
                z[b] += change[a * stride + b] * factor[a];
        }
}

/* Where a line of the system stands; lines of one kind are in ascending order, the open ones first. */
static size_t open_find(const struct null_system *system, uint64_t line)
{
    size_t low = 0, high = system->open;
    while (high - low > 1) {
        size_t middle = low + (high - low) / 2;
        if (system->line[middle] <= line)
            low = middle;
        else
            high = middle;
    }
    return low;
}

static fescue_status changes_undo(struct null_system *system)
{
    fescue_status status = FESCUE_OK;
    struct rigid *rigid = system->rigid;
    size_t stride = system->stride;
    const double **frame = NULL;
    double *normal = NULL, *change = NULL;
    TRY(TAKE(rigid->context, 2 * (rigid->rank + 1), &frame));
    TRY(TAKE(rigid->context, packed_size(stride), &normal));
    TRY(TAKE(rigid->context, stride * stride, &change));
    for (uint32_t block = 1; block <= rigid->blocks; block++) {
        const uint64_t *lines = rigid->frame + (size_t)(block - 1) * (rigid->rank + 1);
        size_t count = rigid->frame_size[block - 1];
        if (!rigid->is_free[block - 1] || count == 0)
            continue;
        for (size_t m = 0; m < count; m++) {
            size_t v = open_find(system, lines[m]);
            frame[2 * m] = system->factor + v * stride;
            frame[2 * m + 1] = system->z + v * stride;
        }
        change_find(system, frame, count, normal, change);
        bool columns = lines[0] >= rigid->cells->rows;
        for (uint64_t m = rigid->from[block - 1]; m < rigid->from[block]; m++) {
            uint64_t line = rigid->member[m];
            if (rigid->state[line] == LINE_OPEN)
                change_undo(system, open_find(system, line), (line >= rigid->cells->rows) == columns, change);
        }
        rigid->is_free[block - 1] = 0;
    }
done:
    GIVE(rigid->context, &frame);
    GIVE(rigid->context, &normal);
    GIVE(rigid->context, &change);
    return status;
}

/* Settles the lines that do not move, and keeps the numbers of the others. */
static fescue_status motion_take(struct null_system *system, struct motion *motion)
{
    fescue_status status = FESCUE_OK;
    struct rigid *rigid = system->rigid;
    size_t stride = system->stride;
    TRY(TAKE(rigid->context, system->open, &motion->line));
    TRY(TAKE(rigid->context, system->open * stride, &motion->numbers));
    for (size_t v = 0; v < system->open; v++) {
        const double *z = system->z + v * stride;
        double most = 0;
        for (size_t k = 0; k < stride; k++)
            most = fmax(most, fabs(z[k]));
        if (most <= still) {
            rigid->state[system->line[v]] = LINE_SETTLED;
            continue;
        }
        for (size_t k = 0; k < stride; k++)
            motion->numbers[motion->lines * stride + k] = z[k];
        motion->line[motion->lines++] = system->line[v];
    }
done:
    return status;
}

fescue_status null_motion(struct rigid *rigid, uint32_t which, struct motion *motion)
{
    fescue_status status = FESCUE_OK;
    struct null_system system;
    *motion = (struct motion){0};
    TRY(system_open(rigid, &system));
    size_t own = system.open * system.stride;
    for (size_t v = 0; v < system.open; v++)
        line_draw(rigid, system.line[v], which, system.draw + v * system.stride);
    for (size_t k = 0; k < own; k++)
        system.z[k] = system.draw[k];
    team_run(rigid->context, system.blocks, lines_scale, &system);
    uint64_t cells = system.start[system.open];
    double affordable = work_most / (6 * (double)cells * (double)system.stride + 1);
    uint64_t iterations = 20 * own + ITERATIONS_LEAST;
    if ((double)iterations > affordable)
        iterations = affordable > ITERATIONS_LEAST ? (uint64_t)affordable : ITERATIONS_LEAST;
    double size;
    motion->is_found = lsqr_run(&system, iterations, &size);
    uint64_t seen = 0;
    for (size_t v = 0; v < system.open; v++)
        for (uint64_t e = system.start[v]; e < system.start[v + 1]; e++)
            seen += system.line[v] < rigid->cells->rows || system.across[e] >= system.open;
    motion->typical = seen > 0 ? size / sqrt((double)seen) : 0;
    for (size_t k = 0; k < own; k++)
        system.z[k] = system.draw[k] - system.scale[k] * system.x[k];
    TRY(changes_undo(&system));
    TRY(motion_take(&system, motion));
done:
    system_close(&system);
    if (status != FESCUE_OK)
        motion_free(rigid->context, motion);
    return status;
}

void motion_free(fescue_context *context, struct motion *motion)
{
    GIVE(context, &motion->line);
    GIVE(context, &motion->numbers);
    motion->lines = 0;
}
