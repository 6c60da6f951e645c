/* SPDX-License-Identifier: MIT
 *
 * What hangs together by counting alone (Singer, Cucuringu 2010, "Uniqueness of low-rank matrix completion by rigidity
 * theory", section 2.2).
 *
 * The estimate u_i . v_j + a_i + b_j stays as it is when the factors of all lines are changed together in one of a
 * group of ways; in the numbers of determined_internal.h they are, for any matrix G,
 *
 *     columns  z_j = G f_j,      rows  z_i = -G' f_i        (f_i . G f_j appears twice, with opposite signs)
 *
 * and they have as many degrees of freedom as p columns have unknowns, p = the unknowns of a row (or as many rows as a
 * column has unknowns). So the factors of any p columns in general position may be taken as given: a frame. A row with
 * p cells in given columns has as many equations as unknowns, and is given too; likewise a column with q cells in given
 * rows, q its own unknowns; and so on. All lines that come to be given, the body, hang together: each cell between two
 * of them is determined. Peeling never errs, and may stop too early.
 *
 *     frame    greedily the lines which most lines of the other side see all of, so that the first step gains many;
 *              from columns and from rows, the one with the larger body wins
 *     ties     cells of a line whose other line is in the body
 *
 * The greedy choice looks at no more than SAMPLE_MOST lines of the other side, so that the cost is O(cells + lines) and
 * rank times the cells of a sample, a block. One thread.
 */
#include "judge/determined_internal.h"

enum { SAMPLE_MOST = 4096 }; /* a choice among lines needs their shares to some percent only */

struct ties rigid_ties(const struct rigid *rigid, uint64_t line)
{
    uint64_t rows = rigid->cells->rows;
    bool is_row = line < rows;
    const struct half *half = is_row ? &rigid->cells->by_row : &rigid->cells->by_column;
    uint64_t at = is_row ? line : line - rows;
    return (struct ties){.across = half->across + half->start[at],
                         .count = half->start[at + 1] - half->start[at],
                         .shift = is_row ? rows : 0};
}

struct peel {
    struct rigid *rigid;
    uint32_t *ties, *seen, *count; /* one a line */
    uint64_t *queue, begin, end;
};

static bool is_side(const struct rigid *rigid, uint64_t line, bool columns)
{
    return (line >= rigid->cells->rows) == columns;
}

static size_t line_need(const struct rigid *rigid, uint64_t line)
{
    return line < rigid->cells->rows ? rigid->row_need : rigid->column_need;
}

/* ---- the frame --------------------------------------------------------------------------------------------------- */

/* Counts, for each line of the block on the frame's side, those of the other side that see it and all `chosen` ones. */
static void lines_count(struct peel *peel, uint32_t block, bool columns, uint32_t chosen)
{
    const struct rigid *rigid = peel->rigid;
    uint64_t from = rigid->from[block - 1], to = rigid->from[block], met = 0;
    for (uint64_t m = from; m < to; m++)
        peel->count[rigid->member[m]] = 0;
    for (uint64_t m = from; m < to && met < SAMPLE_MOST; m++) {
        uint64_t line = rigid->member[m];
        if (is_side(rigid, line, columns) || peel->seen[line] != chosen || rigid->state[line] != LINE_OPEN)
            continue;
        struct ties ties = rigid_ties(rigid, line);
        for (uint64_t k = 0; k < ties.count; k++)
            peel->count[ties.across[k] + ties.shift]++;
        met++;
    }
}

static uint64_t line_pick(const struct peel *peel, uint32_t block, bool columns)
{
    const struct rigid *rigid = peel->rigid;
    uint64_t best = UINT64_MAX, most = 0, widest = 0;
    for (uint64_t m = rigid->from[block - 1]; m < rigid->from[block]; m++) {
        uint64_t line = rigid->member[m], cells = rigid_ties(rigid, line).count;
        if (!is_side(rigid, line, columns) || rigid->state[line] != LINE_OPEN)
            continue;
        if (best == UINT64_MAX || peel->count[line] > most || (peel->count[line] == most && cells > widest)) {
            best = line;
            most = peel->count[line];
            widest = cells;
        }
    }
    return best;
}

static void line_settle(struct peel *peel, uint64_t line)
{
    peel->rigid->state[line] = LINE_SETTLED;
    peel->queue[peel->end++] = line;
}

/* Chooses the frame of the block and settles it. */
static void frame_choose(struct peel *peel, uint32_t block, bool columns)
{
    struct rigid *rigid = peel->rigid;
    size_t need = columns ? rigid->row_need : rigid->column_need;
    uint64_t *frame = rigid->frame + (size_t)(block - 1) * (rigid->rank + 1);
    for (uint64_t m = rigid->from[block - 1]; m < rigid->from[block]; m++)
        peel->seen[rigid->member[m]] = 0;
    rigid->frame_size[block - 1] = 0;
    for (uint32_t chosen = 0; chosen < need; chosen++) {
        lines_count(peel, block, columns, chosen);
        uint64_t line = line_pick(peel, block, columns);
        if (line == UINT64_MAX)
            return;
        struct ties ties = rigid_ties(rigid, line);
        for (uint64_t k = 0; k < ties.count; k++)
            peel->seen[ties.across[k] + ties.shift] += peel->seen[ties.across[k] + ties.shift] == chosen;
        frame[rigid->frame_size[block - 1]++] = line;
        line_settle(peel, line);
    }
}

/* ---- the body ---------------------------------------------------------------------------------------------------- */

static void body_spread(struct peel *peel)
{
    const struct rigid *rigid = peel->rigid;
    while (peel->begin < peel->end) {
        struct ties ties = rigid_ties(rigid, peel->queue[peel->begin++]);
        for (uint64_t k = 0; k < ties.count; k++) {
            uint64_t other = ties.across[k] + ties.shift;
            if (rigid->state[other] != LINE_OPEN)
                continue;
            if (++peel->ties[other] == line_need(rigid, other))
                line_settle(peel, other);
        }
    }
}

/* Everything in the queue is open again. */
static void body_forget(struct peel *peel)
{
    struct rigid *rigid = peel->rigid;
    for (uint64_t q = 0; q < peel->end; q++) {
        struct ties ties = rigid_ties(rigid, peel->queue[q]);
        for (uint64_t k = 0; k < ties.count; k++)
            peel->ties[ties.across[k] + ties.shift] = 0;
        peel->ties[peel->queue[q]] = 0;
        rigid->state[peel->queue[q]] = LINE_OPEN;
    }
    peel->begin = peel->end = 0;
}

static uint64_t body_grow(struct peel *peel, uint32_t block, bool columns)
{
    peel->begin = peel->end = 0;
    frame_choose(peel, block, columns);
    body_spread(peel);
    return peel->end;
}

static bool has_body(const struct rigid *rigid, uint32_t block)
{
    for (uint64_t m = rigid->from[block - 1]; m < rigid->from[block]; m++)
        if (rigid->state[rigid->member[m]] == LINE_SETTLED)
            return true;
    return false;
}

static void block_peel(struct peel *peel, uint32_t block)
{
    struct rigid *rigid = peel->rigid;
    if (has_body(rigid, block))
        return;
    uint64_t all = rigid->from[block] - rigid->from[block - 1];
    uint64_t of_columns = body_grow(peel, block, true);
    if (of_columns == all)
        return;
    body_forget(peel);
    if (body_grow(peel, block, false) < of_columns) {
        body_forget(peel);
        body_grow(peel, block, true);
    }
    rigid->is_free[block - 1] = 2 * peel->end < all;
    if (rigid->is_free[block - 1])
        body_forget(peel);
}

static fescue_status peel_open(struct rigid *rigid, struct peel *peel)
{
    fescue_status status = FESCUE_OK;
    *peel = (struct peel){.rigid = rigid};
    TRY(TAKE(rigid->context, rigid->lines, &peel->ties));
    TRY(TAKE(rigid->context, rigid->lines, &peel->seen));
    TRY(TAKE(rigid->context, rigid->lines, &peel->count));
    TRY(TAKE(rigid->context, rigid->lines, &peel->queue));
done:
    return status;
}

static void peel_close(struct peel *peel)
{
    GIVE(peel->rigid->context, &peel->ties);
    GIVE(peel->rigid->context, &peel->seen);
    GIVE(peel->rigid->context, &peel->count);
    GIVE(peel->rigid->context, &peel->queue);
}

fescue_status peel_run(struct rigid *rigid)
{
    fescue_status status = FESCUE_OK;
    struct peel peel;
    TRY(peel_open(rigid, &peel));
    for (uint32_t block = 1; block <= rigid->blocks; block++)
        block_peel(&peel, block);
done:
    peel_close(&peel);
    return status;
}

fescue_status peel_on(struct rigid *rigid)
{
    fescue_status status = FESCUE_OK;
    struct peel peel;
    TRY(peel_open(rigid, &peel));
    for (uint64_t line = 0; line < rigid->lines; line++)
        if (rigid->state[line] == LINE_SETTLED)
            peel.queue[peel.end++] = line;
    body_spread(&peel);
done:
    peel_close(&peel);
    return status;
}
