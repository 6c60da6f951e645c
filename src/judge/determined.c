/* SPDX-License-Identifier: MIT
 *
 * On what the estimate of a cell rests.
 *
 * Which unseen cells of X = U V' + a 1' + 1 b' (rank r, with the effects that the kind of offsets has) do the seen ones
 * determine? For nearly all factors the answer depends on the pattern alone (Singer, Cucuringu 2010, "Uniqueness of
 * low-rank matrix completion by rigidity theory"): a cell is determined, locally, when its derivative vanishes on every
 * motion of the factors that leaves the seen cells as they are. In turn:
 *
 *     core     a row has p unknowns, p = r, or r + 1 with row effects, a column q likewise. Lines that fewer cells than
 *              that tie to others in the same plight stay free: outside the (p, q)-core nothing is determined (core).
 *     blocks   nor between connected blocks of the core (blocks)
 *     peeling  from a frame of lines whose factors may be taken as given, whatever has as many cells in given lines as
 *              it has unknowns is given too; cells between two given lines are determined (determined_peel)
 *     motions  of the lines that are left, the loose ones: two random motions that no seen cell notices. A cell which
 *              one of them moves by more than 1e-6 of what is typical of any motion is not determined
 *              (determined_null)
 *
 * Offsets: the common mean is taken as known. Global uniqueness is not looked at, nor how well a cell is determined.
 * At rank 0 there is no low-rank part.
 *
 *     loose    for each line its place among the loose ones, from 1, or 0, and its numbers in both motions; the factor
 *              of the other line of a cell is drawn again when it is asked for, from the number of that line
 *
 * Large tables: peeling costs O(cells + lines) and settles most or all; where it finds no beginning (few cells a line,
 * at random) a dense part of bounded size is settled by motions first (determined_thin). When more than that is left,
 * the rest counts as determined on the necessary conditions alone, and `unchecked` says how many lines these are. Loose
 * lines whose cells are too many to be counted one by one leave the core: all their cells count as not determined.
 *
 * The random numbers are the same in every run; all sums run in a fixed order, so that the answer does not depend on
 * the number of workers.
 */
#include "judge/determined_internal.h"

#include <assert.h>
#include <math.h>

static const double moved = 1e-6;     /* of the typical, beyond which a cell is not determined: two orders above what is
                                         left of     a motion at cells that it does not move, and below what chance hides */
static const double pairs_most = 2e8; /* multiplications for counting the cells of loose lines: some seconds */
enum { MOTIONS = 2 };

struct loose {
    struct rigid rigid; /* for drawing factors: its numbers only, all of its arrays are gone */
    uint32_t *place;    /* of each line */
    uint64_t lines;
    double *numbers[MOTIONS], most[MOTIONS];
};

const char *basis_word(enum basis basis)
{
    static const char *const words[] = {"low-rank", "smooth", "offsets", "mean"};
    assert((size_t)basis < sizeof words / sizeof words[0]);
    return words[basis];
}

static bool has_row_effects(enum fescue_offsets offsets)
{
    return offsets == FESCUE_OFFSETS_BOTH || offsets == FESCUE_OFFSETS_ROWS;
}

static bool has_column_effects(enum fescue_offsets offsets)
{
    return offsets == FESCUE_OFFSETS_BOTH || offsets == FESCUE_OFFSETS_COLUMNS;
}

static void support_count(const struct half *half, uint32_t *support)
{
    for (uint32_t i = 0; i < half->lines; i++)
        support[i] = (uint32_t)(half->start[i + 1] - half->start[i]);
}

/* ---- core and blocks --------------------------------------------------------------------------------------------- */

static fescue_status core_blocks(struct rigid *rigid, struct determined *determined)
{
    fescue_status status = FESCUE_OK;
    const struct cells *cells = rigid->cells;
    uint32_t *row_in = NULL, *column_in = NULL;
    TRY(TAKE(rigid->context, cells->rows, &row_in));
    TRY(TAKE(rigid->context, cells->columns, &column_in));
    TRY(core_trim(rigid->context, cells, rigid->row_need, rigid->column_need, row_in, column_in));
    TRY(blocks_find(rigid->context, cells, row_in, column_in, 1, determined->row_block, determined->column_block,
                    &rigid->blocks));
done:
    GIVE(rigid->context, &row_in);
    GIVE(rigid->context, &column_in);
    return status;
}

/* Lists the lines of each block. */
static fescue_status members_list(struct rigid *rigid, const struct determined *determined)
{
    fescue_status status = FESCUE_OK;
    uint64_t rows = rigid->cells->rows;
    TRY(TAKE(rigid->context, rigid->lines, &rigid->block));
    TRY(TAKE(rigid->context, rigid->lines, &rigid->member));
    TRY(TAKE(rigid->context, rigid->lines, &rigid->state));
    TRY(TAKE(rigid->context, (size_t)rigid->blocks + 2, &rigid->from));
    for (uint64_t line = 0; line < rigid->lines; line++) {
        uint32_t block = line < rows ? determined->row_block[line] : determined->column_block[line - rows];
        rigid->block[line] = block;
        rigid->state[line] = block == 0 ? LINE_OUT : LINE_OPEN;
        if (block != 0)
            rigid->from[block + 1]++;
    }
    for (uint32_t block = 1; block <= rigid->blocks; block++)
        rigid->from[block + 1] += rigid->from[block];
    for (uint64_t line = 0; line < rigid->lines; line++)
        if (rigid->block[line] != 0)
            rigid->member[rigid->from[rigid->block[line]]++] = line;
done:
    return status;
}

static fescue_status rigid_open(struct rigid *rigid, struct determined *determined)
{
    fescue_status status = FESCUE_OK;
    TRY(core_blocks(rigid, determined));
    TRY(members_list(rigid, determined));
    TRY(TAKE(rigid->context, (size_t)rigid->blocks * (rigid->rank + 1), &rigid->frame));
    TRY(TAKE(rigid->context, rigid->blocks, &rigid->frame_size));
    TRY(TAKE(rigid->context, rigid->blocks, &rigid->is_free));
done:
    return status;
}

static void rigid_close(struct rigid *rigid)
{
    GIVE(rigid->context, &rigid->block);
    GIVE(rigid->context, &rigid->member);
    GIVE(rigid->context, &rigid->from);
    GIVE(rigid->context, &rigid->frame);
    GIVE(rigid->context, &rigid->frame_size);
    GIVE(rigid->context, &rigid->is_free);
    GIVE(rigid->context, &rigid->state);
}

/* ---- loose lines ------------------------------------------------------------------------------------------------- */

static uint64_t open_count(const struct rigid *rigid)
{
    uint64_t open = 0;
    for (uint64_t line = 0; line < rigid->lines; line++)
        open += rigid->state[line] == LINE_OPEN;
    return open;
}

/* Leaves the open lines as settled, on the necessary conditions alone. */
static void rest_believe(struct rigid *rigid, struct determined *determined)
{
    for (uint64_t line = 0; line < rigid->lines; line++)
        if (rigid->state[line] == LINE_OPEN) {
            rigid->state[line] = LINE_SETTLED;
            determined->unchecked++;
        }
}

/* Of a motion, the numbers of the loose lines, by place. A line that does not move in it has zeros. */
static fescue_status motion_keep(struct loose *loose, const struct motion *motion, size_t which)
{
    fescue_status status = FESCUE_OK;
    size_t stride = loose->rigid.stride;
    TRY(TAKE(loose->rigid.context, loose->lines * stride, &loose->numbers[which]));
    loose->most[which] = moved * motion->typical;
    for (uint64_t m = 0; m < motion->lines; m++) {
        uint64_t place = loose->place[motion->line[m]];
        for (size_t k = 0; k < stride; k++)
            loose->numbers[which][(place - 1) * stride + k] = motion->numbers[m * stride + k];
    }
done:
    return status;
}

static void loose_free(fescue_context *context, struct loose **loose)
{
    if (*loose == NULL)
        return;
    GIVE(context, &(*loose)->place);
    for (size_t which = 0; which < MOTIONS; which++)
        GIVE(context, &(*loose)->numbers[which]);
    GIVE(context, loose);
}

/* The lines of the first motion are the loose ones; the second is made of them alone. */
static fescue_status loose_make(struct rigid *rigid, const struct motion *first, struct determined *determined)
{
    fescue_status status = FESCUE_OK;
    struct motion second = {0};
    TRY(null_motion(rigid, 1, &second));
    if (!second.is_found) {
        rest_believe(rigid, determined);
        goto done;
    }
    TRY(TAKE(rigid->context, 1, &determined->loose));
    struct loose *loose = determined->loose;
    loose->rigid = (struct rigid){.context = rigid->context,
                                  .cells = rigid->cells,
                                  .rank = rigid->rank,
                                  .stride = rigid->stride,
                                  .row_need = rigid->row_need,
                                  .column_need = rigid->column_need};
    TRY(TAKE(rigid->context, rigid->lines, &loose->place));
    for (uint64_t m = 0; m < first->lines; m++)
        loose->place[first->line[m]] = (uint32_t)++loose->lines;
    TRY(motion_keep(loose, first, 0));
    TRY(motion_keep(loose, &second, 1));
done:
    motion_free(rigid->context, &second);
    return status;
}

static fescue_status loose_find(struct rigid *rigid, struct determined *determined)
{
    fescue_status status = FESCUE_OK;
    struct motion first = {0};
    TRY(peel_run(rigid));
    if (!rigid_is_affordable(rigid_work(rigid)))
        TRY(thin_run(rigid));
    if (!rigid_is_affordable(rigid_work(rigid)))
        rest_believe(rigid, determined);
    if (open_count(rigid) > 0) {
        TRY(null_motion(rigid, 0, &first));
        if (!first.is_found)
            rest_believe(rigid, determined);
        else if (first.lines > 0)
            TRY(loose_make(rigid, &first, determined));
    }
done:
    motion_free(rigid->context, &first);
    return status;
}

/* ---- one cell ---------------------------------------------------------------------------------------------------- */

/* Row and column are lines of one block. */
static bool is_moved(const struct loose *loose, uint64_t row_line, uint64_t column_line, const double *row_factor)
{
    size_t stride = loose->rigid.stride;
    uint64_t row = loose->place[row_line], column = loose->place[column_line];
    double column_factor[RANK_MOST + 2];
    rigid_factor(&loose->rigid, column_line, column_factor);
    for (size_t which = 0; which < MOTIONS; which++) {
        const double *numbers = loose->numbers[which];
        double by = 0;
        for (size_t k = 0; row != 0 && k < stride; k++)
            by += numbers[(row - 1) * stride + k] * column_factor[k];
        for (size_t k = 0; column != 0 && k < stride; k++)
            by += numbers[(column - 1) * stride + k] * row_factor[k];
        if (!(fabs(by) <= loose->most[which]))
            return true;
    }
    return false;
}

static bool is_low_rank(const struct determined *determined, uint32_t row, uint32_t column)
{
    uint32_t block = determined->row_block[row];
    const struct loose *loose = determined->loose;
    uint64_t column_line = (uint64_t)determined->rows + column;
    double row_factor[RANK_MOST + 2];
    if (block == 0 || block != determined->column_block[column])
        return false;
    if (loose == NULL || (loose->place[row] == 0 && loose->place[column_line] == 0))
        return true;
    rigid_factor(&loose->rigid, row, row_factor);
    return !is_moved(loose, row, column_line, row_factor);
}

static bool has_effect(const struct determined *determined, uint32_t row, uint32_t column)
{
    return (has_row_effects(determined->offsets) && determined->row_support[row] > 0) ||
           (has_column_effects(determined->offsets) && determined->column_support[column] > 0);
}

enum basis determined_basis(const struct determined *determined, uint32_t row, uint32_t column)
{
    assert(row < determined->rows && column < determined->columns);
    if (is_low_rank(determined, row, column))
        return BASIS_LOW_RANK;
    bool has_steps = determined->smooth == TIME_ROWS;
    if (has_steps && determined->column_support[column] > 0)
        return BASIS_SMOOTH;
    if (determined->near != NULL && determined->near[column] && (has_steps || determined->row_support[row] > 0))
        return BASIS_SMOOTH;
    if (determined->smooth == TIME_COLUMNS && determined->row_support[row] > 0)
        return BASIS_SMOOTH;
    return has_effect(determined, row, column) ? BASIS_OFFSETS : BASIS_MEAN;
}

/* ---- counting ---------------------------------------------------------------------------------------------------- */

/* Lines of a block on one side: all, and the loose ones. */
struct block_lines {
    uint64_t all[2], loose[2];
};

static fescue_status blocks_measure(const struct rigid *rigid, const struct loose *loose, struct block_lines **out)
{
    fescue_status status = FESCUE_OK;
    TRY(TAKE(rigid->context, (size_t)rigid->blocks + 1, out));
    for (uint64_t line = 0; line < rigid->lines; line++) {
        size_t side = line >= rigid->cells->rows;
        (*out)[rigid->block[line]].all[side]++;
        (*out)[rigid->block[line]].loose[side] += loose != NULL && loose->place[line] != 0;
    }
done:
    return status;
}

/* Cells of the block that have a loose line. */
static double cells_loose(const struct block_lines *block)
{
    double firm = (double)(block->all[0] - block->loose[0]) * (double)(block->all[1] - block->loose[1]);
    return (double)block->all[0] * (double)block->all[1] - firm;
}

static void loose_leave(const struct rigid *rigid, struct determined *determined)
{
    uint64_t rows = determined->rows;
    for (uint64_t line = 0; line < rigid->lines; line++)
        if (determined->loose->place[line] != 0) {
            *(line < rows ? &determined->row_block[line] : &determined->column_block[line - rows]) = 0;
            rigid->block[line] = 0;
        }
    loose_free(rigid->context, &determined->loose);
}

/* Of the `count` columns (as lines), those whose cell in this row, which is loose or they are, is determined. */
static uint64_t row_count(const struct loose *loose, uint64_t row, const uint64_t *column, uint64_t count)
{
    uint64_t found = 0;
    double row_factor[RANK_MOST + 2];
    rigid_factor(&loose->rigid, row, row_factor);
    for (uint64_t k = 0; k < count; k++)
        found += !is_moved(loose, row, column[k], row_factor);
    return found;
}

/* The determined cells of the block that have a loose line. room: as many lines as the block has. */
static uint64_t pairs_count(const struct rigid *rigid, const struct loose *loose, uint32_t block, uint64_t *room)
{
    const uint64_t *line = rigid->member + rigid->from[block - 1];
    uint64_t lines = rigid->from[block] - rigid->from[block - 1], rows = 0, columns = 0, found = 0;
    while (rows < lines && line[rows] < rigid->cells->rows)
        rows++;
    for (uint64_t k = rows; k < lines; k++)
        if (loose->place[line[k]] != 0)
            room[columns++] = line[k];
    for (uint64_t k = 0; k < rows; k++) {
        bool is_loose = loose->place[line[k]] != 0;
        found += row_count(loose, line[k], is_loose ? line + rows : room, is_loose ? lines - rows : columns);
    }
    return found;
}

static fescue_status low_rank_count(const struct rigid *rigid, struct determined *determined)
{
    fescue_status status = FESCUE_OK;
    struct block_lines *blocks = NULL;
    uint64_t *room = NULL;
    double pairs = 0;
    TRY(TAKE(rigid->context, rigid->lines, &room));
    TRY(blocks_measure(rigid, determined->loose, &blocks));
    for (uint32_t b = 1; b <= rigid->blocks; b++)
        pairs += cells_loose(&blocks[b]) * (double)rigid->stride;
    if (pairs > pairs_most)
        loose_leave(rigid, determined);
    for (uint32_t b = 1; b <= rigid->blocks; b++) {
        determined->low_rank += (blocks[b].all[0] - blocks[b].loose[0]) * (blocks[b].all[1] - blocks[b].loose[1]);
        if (determined->loose != NULL && blocks[b].loose[0] + blocks[b].loose[1] > 0)
            determined->low_rank += pairs_count(rigid, determined->loose, b, room);
    }
done:
    GIVE(rigid->context, &blocks);
    GIVE(rigid->context, &room);
    return status;
}

/* ---- the whole --------------------------------------------------------------------------------------------------- */

static fescue_status low_rank_decide(fescue_context *context, const struct cells *cells, struct determined *determined)
{
    fescue_status status = FESCUE_OK;
    struct rigid rigid = {.context = context,
                          .cells = cells,
                          .rank = determined->rank,
                          .stride = determined->rank + 2,
                          .row_need = determined->rank + has_row_effects(determined->offsets),
                          .column_need = determined->rank + has_column_effects(determined->offsets),
                          .lines = (uint64_t)cells->rows + cells->columns};
    TRY(rigid_open(&rigid, determined));
    TRY(loose_find(&rigid, determined));
    TRY(low_rank_count(&rigid, determined));
done:
    rigid_close(&rigid);
    return status;
}

fescue_status determined_create(fescue_context *context, const struct cells *cells, size_t rank,
                                enum fescue_offsets offsets, struct determined *determined)
{
    assert(offsets != FESCUE_OFFSETS_AUTO && rank <= RANK_MOST);
    fescue_status status = FESCUE_OK;
    *determined = (struct determined){.rows = cells->rows, .columns = cells->columns, .rank = rank, .offsets = offsets};
    TRY(TAKE(context, cells->rows, &determined->row_block));
    TRY(TAKE(context, cells->columns, &determined->column_block));
    TRY(TAKE(context, cells->rows, &determined->row_support));
    TRY(TAKE(context, cells->columns, &determined->column_support));
    support_count(&cells->by_row, determined->row_support);
    support_count(&cells->by_column, determined->column_support);
    if (rank > 0)
        TRY(low_rank_decide(context, cells, determined));
done:
    if (status != FESCUE_OK)
        determined_free(context, determined);
    return status;
}

/* The head of a column's group, ways to it halved. */
static uint32_t group_head(uint32_t *group, uint32_t column)
{
    while (group[column] != column)
        column = group[column] = group[group[column]];
    return column;
}

fescue_status determined_take_near(fescue_context *context, const struct nearness *near, struct determined *determined)
{
    uint32_t *group = NULL;
    uint8_t *is_seen = NULL;
    fescue_status status;
    TRY(TAKE(context, near->columns, &group));
    TRY(TAKE(context, near->columns, &is_seen));
    TRY(TAKE(context, near->columns, &determined->near));
    for (uint32_t j = 0; j < near->columns; j++)
        group[j] = j;
    for (uint64_t k = 0; k < near->count; k++)
        group[group_head(group, near->high[k])] = group_head(group, near->low[k]);
    for (uint32_t j = 0; j < near->columns; j++)
        is_seen[group_head(group, j)] |= determined->column_support[j] > 0;
    for (uint64_t k = 0; k < near->count; k++) {
        bool rests = is_seen[group_head(group, near->high[k])] != 0;
        determined->near[near->high[k]] = determined->near[near->low[k]] = rests;
    }
done:
    GIVE(context, &group);
    GIVE(context, &is_seen);
    return status;
}

void determined_free(fescue_context *context, struct determined *determined)
{
    GIVE(context, &determined->row_block);
    GIVE(context, &determined->column_block);
    GIVE(context, &determined->row_support);
    GIVE(context, &determined->column_support);
    GIVE(context, &determined->near);
    loose_free(context, &determined->loose);
}
