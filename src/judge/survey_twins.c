/* SPDX-License-Identifier: MIT
 *
 * Rows or columns that are copies of others.
 *
 * Two lines are copies when at least `same` of the cells that both have are equal, these are at least half of the
 * shorter line, and chance does not do it: with e equal cells, a chance p that two of the values are equal (the larger
 * one of the whole table and of these cells, so that lines of zeros or of few different values are not taken for
 * copies), and L lines,
 *
 *     p^e L (L-1) / 2 <= by_chance.
 *
 * Candidates are found by the least of a hash over the line's cells, position and value together: two lines agree in
 * it with the probability that is the share of their cells which are equal (Broder 1997, "On the resemblance and
 * containment of documents"). HASHES of them, each followed by a sort, and every line is compared with the two behind
 * it that have the same hash: for copies the chance to be missed is 2^-HASHES or less. O(HASHES (cells + L log L)).
 */
#include "judge/survey_internal.h"

#include <math.h>
#include <stdlib.h>
#include <string.h>

enum { HASHES = 8, BEHIND = 2, LEAST_CELLS = 5 };
static const double same = 0.98, by_chance = 0.01;

struct signature {
    uint64_t hash[2];
    uint32_t line;
};

struct twins {
    struct survey *survey;
    const struct half *half;
    const struct labels *labels;
    const char *one, *many;
    struct signature *signature;
    uint32_t *original; /* of each line, the copied line plus one; 0: none */
    double *value;      /* room for one line */
};

/* The mix of SplitMix64 (Steele, Lea, Flood 2014, "Fast splittable pseudorandom number generators"). */
static uint64_t mix(uint64_t x)
{
    x = (x ^ (x >> 30)) * UINT64_C(0xbf58476d1ce4e5b9);
    x = (x ^ (x >> 27)) * UINT64_C(0x94d049bb133111eb);
    return x ^ (x >> 31);
}

static double value_of(const struct twins *twins, uint64_t k)
{
    return cells_value(twins->survey->cells, twins->half, k);
}

static uint64_t hash_least(const struct twins *twins, uint32_t line, uint64_t which)
{
    const struct half *half = twins->half;
    uint64_t least = UINT64_MAX;
    for (uint64_t k = half->start[line]; k < half->start[line + 1]; k++) {
        double value = value_of(twins, k) + 0.0; /* -0 is 0 */
        uint64_t bits, hash;
        memcpy(&bits, &value, sizeof bits);
        hash = mix(mix(bits + which * UINT64_C(0x9e3779b97f4a7c15)) + half->across[k]);
        least = hash < least ? hash : least;
    }
    return least;
}

static int signature_compare(const void *a, const void *b)
{
    const struct signature *x = a, *y = b;
    for (size_t k = 0; k < 2; k++)
        if (x->hash[k] != y->hash[k])
            return x->hash[k] < y->hash[k] ? -1 : 1;
    return (x->line > y->line) - (x->line < y->line);
}

static int value_compare(const void *a, const void *b)
{
    const double *x = a, *y = b;
    return (*x > *y) - (*x < *y);
}

/* The chance that two of the values are equal. */
static double alike_of(double *value, uint64_t count)
{
    double pairs = 0;
    qsort(value, count, sizeof *value, value_compare);
    for (uint64_t k = 0, from = 0; k < count; k++) {
        from = value[k] == value[from] ? from : k;
        pairs += (double)(k - from);
    }
    return count > 1 ? pairs / ((double)count * (double)(count - 1) / 2) : 1;
}

static bool are_copies(struct twins *twins, uint32_t a, uint32_t b)
{
    const struct half *half = twins->half;
    uint64_t i = half->start[a], j = half->start[b], common = 0, equal = 0;
    uint64_t of_a = half->start[a + 1] - i, of_b = half->start[b + 1] - j, shorter = of_a < of_b ? of_a : of_b;
    while (i < half->start[a + 1] && j < half->start[b + 1]) {
        if (half->across[i] == half->across[j]) {
            twins->value[common++] = value_of(twins, i);
            equal += value_of(twins, i) == value_of(twins, j);
        }
        uint32_t at = half->across[i];
        i += at <= half->across[j];
        j += half->across[j] <= at;
    }
    if (common < LEAST_CELLS || 2 * common < shorter || (double)equal < same * (double)common)
        return false;
    double alike = fmax(fmax(twins->survey->alike, alike_of(twins->value, common)), 1e-9), lines = half->lines;
    return (double)equal * log(alike) + log(lines * (lines - 1) / 2) <= log(by_chance);
}

static void neighbours_compare(struct twins *twins, uint32_t count)
{
    for (uint32_t k = 0; k < count; k++)
        for (uint32_t n = k + 1; n <= k + BEHIND && n < count; n++) {
            const struct signature *x = &twins->signature[k], *y = &twins->signature[n];
            if (x->hash[0] != y->hash[0])
                break;
            uint32_t first = x->line < y->line ? x->line : y->line, second = x->line < y->line ? y->line : x->line;
            if (twins->original[second] == 0 && are_copies(twins, first, second))
                twins->original[second] = first + 1;
        }
}

static void twins_find(struct twins *twins)
{
    const struct half *half = twins->half;
    for (uint64_t which = 0; which < HASHES; which++) {
        uint32_t count = 0;
        for (uint32_t line = 0; line < half->lines; line++)
            if (half->start[line + 1] - half->start[line] >= LEAST_CELLS)
                twins->signature[count++] =
                    (struct signature){{hash_least(twins, line, which), hash_least(twins, line, which + HASHES)}, line};
        qsort(twins->signature, count, sizeof *twins->signature, signature_compare);
        neighbours_compare(twins, count);
    }
}

static void twins_tell(struct twins *twins)
{
    struct survey *survey = twins->survey;
    uint64_t found = 0, told = 0;
    for (uint32_t line = 0; line < twins->half->lines; line++)
        found += twins->original[line] != 0;
    if (found == 0)
        return;
    survey_notice(survey, found, twins->one, twins->many);
    page_add(survey->page, found == 1 ? " is a copy of another one: " : " are copies of others: ");
    for (uint32_t line = 0; line < twins->half->lines && told < ODD_MOST; line++) {
        if (twins->original[line] == 0)
            continue;
        survey_label(survey, twins->labels, line, told++ == 0 ? "" : ", ");
        survey_label(survey, twins->labels, twins->original[line] - 1, " (of ");
        page_add(survey->page, ")");
    }
    survey_more(survey, found);
}

static uint64_t line_longest(const struct half *half)
{
    uint64_t most = 0;
    for (uint32_t line = 0; line < half->lines; line++)
        most = half->start[line + 1] - half->start[line] > most ? half->start[line + 1] - half->start[line] : most;
    return most;
}

static fescue_status side_run(struct twins *twins)
{
    fescue_context *context = twins->survey->table->context;
    fescue_status status;
    TRY(TAKE(context, twins->half->lines, &twins->signature));
    TRY(TAKE(context, twins->half->lines, &twins->original));
    TRY(TAKE(context, line_longest(twins->half), &twins->value));
    twins_find(twins);
    twins_tell(twins);
done:
    GIVE(context, &twins->signature);
    GIVE(context, &twins->original);
    GIVE(context, &twins->value);
    return status;
}

fescue_status survey_twins(struct survey *survey)
{
    const fescue_table *table = survey->table;
    struct twins rows = {survey, &table->cells.by_row, &table->row_labels, "row", "rows", NULL, NULL, NULL};
    struct twins columns = {survey, &table->cells.by_column, &table->column_labels, "column", "columns", NULL, NULL,
                            NULL};
    fescue_status status = side_run(&rows);
    return status == FESCUE_OK ? side_run(&columns) : status;
}
