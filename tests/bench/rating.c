/* SPDX-License-Identifier: MIT
 *
 * A sown table: the product of random factors of rank 16, cells of size one, and noise of size one half.
 *
 * 100 000 x 20 000 for 1e7 cells; rows go with the number of cells, columns with its root, so that a row has some 100
 * cells whatever the size (1e8: 480 000 x 17 800). Rows have 20 to 180 % of the mean number of cells; columns are
 * popular as u^-2/3, so that one in a hundred holds a fifth of the cells, and stand in no order. One cell in ten is
 * hidden.
 */
#include "rating.h"

#include <math.h>
#include <stdlib.h>

#define NOISE 0.5

struct sower {
    struct rating *rating;
    struct triplet_list list;
    uint32_t rows, columns;
    float *left, *right;
    uint32_t *last_row; /* of each column, from 1 */
    uint64_t capacity;
};

static float *factor_draw(uint32_t lines, uint32_t side)
{
    float *factor = bench_take((size_t)lines * RATING_RANK, sizeof *factor);
    struct random_stream stream = random_open(7, RANDOM_TEST, side);
    for (size_t k = 0; k < (size_t)lines * RATING_RANK; k++)
        factor[k] = (float)(random_normal(&stream) / sqrt(sqrt(RATING_RANK)));
    return factor;
}

static void cell_sow(struct sower *sower, struct random_stream *stream, uint32_t row, uint32_t column)
{
    struct rating *rating = sower->rating;
    double value = NOISE * random_normal(stream);
    for (size_t k = 0; k < RATING_RANK; k++)
        value +=
            (double)sower->left[(size_t)row * RATING_RANK + k] * (double)sower->right[(size_t)column * RATING_RANK + k];
    if (random_below(stream, 10) != 0 || rating->hidden == sower->capacity) {
        bench_check(rating->context, triplets_append(rating->context, &sower->list, row, column, value));
        return;
    }
    rating->row[rating->hidden] = row;
    rating->column[rating->hidden] = column;
    rating->value[rating->hidden++] = value;
}

static void row_sow(struct sower *sower, uint32_t row, double mean)
{
    struct random_stream stream = random_open(8, RANDOM_TEST, row);
    uint64_t wanted = (uint64_t)((0.2 + 1.6 * random_uniform(&stream)) * mean + 0.5);
    for (uint64_t c = 0; c < wanted; c++) {
        double u = random_uniform(&stream);
        /* a step that has no factor in common with any number of columns used */
        uint32_t column = (uint32_t)((uint64_t)(u * u * u * sower->columns) * 7919 % sower->columns);
        if (sower->last_row[column] == row + 1)
            continue; /* seen already: a few cells fewer */
        sower->last_row[column] = row + 1;
        cell_sow(sower, &stream, row, column);
    }
}

void rating_sow(uint64_t cells, enum fescue_precision precision, struct rating *rating)
{
    *rating = (struct rating){0};
    if (fescue_context_create(NULL, &rating->context) != FESCUE_OK)
        exit(1);
    struct sower sower = {.rating = rating, .list = {.precision = precision}, .capacity = cells / 8};
    sower.rows = cells >= 100000000 ? 480000 : (uint32_t)(cells / 100);
    sower.columns = cells >= 100000000 ? 17800 : (uint32_t)(20000 * sqrt((double)cells / 1e7));
    sower.left = factor_draw(sower.rows, 0);
    sower.right = factor_draw(sower.columns, 1);
    sower.last_row = bench_take(sower.columns, sizeof *sower.last_row);
    rating->row = bench_take(sower.capacity, sizeof *rating->row);
    rating->column = bench_take(sower.capacity, sizeof *rating->column);
    rating->value = bench_take(sower.capacity, sizeof *rating->value);
    for (uint32_t row = 0; row < sower.rows; row++)
        row_sow(&sower, row, (double)cells / 0.9 / sower.rows);
    bench_check(rating->context, cells_build(rating->context, sower.rows, sower.columns, &sower.list, &rating->cells));
    triplets_free(rating->context, &sower.list);
    free(sower.left);
    free(sower.right);
    free(sower.last_row);
}

void rating_free(struct rating *rating)
{
    cells_free(rating->context, &rating->cells);
    fescue_context_destroy(&rating->context);
    free(rating->row);
    free(rating->column);
    free(rating->value);
}

void rating_pack(const struct rating *rating, const char *path)
{
    const struct cells *cells = &rating->cells;
    const struct half *half = &cells->by_row;
    fescue_context *context = rating->context;
    fescue_table *table;
    uint32_t *row = bench_take(cells->count, sizeof *row);
    double *value = bench_take(cells->count, sizeof *value);
    for (uint32_t i = 0; i < half->lines; i++)
        for (uint64_t k = half->start[i]; k < half->start[i + 1]; k++) {
            row[k] = i;
            value[k] = cells_value(cells, half, k);
        }
    bench_check(context, table_from_triplets(context, cells->rows, cells->columns, cells->count, row, half->across,
                                             value, cells->precision, &table));
    free(row);
    free(value);
    bench_check(context, table_pack(table, path));
    table_destroy(&table);
}
