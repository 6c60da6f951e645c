/* SPDX-License-Identifier: MIT
 *
 * The observed values: least, median, mean, greatest, how many decimals they carry, and whether they look like scores
 * on a closed scale (few different values, each seen often), for which bounds are worth giving.
 *
 * Decimals, different values and the chance that two cells have the same value are taken from at most SAMPLE_MOST
 * cells, spread evenly over the table.
 */
#include "judge/survey_internal.h"

#include <stdlib.h>
#include <string.h>

enum {
    SAMPLE_MOST = 100000, /* a text form costs some 100 ns: a hundredth of a second */
    SCALE_MOST = 50,      /* different values of a closed scale; 0 to 10 in fifths has 51 */
    SCALE_TIMES = 20      /* and each seen this often on average, else the table is small rather than the scale */
};

static double value_at(const void *data, uint64_t k)
{
    const struct cells *cells = data;
    return cells_value(cells, &cells->by_row, k);
}

static double value_median(const struct cells *cells)
{
    uint64_t middle = cells->count / 2;
    double upper = order_pick(value_at, cells, cells->count, middle);
    if (cells->count % 2 == 1)
        return upper;
    double lower = order_pick(value_at, cells, cells->count, middle - 1);
    return lower + (upper - lower) / 2;
}

/* Digits behind the point of the shortest text; -1 when it needs an exponent. */
static int value_decimals(double value, enum fescue_precision precision)
{
    char digits[32];
    size_t length = real_to_text(value, precision, digits);
    const char *point = strchr(digits, '.');
    if (strchr(digits, 'e') != NULL)
        return -1;
    return point == NULL ? 0 : (int)(length - (size_t)(point - digits) - 1);
}

struct sample {
    int decimals; /* the most; -1: some need an exponent */
    size_t different;
    double value[SCALE_MOST + 1];
};

static void sample_learn(struct sample *sample, double value)
{
    for (size_t k = 0; k < sample->different; k++)
        if (sample->value[k] == value)
            return;
    if (sample->different <= SCALE_MOST)
        sample->value[sample->different++] = value;
}

static void sample_take(const struct cells *cells, struct sample *sample)
{
    uint64_t step = cells->count / SAMPLE_MOST + 1;
    for (uint64_t k = 0; k < cells->count; k += step) {
        double value = value_at(cells, k);
        int decimals = value_decimals(value, cells->precision);
        if (sample->decimals >= 0)
            sample->decimals = decimals < 0 || decimals > sample->decimals ? decimals : sample->decimals;
        if (sample->different <= SCALE_MOST)
            sample_learn(sample, value);
    }
}

static void decimals_tell(struct survey *survey, const struct sample *sample)
{
    enum { MEASURED_MOST = 9 }; /* more digits than that are computed, and their number says nothing */
    if (sample->decimals == 0)
        page_add(survey->page, ", whole numbers");
    else if (sample->decimals > 0 && sample->decimals <= MEASURED_MOST)
        page_add(survey->page, ", with up to %d %s", sample->decimals, sample->decimals == 1 ? "decimal" : "decimals");
    if (sample->different <= SCALE_MOST)
        page_add(survey->page, ", %zu different", sample->different);
}

static int value_compare(const void *a, const void *b)
{
    const double *x = a, *y = b;
    return (*x > *y) - (*x < *y);
}

/* Pairs of equal values among all pairs of the sample. */
static fescue_status alike_find(struct survey *survey)
{
    fescue_status status = FESCUE_OK;
    const struct cells *cells = survey->cells;
    uint64_t step = cells->count / SAMPLE_MOST + 1, count = 0;
    double *value = NULL, pairs = 0;
    TRY(TAKE(survey->table->context, cells->count / step + 1, &value));
    for (uint64_t k = 0; k < cells->count; k += step)
        value[count++] = value_at(cells, k);
    qsort(value, count, sizeof *value, value_compare);
    for (uint64_t k = 0, from = 0; k < count; k++) {
        from = value[k] == value[from] ? from : k;
        pairs += (double)(k - from); /* with the equal ones before it */
    }
    survey->alike = count > 1 ? pairs / ((double)count * (double)(count - 1) / 2) : 0;
done:
    GIVE(survey->table->context, &value);
    return status;
}

fescue_status survey_values(struct survey *survey)
{
    const struct cells *cells = survey->cells;
    struct sample sample = {0};
    double mean = 0;
    survey->low = survey->high = value_at(cells, 0);
    for (uint64_t k = 0; k < cells->count; k++) {
        double value = value_at(cells, k);
        survey->low = value < survey->low ? value : survey->low;
        survey->high = value > survey->high ? value : survey->high;
        mean += value / (double)cells->count;
    }
    sample_take(cells, &sample);
    survey->is_scale = sample.different > 1 && sample.different <= SCALE_MOST &&
                       cells->count >= (uint64_t)SCALE_TIMES * sample.different;
    page_add(survey->page, "Values: least %.6g, median %.6g, mean %.6g, greatest %.6g", survey->low,
             value_median(cells), mean, survey->high);
    decimals_tell(survey, &sample);
    page_add(survey->page, ".\n");
    return alike_find(survey);
}
