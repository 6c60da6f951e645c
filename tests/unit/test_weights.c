/* SPDX-License-Identifier: MIT
 *
 * Weights of cells, rows and columns: where they come from, that they follow their cells, and what is refused.
 */
#include "support_reader.h"
#include "support_table.h"
#include "table/table_internal.h"

#include <errno.h>
#include <math.h>
#include <stdio.h>
#include <stdlib.h>
#include <string.h>

/* In row order, and the same weight for the same cell in the columns. */
static void weights_are(const struct cells *cells, const double *weight)
{
    for (uint64_t k = 0; k < cells->count; k++)
        assert_close(cells->by_row.weight[k], weight[k], 1e-6 * weight[k]);
    for (uint32_t i = 0; i < cells->rows; i++)
        for (uint64_t k = cells->by_row.start[i]; k < cells->by_row.start[i + 1]; k++) {
            uint32_t j = cells->by_row.across[k];
            uint64_t at = cells->by_column.start[j];
            while (cells->by_column.across[at] != i)
                at++;
            assert_close(cells->by_column.weight[at], cells->by_row.weight[k], 0);
        }
}

static void a_fourth_field_is_a_weight(void **state)
{
    struct bench *bench = bench_of(state);
    fescue_table *table = text_read(bench, "b,y,1,1\na,x,2,3\nb,x,4,2\na,z,NA,what\na,y,5,2\n", NULL);
    assert_int_equal(table->look.shape, SHAPE_LONG);
    table_check(table, "b|y|1\nb|x|4\na|y|5\na|x|2\n");
    weights_are(&table->cells, (const double[]){0.5, 1, 1, 1.5});
    assert_true(table->weights.of_cells);
    assert_close(table->weights.least, 0.5, 1e-12);
    assert_close(table->weights.most, 1.5, 1e-12);
    table_destroy(&table);
}

static void a_header_says_what_it_is(void **state)
{
    struct bench *bench = bench_of(state);
    static const char *const texts[] = {"r;c;v;SD\na;x;1;1\na;y;2;0,5\nb;x;3;\"0,5\"\n",
                                        "r,c,v,weight\na,x,1,1\na,y,2,4\nb,x,3,4\n",
                                        "r,c,v,Weights\na,x,1,10\na,y,2,40\nb,x,3,4e1\n"};
    for (size_t k = 0; k < sizeof texts / sizeof texts[0]; k++) {
        fescue_table *table = text_read(bench, texts[k], NULL);
        assert_int_equal(table->look.shape, SHAPE_LONG);
        weights_are(&table->cells, (const double[]){1 / 3.0, 4 / 3.0, 4 / 3.0});
        table_destroy(&table);
    }
}

static void merged_cells_have_a_weight(void **state)
{
    struct bench *bench = bench_of(state);
    const struct table_reading mean = {.duplicates = FESCUE_DUPLICATES_MEAN},
                               last = {.duplicates = FESCUE_DUPLICATES_LAST};
    fescue_table *table = text_read(bench, "a,x,1,1\nb,x,1,1\na,x,2,3\n", &mean);
    weights_are(&table->cells, (const double[]){4 / 3.0, 2 / 3.0});
    table_destroy(&table);
    table = text_read(bench, "a,x,1,1\nb,x,1,1\na,x,2,3\n", &last);
    weights_are(&table->cells, (const double[]){1.5, 0.5});
    table_destroy(&table);
}

static void weights_in_long_text_that_are_refused(void **state)
{
    struct bench *bench = bench_of(state);
    static const struct {
        const char *text, *sentence;
    } cases[] = {
        {"a,x,1,1\nb,x,1,0\n", "line 2: the weight '0' is not positive; a positive number was expected"},
        {"a,x,1,1\nb,x,1,-2\n", "line 2: the weight '-2' is not positive; a positive number was expected"},
        {"a,x,1,1\nb,x,1,nan\n", "line 2: the weight 'nan' is not a number; a positive number was expected"},
        {"a,x,1,1\nb,x,1,\n", "line 2: the weight '' is not a number; a positive number was expected"},
        {"a,x,1,1\nb,x,1,1e999\n", "line 2: the weight '1e999' is not finite; a positive number was expected"},
        {"a,x,1,1\nb,x,1,1e13\n",
         "line 2: the weight '1e13' is out of range; a number from 1e-12 to 1e12 was expected"},
        {"r,c,v,sd\na,x,1,1\nb,x,1,1e-7\n",
         "line 3: the standard deviation '1e-7' is out of range; a number from 1e-6 to 1e6 was expected"},
        {"r,c,v,flag\na,x,1,1\nb,x,1,2\n", "line 1: the fourth column is called 'flag'; 'weight' or 'sd' was expected"},
        {"a,x,1,1\nb,x,1\n", "line 2: 3 fields were found, row, column, value and weight were expected"},
    };
    for (size_t k = 0; k < sizeof cases / sizeof cases[0]; k++)
        text_refused(bench, cases[k].text, &(const struct table_reading){.format = FESCUE_FORMAT_LONG},
                     cases[k].sentence);
}

/* ---- rows and columns -----------------------------------------------------------------------------------------------
 */

static const char wide[] = "t,x,y\na,1,2\nb,,3\nc,4,5\n";

static fescue_status weigh(struct bench *bench, fescue_table *table, const char *rows, const char *columns)
{
    char row_path[PATH_SIZE], column_path[PATH_SIZE];
    if (rows != NULL)
        file_put_text(path_in(bench->folder, "rows", row_path), rows);
    if (columns != NULL)
        file_put_text(path_in(bench->folder, "columns", column_path), columns);
    return table_weigh(table, rows != NULL ? row_path : NULL, columns != NULL ? column_path : NULL);
}

static void rows_and_columns_multiply(void **state)
{
    struct bench *bench = bench_of(state);
    const struct table_reading as_wide = {.format = FESCUE_FORMAT_WIDE};
    fescue_table *table = text_read(bench, wide, &as_wide);
    assert_status(bench->context, weigh(bench, table, "c,1\na,2\nb,5\n", "station;sd\ny;1\nx;0,5\n"), FESCUE_OK);
    const double weight[] = {8, 2, 5, 4, 1}; /* mean 4 */
    double scaled[5];
    for (int k = 0; k < 5; k++)
        scaled[k] = weight[k] / 4;
    weights_are(&table->cells, scaled);
    assert_non_null(strstr(table->weights.rows, "rows"));
    assert_non_null(strstr(table->weights.columns, "columns"));
    table_destroy(&table);
    table = text_read(bench, wide, &as_wide);
    assert_status(bench->context, weigh(bench, table, NULL, NULL), FESCUE_OK);
    assert_null(table->cells.by_row.weight);
    table_destroy(&table);
}

static void an_array_of_the_matrix_market(void **state)
{
    struct bench *bench = bench_of(state);
    static const char *const arrays[] = {"%%MatrixMarket matrix array real general\n3 1\n2\n4\n1\n",
                                         "%%MatrixMarket matrix array real general\n1 3\n2\n4\n1\n", "1,2\n2,4\n3,1\n"};
    for (size_t k = 0; k < 3; k++) {
        fescue_table *table =
            text_read(bench, "%%MatrixMarket matrix coordinate real general\n3 2 3\n1 1 1\n2 2 1\n3 1 1\n", NULL);
        assert_status(bench->context, weigh(bench, table, arrays[k], NULL), FESCUE_OK);
        weights_are(&table->cells, (const double[]){6 / 7.0, 12 / 7.0, 3 / 7.0});
        table_destroy(&table);
    }
}

static void weights_that_are_alike_are_none(void **state)
{
    struct bench *bench = bench_of(state);
    fescue_table *table = text_read(bench, "r,c,v,weight\na,x,1,3\nb,x,2,3\na,y,3,3\n", NULL);
    assert_null(table->cells.by_row.weight);
    assert_null(table->cells.by_column.weight);
    assert_true(table->weights.of_cells);
    assert_close(table->weights.least, 1, 0);
    assert_close(table->weights.most, 1, 0);
    table_destroy(&table);
    table = text_read(bench, "r,c,v,weight\na,x,1,1\nb,x,2,2\na,y,3,1\n", NULL);
    weights_are(&table->cells, (const double[]){0.75, 0.75, 1.5});
    assert_status(bench->context, weigh(bench, table, "a,4\nb,2\n", NULL), FESCUE_OK); /* times those of the cells */
    assert_null(table->cells.by_row.weight);
    assert_null(table->cells.by_column.weight);
    table_destroy(&table);
}

static void files_of_weights_that_are_refused(void **state)
{
    struct bench *bench = bench_of(state);
    static const struct {
        const char *text, *sentence;
    } cases[] = {
        {"a,1\nb,1\nd,1\n", "/rows: line 3: 'd' is no row of the table"},
        {"a,1\nb,1\na,1\n", "/rows: line 3: the row 'a' has its weight already"},
        {"a,1\nc,1\n", "/rows: row 'b' has no weight"},
        {"a,1\nb,0\nc,1\n", "/rows: line 2: the weight '0' of row 'b' is not positive"},
        {"well,sd\na,1\nb,-1\nc,1\n", "/rows: line 3: the standard deviation '-1' of row 'b' is not positive"},
        {"a,1\nb,x\nc,1\n", "/rows: line 2: the weight 'x' of row 'b' is not a number"},
        {"a,1\nb,\nc,1\n", "/rows: line 2: the weight '' of row 'b' is not a number"},
        {"a,1\nb,inf\nc,1\n", "/rows: line 2: the weight 'inf' of row 'b' is not a number"},
        {"a,1\nb,1e400\nc,1\n", "/rows: line 2: the weight '1e400' of row 'b' is not finite"},
        {"well,depth\na,1\n", "/rows: line 1: 'depth' was found; a number, or the title 'weight' or 'sd', was"},
        {"a,1,1\nb,1,1\n", "/rows: line 1: 3 fields were found, label and weight were expected"},
        {"a\nb\n", "/rows: line 1: no comma, semicolon or tab was found"},
        {"", "/rows: "},
        {"%%MatrixMarket matrix array real general\n2 1\n1\n1\n", "/rows: 2 by 1 entries were found, an array of 3"},
        {"%%MatrixMarket matrix array real general\n3 1\n1\n-1\n1\n",
         "/rows: entry 2, the weight of a row, is not pos"},
        {"%%MatrixMarket matrix array real general\n3 1\n1\nnan\n1\n", "/rows: row 'b' has no weight"},
        {"%%MatrixMarket matrix coordinate real general\n3 1 3\n1 1 1\n2 1 1\n3 1 1\n", "/rows: 3 by 1 entries"},
    };
    for (size_t k = 0; k < sizeof cases / sizeof cases[0]; k++) {
        fescue_table *table = text_read(bench, wide, &(const struct table_reading){.format = FESCUE_FORMAT_WIDE});
        assert_status(bench->context, weigh(bench, table, cases[k].text, NULL), FESCUE_BAD_DATA);
        if (strstr(fescue_failure_text(bench->context), cases[k].sentence) == NULL)
            fail_msg("%s", fescue_failure_text(bench->context));
        fescue_failure_clear(bench->context);
        table_destroy(&table);
    }
    fescue_table *table = text_read(bench, wide, &(const struct table_reading){.format = FESCUE_FORMAT_WIDE});
    assert_status(bench->context, table_weigh(table, NULL, "no-such-file"), FESCUE_NO_INPUT);
    fescue_failure_clear(bench->context);
    table_destroy(&table);
}

/* ---- stores ---------------------------------------------------------------------------------------------------------
 */

static void a_part_keeps_its_weights(void **state)
{
    fescue_context *context = bench_of(state)->context;
    const struct sowing sowing = {.rows = 40, .columns = 30, .rank = 1, .share = 0.4, .seed = 7};
    struct cells cells, part, alike;
    sow_cells(context, &sowing, &cells);
    double *weight = malloc(cells.count * sizeof *weight), *kept = malloc(cells.count * sizeof *kept);
    uint8_t *keep = malloc(cells.count);
    uint64_t count = 0;
    assert_true(weight != NULL && kept != NULL && keep != NULL);
    for (uint64_t k = 0; k < cells.count; k++) {
        weight[k] = 1 + random_uniform_at(7, RANDOM_TEST, 1, k);
        keep[k] = random_uniform_at(7, RANDOM_TEST, 2, k) < 0.7;
        if (keep[k])
            kept[count++] = weight[k];
    }
    assert_status(context, cells_weigh(context, &cells, weight), FESCUE_OK);
    weights_are(&cells, weight);
    assert_status(context, cells_select(context, &cells, keep, &part), FESCUE_OK);
    weights_are(&part, kept);
    assert_status(context, cells_alike(context, &cells, cells.precision, &alike), FESCUE_OK);
    assert_ptr_equal(alike.by_row.weight, cells.by_row.weight);
    cells_free(context, &alike);
    cells_free(context, &part);
    cells_free(context, &cells);
    free(weight);
    free(kept);
    free(keep);
}

static fescue_status all_read(struct bench *bench, const char *path, const char *rows, const char *columns)
{
    const struct table_reading reading = {.format = FESCUE_FORMAT_LONG};
    fescue_table *table = NULL;
    fescue_status status = table_read(bench->context, path, &reading, &table);
    if (status == FESCUE_OK)
        status = table_weigh(table, rows, columns);
    table_destroy(&table);
    return status;
}

/* Every allocation and every call that touches the files fails in turn. */
static void faults_leak_nothing(void **state)
{
    struct bench *bench = bench_of(state);
    char path[PATH_SIZE], rows[PATH_SIZE], columns[PATH_SIZE];
    static const enum fault_kind kinds[] = {FAULT_TAKE, FAULT_OPEN, FAULT_READ};
    file_put_text(path_in(bench->folder, "long", path), "r,c,v,sd\na,x,1,1\nb,x,2,2\na,y,3,3\n");
    file_put_text(path_in(bench->folder, "rows", rows), "a,1\nb,2\n");
    file_put_text(path_in(bench->folder, "columns", columns), "%%MatrixMarket matrix array real general\n2 1\n1\n2\n");
    for (size_t k = 0; k < sizeof kinds / sizeof kinds[0]; k++) {
        bool met = true;
        for (uint64_t n = 1; met; n++) {
            fault_plan(kinds[k], n, false, EIO);
            fescue_status status = all_read(bench, path, rows, columns);
            met = fault_met();
            fault_clear();
            fescue_status wanted = !met ? FESCUE_OK : kinds[k] == FAULT_TAKE ? FESCUE_NO_MEMORY : FESCUE_NO_INPUT;
            assert_status(bench->context, status, wanted);
            assert_no_leak(bench->context);
            fescue_failure_clear(bench->context);
        }
    }
}

int main(void)
{
    const struct CMUnitTest tests[] = {
        BENCH_TEST(a_fourth_field_is_a_weight),      BENCH_TEST(a_header_says_what_it_is),
        BENCH_TEST(merged_cells_have_a_weight),      BENCH_TEST(weights_in_long_text_that_are_refused),
        BENCH_TEST(rows_and_columns_multiply),       BENCH_TEST(an_array_of_the_matrix_market),
        BENCH_TEST(weights_that_are_alike_are_none), BENCH_TEST(files_of_weights_that_are_refused),
        BENCH_TEST(a_part_keeps_its_weights),        BENCH_TEST(faults_leak_nothing),
    };
    return cmocka_run_group_tests_name("weights", tests, NULL, NULL);
}
