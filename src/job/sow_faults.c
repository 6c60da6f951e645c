/* SPDX-License-Identifier: MIT
 *
 * Faults that real tables have, planted into a plain one on purpose, so that it can be tried who finds them.
 *
 *   stuck       a column repeats one value over an eighth of the rows or more, for at least 40 cells where there is
 * room spike       one cell is off by 30 times the spread of all duplicate   a column is a copy of another one, holes
 * and noise included orphan      five rows and four columns hang together among themselves and with nothing else late
 * a column has no cell before a row in the third quarter
 *
 * Each takes columns of its own; which ones, and which rows, depends on the seed alone. The truth is that of the table
 * without faults. The record lists what was planted, by the labels of the table.
 */
#include "job/sow_internal.h"

#include <math.h>
#include <stdio.h>

/* Bits of --faults. */
enum { FAULT_NONE = 1, FAULT_STUCK = 2, FAULT_SPIKE = 4, FAULT_DUPLICATE = 8, FAULT_ORPHAN = 16, FAULT_LATE = 32 };
enum { LEAST_ROWS = 80, LEAST_COLUMNS = 12, STUCK_CELLS = 40, SPIKE_SPREADS = 30 };

static bool has_fault(const struct sowing *sowing, unsigned fault)
{
    return (sowing->options->faults & fault) != 0;
}

/* ---- where they are ---------------------------------------------------------------------------------------------- */

/* Distinct columns by drawing without putting back (Fisher and Yates), in the places that the plan has for them. */
static fescue_status columns_draw(const struct sowing *sowing, struct random_stream *stream, struct fault_plan *plan)
{
    fescue_status status = FESCUE_OK;
    uint64_t *column = NULL, taken = 0;
    uint64_t *places[LEAST_COLUMNS] = {&plan->stuck_column, &plan->spike_column, &plan->copied_column,
                                       &plan->copy_column, &plan->late_column};
    for (size_t k = 0; k < ORPHAN_COLUMNS; k++)
        places[5 + k] = &plan->orphan_column[k];
    TRY(TAKE(sowing->context, sowing->columns, &column));
    for (uint64_t j = 0; j < sowing->columns; j++)
        column[j] = j;
    for (; taken < 5 + ORPHAN_COLUMNS; taken++) {
        uint64_t from = taken + random_below(stream, sowing->columns - taken), kept = column[from];
        column[from] = column[taken];
        *places[taken] = kept;
    }
done:
    GIVE(sowing->context, &column);
    return status;
}

static uint64_t row_between(struct random_stream *stream, uint64_t rows, double low, double high)
{
    return (uint64_t)((double)rows * (low + (high - low) * random_uniform(stream)));
}

/* The row of a cell of the column, about a share of the way down. */
static uint64_t cell_choose(const struct sowing *sowing, const double *share, uint64_t column, uint64_t from)
{
    struct holes holes;
    uint64_t row = sowing->rows;
    for (faults_open(sowing, column, share, &holes); holes.next < sowing->rows; faults_step(sowing, column, &holes)) {
        row = holes.next;
        if (row >= from)
            return row;
    }
    return row;
}

fescue_status faults_plan(struct sowing *sowing, const double *share)
{
    fescue_status status = FESCUE_OK;
    struct fault_plan *plan = &sowing->plan;
    struct random_stream stream = sow_stream(sowing, SOW_FAULTS, 0);
    const struct fescue_sow_options *options = sowing->options;
    uint64_t rows = sowing->rows;
    if ((options->faults & ~(unsigned)FAULT_NONE) == 0)
        goto done;
    if (rows < LEAST_ROWS || sowing->columns < LEAST_COLUMNS)
        return FAIL(sowing->context, FESCUE_USAGE, "--faults needs a table of at least %d rows and %d columns",
                    LEAST_ROWS, LEAST_COLUMNS);
    TRY(columns_draw(sowing, &stream, plan));
    double long_enough = fmax((double)rows / 8, STUCK_CELLS / fmax(share[plan->stuck_column], 1e-9));
    plan->orphan_row = row_between(&stream, rows, 0.5, 0.9);
    plan->late_row = row_between(&stream, rows, 0.55, 0.75);
    plan->stuck_from = cell_choose(sowing, share, plan->stuck_column, row_between(&stream, rows, 0.1, 0.4));
    plan->stuck_to = plan->stuck_from + (uint64_t)fmin(long_enough, 0.45 * (double)rows);
    plan->spike_row = cell_choose(sowing, share, plan->spike_column, row_between(&stream, rows, 0.1, 0.9));
    double effects = options->offset_scale * options->offset_scale;
    plan->spike = (random_uniform(&stream) < 0.5 ? -1 : 1) * SPIKE_SPREADS *
                  sqrt(1 + 2 * effects + options->noise * options->noise);
done:
    return status;
}

/* ---- what they do -------------------------------------------------------------------------------------------------
 */

static bool is_orphan_column(const struct sowing *sowing, uint64_t column)
{
    bool found = false;
    for (size_t k = 0; k < ORPHAN_COLUMNS; k++)
        found |= sowing->plan.orphan_column[k] == column;
    return found && has_fault(sowing, FAULT_ORPHAN);
}

/* Passes over cells that a fault takes away. */
static void cells_skip(const struct sowing *sowing, uint64_t column, struct holes *holes)
{
    const struct fault_plan *plan = &sowing->plan;
    uint64_t orphans_end = plan->orphan_row + ORPHAN_ROWS;
    while (has_fault(sowing, FAULT_LATE) && column == plan->late_column && holes->next < plan->late_row)
        holes_step(holes);
    while (has_fault(sowing, FAULT_ORPHAN) && holes->next >= plan->orphan_row && holes->next < orphans_end)
        holes_step(holes);
}

void faults_open(const struct sowing *sowing, uint64_t column, const double *share, struct holes *holes)
{
    const struct fault_plan *plan = &sowing->plan;
    uint64_t source = column;
    if (has_fault(sowing, FAULT_DUPLICATE) && column == plan->copy_column)
        source = plan->copied_column;
    holes_open(sowing, source, share[source], holes);
    if (is_orphan_column(sowing, column))
        holes->next = plan->orphan_row;
    else
        cells_skip(sowing, column, holes);
}

void faults_step(const struct sowing *sowing, uint64_t column, struct holes *holes)
{
    if (is_orphan_column(sowing, column)) {
        holes->next++;
        if (holes->next >= sowing->plan.orphan_row + ORPHAN_ROWS)
            holes->next = holes->rows;
        return;
    }
    holes_step(holes);
    cells_skip(sowing, column, holes);
}

double faults_source(const struct sowing *sowing, uint64_t *row, uint64_t *column)
{
    const struct fault_plan *plan = &sowing->plan;
    if (has_fault(sowing, FAULT_DUPLICATE) && *column == plan->copy_column)
        *column = plan->copied_column;
    if (has_fault(sowing, FAULT_STUCK) && *column == plan->stuck_column && *row >= plan->stuck_from &&
        *row < plan->stuck_to)
        *row = plan->stuck_from;
    bool is_spike = has_fault(sowing, FAULT_SPIKE) && *column == plan->spike_column && *row == plan->spike_row;
    return is_spike ? plan->spike : 0;
}

/* ---- the record ----------------------------------------------------------------------------------------------------
 */

static void fault_write(const struct sowing *sowing, struct outfile *file, unsigned fault, const char *words, ...)
    __attribute__((format(printf, 4, 5)));

static void fault_write(const struct sowing *sowing, struct outfile *file, unsigned fault, const char *words, ...)
{
    char line[512];
    va_list arguments;
    if (!has_fault(sowing, fault))
        return;
    va_start(arguments, words);
    vsnprintf(line, sizeof line, words, arguments);
    va_end(arguments);
    bool is_first = (sowing->options->faults & (fault - 1) & ~(unsigned)FAULT_NONE) == 0;
    outfile_format(file, "%s\n    {%s}", is_first ? "" : ",", line);
}

void faults_write(const struct sowing *sowing, struct outfile *file)
{
    const struct fault_plan *plan = &sowing->plan;
    const char *r = sowing->row_prefix, *c = sowing->column_prefix;
    typedef unsigned long long number;
    if ((sowing->options->faults & ~(unsigned)FAULT_NONE) == 0)
        return;
    outfile_text(file, "  \"faults\": [");
    fault_write(sowing, file, FAULT_STUCK,
                "\"kind\": \"stuck\", \"column\": \"%s%llu\", \"from\": \"%s%llu\", \"to\": \"%s%llu\"", c,
                (number)plan->stuck_column + 1, r, (number)plan->stuck_from + 1, r, (number)plan->stuck_to);
    fault_write(sowing, file, FAULT_SPIKE, "\"kind\": \"spike\", \"column\": \"%s%llu\", \"row\": \"%s%llu\"", c,
                (number)plan->spike_column + 1, r, (number)plan->spike_row + 1);
    fault_write(sowing, file, FAULT_DUPLICATE, "\"kind\": \"duplicate\", \"column\": \"%s%llu\", \"of\": \"%s%llu\"", c,
                (number)plan->copy_column + 1, c, (number)plan->copied_column + 1);
    fault_write(
        sowing, file, FAULT_ORPHAN,
        "\"kind\": \"orphan\", \"columns\": [\"%s%llu\", \"%s%llu\", \"%s%llu\", \"%s%llu\"], \"from\": \"%s%llu\", "
        "\"to\": \"%s%llu\"",
        c, (number)plan->orphan_column[0] + 1, c, (number)plan->orphan_column[1] + 1, c,
        (number)plan->orphan_column[2] + 1, c, (number)plan->orphan_column[3] + 1, r, (number)plan->orphan_row + 1, r,
        (number)plan->orphan_row + ORPHAN_ROWS);
    fault_write(sowing, file, FAULT_LATE, "\"kind\": \"late\", \"column\": \"%s%llu\", \"from\": \"%s%llu\"", c,
                (number)plan->late_column + 1, r, (number)plan->late_row + 1);
    outfile_text(file, "\n  ],\n");
}
