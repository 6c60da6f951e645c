/* SPDX-License-Identifier: MIT
 *
 * Drift: tonight's figures beside the job's own history.
 *
 * A figure x is flagged when it leaves its usual range, of which the last HISTORY_MOST done runs tell, once there are
 * HISTORY_LEAST:
 *
 *     |x - median| > wide * 1.4826 * MAD + least * |median| + floor,     MAD = median |x_i - median|
 *
 * Median and MAD, since a bad night among the few must not widen the range for the next (Hampel 1974, "The influence
 * curve and its role in robust estimation"); 1.4826 makes the MAD a standard deviation for normal figures, and `wide`
 * lets one of several thousand such nights through. `least` and `floor` keep a figure that never moved from being
 * flagged for its last digits.
 *
 * The subspace is that of the table's shorter side, a point on the Grassmann manifold: its leading min(r, r') columns
 * and those of the last run are joined by a geodesic, whose speeds are the principal angles (manifold.h). The greatest
 * is a figure like others; the distance goes to the ledger. Compared only while the lines of that side are the same, by
 * their number and the checksum of their labels. The last subspace of each job lies in the ledger.
 */
#include "night/night_internal.h"

#include <inttypes.h>
#include <math.h>
#include <stdio.h>
#include <stdlib.h>
#include <string.h>

enum { HISTORY_LEAST = 5, HISTORY_MOST = 60 };
static const double wide = 4, least = 0.02;
/* Below these a change means nothing to anybody: half a rank, a cell in a thousand, a degree. */
static const double figure_floors[FIGURES] = {[FIGURE_MISSING] = 1e-3, [FIGURE_RANK] = 0.5, [FIGURE_ANGLE] = 0.0175};

/* ---- figures -------------------------------------------------------------------------------------------------------
 */

struct past {
    double value[HISTORY_MOST];
    size_t count;
};

static void past_take(void *data, sqlite3_stmt *row)
{
    struct past *past = data;
    if (past->count < HISTORY_MOST)
        past->value[past->count++] = sqlite3_column_double(row, 0);
}

static int real_compare(const void *a, const void *b)
{
    double x = *(const double *)a, y = *(const double *)b;
    return (x > y) - (x < y);
}

/* Sorts. */
static double median_of(double *value, size_t count)
{
    qsort(value, count, sizeof *value, real_compare);
    return count % 2 == 1 ? value[count / 2] : 0.5 * (value[count / 2 - 1] + value[count / 2]);
}

bool drift_is_unusual(double value, double floor, double *past, size_t count, double range[2])
{
    double away[HISTORY_MOST];
    if (count < HISTORY_LEAST || count > HISTORY_MOST || !isfinite(value))
        return false;
    double median = median_of(past, count);
    for (size_t k = 0; k < count; k++)
        away[k] = fabs(past[k] - median);
    double width = wide * 1.4826 * median_of(away, count) + least * fabs(median) + floor;
    range[0] = median - width;
    range[1] = median + width;
    return value < range[0] || value > range[1];
}

static fescue_status figure_judge(struct fescue_night *night, struct task *task, enum figure figure)
{
    struct past past = {.count = 0};
    char sql[256], now[32], from[32], to[32];
    double range[2], value = task->outcome.figure[figure];
    snprintf(sql, sizeof sql,
             "SELECT %s FROM attempt WHERE job = ? AND state = 'done' AND number <> ? AND %s IS NOT NULL"
             " ORDER BY number DESC LIMIT %d",
             figure_columns[figure], figure_columns[figure], HISTORY_MOST);
    fescue_status status = ledger_ask(&night->ledger, past_take, &past, sql, "ti", task->job->name, task->attempt);
    if (status != FESCUE_OK || !drift_is_unusual(value, figure_floors[figure], past.value, past.count, range))
        return status;
    size_t used = strlen(task->flags);
    snprintf(task->flags + used, sizeof task->flags - used, "%s%s %s, usually %s to %s", used > 0 ? "; " : "",
             figure_words[figure], real_to_words(value, 4, now), real_to_words(range[0], 4, from),
             real_to_words(range[1], 4, to));
    return FESCUE_OK;
}

/* ---- the subspace --------------------------------------------------------------------------------------------------
 */

struct subspace {
    fescue_context *context;
    size_t lines, rank;
    double *numbers; /* row by row; owned */
    bool by_rows;
    char labels[WORD_SIZE];
    fescue_status status;
};

static void subspace_take(void *data, sqlite3_stmt *row)
{
    struct subspace *last = data;
    const char *labels = (const char *)sqlite3_column_text(row, 1);
    last->by_rows = sqlite3_column_int64(row, 0) != 0;
    snprintf(last->labels, sizeof last->labels, "%s", labels == NULL ? "" : labels);
    size_t lines = (size_t)sqlite3_column_int64(row, 2), rank = (size_t)sqlite3_column_int64(row, 3), count;
    size_t bytes = (size_t)sqlite3_column_bytes(row, 4);
    if (!size_product(lines, rank, &count) || bytes / sizeof(double) != count || bytes % sizeof(double) != 0)
        return;
    last->status = TAKE(last->context, count, &last->numbers);
    if (last->status != FESCUE_OK)
        return;
    memcpy(last->numbers, sqlite3_column_blob(row, 4), bytes);
    last->lines = lines;
    last->rank = rank;
}

/* From left.mtx or right.mtx in the output; numbers stay NULL when it was not written or the rank is 0. */
static fescue_status subspace_read(fescue_context *context, const struct task *task, struct subspace *now)
{
    struct fescue_options options;
    fescue_table *table = NULL;
    char *path = NULL;
    fescue_status status;
    fescue_options_standard(&options);
    options.threads = 1; /* a process that forks has no threads */
    now->by_rows = task->outcome.by_rows;
    snprintf(now->labels, sizeof now->labels, "%s", task->outcome.labels);
    TRY(text_join(context, &path, task->job->output, now->by_rows ? "/left.mtx" : "/right.mtx", NULL));
    if (fescue_table_read(context, path, &options, &table) != FESCUE_OK) {
        fescue_failure_clear(context);
        goto done;
    }
    const struct cells *cells = &table->cells;
    if (cells->count == (uint64_t)cells->rows * cells->columns) {
        TRY(TAKE(context, cells->count, &now->numbers));
        for (uint64_t k = 0; k < cells->count; k++)
            now->numbers[k] = cells_value(cells, &cells->by_row, k);
        now->lines = cells->rows;
        now->rank = cells->columns;
    }
done:
    fescue_table_destroy(&table);
    GIVE(context, &path);
    return status;
}

static void subspace_copy(const struct subspace *from, struct matrix to)
{
    for (size_t i = 0; i < to.rows; i++)
        for (size_t k = 0; k < to.columns; k++)
            MATRIX_AT(to, i, k) = from->numbers[i * from->rank + k];
}

/* Greatest principal angle and geodesic distance. */
static fescue_status subspaces_compare(fescue_context *context, const struct subspace *last, const struct subspace *now,
                                       struct outcome *outcome)
{
    size_t lines = now->lines, rank = now->rank < last->rank ? now->rank : last->rank;
    struct arena arena = {0};
    fescue_status status;
    double most = 0, square = 0;
    matrix_reserve(&arena, lines, rank);
    matrix_reserve(&arena, lines, rank);
    geodesic_reserve(&arena, lines, rank);
    grassmann_reserve(&arena, lines, rank);
    TRY(arena_open(context, &arena));
    struct matrix from = matrix_carve(&arena, lines, rank), to = matrix_carve(&arena, lines, rank);
    struct grassmann_geodesic geodesic = geodesic_carve(&arena, lines, rank);
    struct grassmann_work work = grassmann_carve(context, &arena, lines, rank);
    subspace_copy(last, from);
    subspace_copy(now, to);
    TRY(geodesic_join(&work, from, to, &geodesic));
    for (size_t k = 0; k < rank; k++) {
        most = fmax(most, geodesic.speed[k]);
        square += geodesic.speed[k] * geodesic.speed[k];
    }
    outcome->figure[FIGURE_ANGLE] = most;
    outcome->distance = sqrt(square);
done:
    arena_close(context, &arena);
    return status;
}

static fescue_status subspace_keep(struct ledger *ledger, const char *job, const struct subspace *now)
{
    static const char sql[] = "INSERT OR REPLACE INTO basis (job, by_rows, labels, lines, rank, numbers)"
                              " VALUES (?, ?, ?, ?, ?, ?)";
    return ledger_do(ledger, sql, "titiib", job, (int64_t)now->by_rows, now->labels, (int64_t)now->lines,
                     (int64_t)now->rank, now->numbers, (int64_t)(now->lines * now->rank * sizeof(double)));
}

static fescue_status subspace_judge(struct fescue_night *night, struct task *task)
{
    fescue_context *context = night->context;
    struct subspace last = {.context = context}, now = {.context = context};
    fescue_status status;
    TRY(subspace_read(context, task, &now));
    if (now.numbers == NULL)
        goto done;
    TRY(ledger_ask(&night->ledger, subspace_take, &last,
                   "SELECT by_rows, labels, lines, rank, numbers FROM basis WHERE job = ?", "t", task->job->name));
    TRY(last.status);
    bool is_same = last.numbers != NULL && last.lines == now.lines && last.by_rows == now.by_rows &&
                   strcmp(last.labels, now.labels) == 0;
    if (is_same)
        TRY(subspaces_compare(context, &last, &now, &task->outcome));
    TRY(subspace_keep(&night->ledger, task->job->name, &now));
done:
    GIVE(context, &last.numbers);
    GIVE(context, &now.numbers);
    return status;
}

fescue_status drift_judge(struct fescue_night *night, struct task *task)
{
    fescue_status status;
    TRY(subspace_judge(night, task));
    task->flags[0] = '\0';
    for (size_t figure = 0; figure < FIGURES; figure++)
        TRY(figure_judge(night, task, (enum figure)figure));
done:
    return status;
}
