/* SPDX-License-Identifier: MIT
 *
 * Whether being missing goes with the value. What is missing cannot be looked at, but what is beside it can.
 *
 * Lines (of a side that is not in order): Spearman's rank correlation (Spearman 1904, "The proof and measurement of
 * association between two things") of the number of cells of a line with its mean, the means of the other side taken
 * off: do lines of higher values have more cells? With n lines, t = rho sqrt((n - 2) / (1 - rho^2)), about normal.
 *
 * Holes (along the order, where it means something): for each cell that a hole follows, its rank within its sensor,
 * as a number between -1/2 and 1/2 (the score of the Wilcoxon test, 1945, "Individual comparisons by ranking methods",
 * each sensor a stratum): is the last value before a hole higher or lower than others? Sensors that fail at the same
 * place are one observation: with S_p the sum of scores at place p,
 *
 *     z = sum S_p / sqrt(sum S_p^2).
 *
 * A warning needs |t| or |z| above 4 (chance makes one in 16000) and a size that matters, rho of 0.15 or a mean score
 * of 0.05. Only what is beside the holes is judged: missing values that are odd while their neighbours are not escape.
 */
#include "judge/survey_internal.h"

#include <math.h>
#include <stdlib.h>

enum { LINES_LEAST = 20, CELLS_LEAST = 3, PLACES_LEAST = 20, TRACK_LEAST = 10 };
static const double sure = 4, rho_least = 0.15, score_least = 0.05;

struct ranked {
    double value, rank;
    uint64_t at;
};

static int ranked_compare(const void *a, const void *b)
{
    const struct ranked *x = a, *y = b;
    if (x->value != y->value)
        return x->value < y->value ? -1 : 1;
    return (x->at > y->at) - (x->at < y->at);
}

/* Sorts by value and gives ranks from 1, equal values their mean. */
static void ranks_give(struct ranked *ranked, size_t count)
{
    qsort(ranked, count, sizeof *ranked, ranked_compare);
    for (size_t from = 0, to; from < count; from = to) {
        for (to = from + 1; to < count && ranked[to].value == ranked[from].value;)
            to++;
        for (size_t k = from; k < to; k++)
            ranked[k].rank = ((double)from + (double)to + 1) / 2;
    }
}

/* ---- lines --------------------------------------------------------------------------------------------------------
 */

/* Means of the lines of `half`, those of the other side taken off (NULL: none). */
static void means_find(const struct survey *survey, const struct half *half, const double *other, double *mean)
{
    for (uint32_t line = 0; line < half->lines; line++) {
        double sum = 0, count = (double)(half->start[line + 1] - half->start[line]);
        for (uint64_t k = half->start[line]; k < half->start[line + 1]; k++)
            sum += cells_value(survey->cells, half, k) - (other == NULL ? 0 : other[half->across[k]]);
        mean[line] = count > 0 ? sum / count : 0;
    }
}

struct side {
    const struct half *half, *other;
    const char *many;
};

/* rank[line]: of the number of cells, then by means; returns the correlation, *lines of how many. */
static double rank_correlation(const struct half *half, const double *mean, struct ranked *ranked, double *rank,
                               size_t *lines)
{
    size_t count = 0;
    for (uint32_t line = 0; line < half->lines; line++) {
        uint64_t cells = half->start[line + 1] - half->start[line];
        if (cells >= CELLS_LEAST)
            ranked[count++] = (struct ranked){.value = (double)cells, .at = line};
    }
    *lines = count;
    if (count < LINES_LEAST)
        return 0;
    ranks_give(ranked, count);
    for (size_t k = 0; k < count; k++) {
        rank[ranked[k].at] = ranked[k].rank;
        ranked[k].value = mean[ranked[k].at];
    }
    ranks_give(ranked, count);
    double middle = ((double)count + 1) / 2, xy = 0, xx = 0, yy = 0;
    for (size_t k = 0; k < count; k++) {
        double x = rank[ranked[k].at] - middle, y = ranked[k].rank - middle;
        xy += x * y;
        xx += x * x;
        yy += y * y;
    }
    return xx > 0 && yy > 0 ? xy / sqrt(xx * yy) : 0;
}

static fescue_status side_test(struct survey *survey, const struct side *side)
{
    fescue_status status;
    fescue_context *context = survey->table->context;
    struct ranked *ranked = NULL;
    double *mean = NULL, *other = NULL, *rank = NULL;
    size_t lines;
    TRY(TAKE(context, side->half->lines, &ranked));
    TRY(TAKE(context, side->half->lines, &mean));
    TRY(TAKE(context, side->half->lines, &rank));
    TRY(TAKE(context, side->other->lines, &other));
    means_find(survey, side->other, NULL, other);
    means_find(survey, side->half, other, mean);
    double rho = rank_correlation(side->half, mean, ranked, rank, &lines);
    double t = fabs(rho) < 1 ? rho * sqrt(((double)lines - 2) / (1 - rho * rho)) : sure + 1;
    if (lines < LINES_LEAST || fabs(rho) < rho_least || fabs(t) < sure)
        goto done;
    survey_notice(survey, 0, NULL, NULL);
    page_add(
        survey->page,
        "Being missing goes with the value: %s of %s values have more cells (Spearman %.2f over %zu %s, t = %.1f). "
        "Hidden cells tell too good an error then.\n",
        side->many, rho > 0 ? "higher" : "lower", rho, lines, side->many, t);
done:
    GIVE(context, &ranked);
    GIVE(context, &mean);
    GIVE(context, &rank);
    GIVE(context, &other);
    return status;
}

/* ---- holes --------------------------------------------------------------------------------------------------------
 */

/* Adds the scores of a sensor's cells that a hole follows to those of their places; returns how many there are. */
static uint64_t sensor_score(const struct survey *survey, uint32_t s, struct ranked *ranked, double *sum)
{
    const struct tracks *tracks = &survey->tracks;
    uint64_t from = tracks->start[s], count = tracks->start[s + 1] - from, found = 0;
    if (count < TRACK_LEAST)
        return 0;
    for (uint64_t k = 0; k < count; k++)
        ranked[k] = (struct ranked){.value = cells_value(survey->cells, &survey->cells->by_row, tracks->cell[from + k]),
                                    .at = from + k};
    ranks_give(ranked, count);
    for (uint64_t k = 0; k < count; k++) {
        uint64_t at = ranked[k].at;
        if (at + 1 == tracks->start[s + 1] || tracks->rank[at + 1] == tracks->rank[at] + 1)
            continue;
        sum[tracks->rank[at]] += ranked[k].rank / ((double)count + 1) - 0.5;
        found++;
    }
    return found;
}

static fescue_status holes_test(struct survey *survey)
{
    fescue_status status;
    fescue_context *context = survey->table->context;
    const struct tracks *tracks = &survey->tracks;
    struct ranked *ranked = NULL;
    double *sum = NULL, total = 0, square = 0;
    uint64_t found = 0, places = 0;
    TRY(TAKE(context, tracks->places, &ranked));
    TRY(TAKE(context, tracks->places, &sum));
    for (uint32_t s = 0; s < tracks->sensors; s++)
        found += sensor_score(survey, s, ranked, sum);
    for (uint32_t p = 0; p < tracks->places; p++) {
        total += sum[p];
        square += sum[p] * sum[p];
        places += sum[p] != 0;
    }
    double z = square > 0 ? total / sqrt(square) : 0, mean = found > 0 ? total / (double)found : 0;
    if (places < PLACES_LEAST || fabs(z) < sure || fabs(mean) < score_least)
        goto done;
    survey_notice(survey, 0, NULL, NULL);
    page_add(survey->page,
             "Being missing goes with the value: the last value before a hole is %s than others of its %s (mean rank "
             "%.0f %%, Wilcoxon's test by %s, z = %.1f). Hidden cells tell too good an error then.\n",
             z > 0 ? "higher" : "lower", survey->sensor_word, 100 * (0.5 + mean), survey->places_word, z);
done:
    GIVE(context, &ranked);
    GIVE(context, &sum);
    return status;
}

fescue_status survey_missing(struct survey *survey)
{
    fescue_status status = FESCUE_OK;
    const struct cells *cells = survey->cells;
    const struct side rows = {&cells->by_row, &cells->by_column, "rows"};
    const struct side columns = {&cells->by_column, &cells->by_row, "columns"};
    if (!survey->is_ordered || survey->tracks.along_columns)
        TRY(side_test(survey, &rows));
    if (!survey->is_ordered || !survey->tracks.along_columns)
        TRY(side_test(survey, &columns));
    if (survey->is_ordered)
        TRY(holes_test(survey));
done:
    return status;
}
