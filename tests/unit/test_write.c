/* SPDX-License-Identifier: MIT
 *
 * The writers but for the record: exact bytes of small tables in each shape, and the counts of unseen cells.
 */
#include "stand.h"

#include <stdio.h>
#include <stdlib.h>
#include <string.h>

#define CAUTION                                                                                                        \
    "% completed by fescue " FESCUE_VERSION "\n"                                                                       \
    "% Estimates are not measurements. Do not use them for safety, medical, billing or compliance decisions without "  \
    "the review that local rules and licensed practice require.\n"

/* Reads `text`, completes it by the stand's model, and compares the file byte for byte. */
static void filled_check(void **state, const char *text, enum fescue_offsets kind, const char *name,
                         const char *expected)
{
    struct stand stand;
    char path[PATH_SIZE];
    stand_begin(state, &stand);
    stand_read(&stand, text);
    stand_run(&stand, kind, 0);
    stand_write(&stand, write_filled);
    file_check(stand_path(&stand, name, path), expected);
    assert_int_equal(folder_count(stand_path(&stand, "", path)), 1);
    stand_end(&stand);
}

/* ---- the shapes ---------------------------------------------------------------------------------------------------
 */

/* What was read is kept as it looked: signs, zeros, exponents. */
static void coordinate_stays_coordinate(void **state)
{
    filled_check(state,
                 "%%MatrixMarket matrix coordinate real general\n2 3 4\n2 3 -0.0\n1 1 +1.50\n1 3 1e2\n2 1 007.25\n",
                 FESCUE_OFFSETS_BOTH, "filled.mtx",
                 "%%MatrixMarket matrix coordinate real general\n" CAUTION "2 3 6\n"
                 "1 1 +1.50\n1 2 12\n1 3 1e2\n2 1 007.25\n2 2 13\n2 3 -0.0\n");
}

static void symmetric_is_written_in_full(void **state)
{
    filled_check(state, "%%MatrixMarket matrix coordinate integer symmetric\n2 2 1\n2 1 05\n", FESCUE_OFFSETS_BOTH,
                 "filled.mtx",
                 "%%MatrixMarket matrix coordinate real general\n" CAUTION "2 2 4\n"
                 "1 1 11.5\n1 2 05\n2 1 05\n2 2 13\n");
}

static void array_stays_array(void **state)
{
    filled_check(state, "%%MatrixMarket matrix array real general\n2 3\n1.0\nnan\n3.00\n4\nnan\n6e0\n",
                 FESCUE_OFFSETS_BOTH, "filled.mtx",
                 "%%MatrixMarket matrix array real general\n" CAUTION "2 3\n1.0\n12.5\n3.00\n4\n12.5\n6e0\n");
}

/* The quoting is RFC 4180's, with the separator of the table. */
static void wide_keeps_labels_and_separator(void **state)
{
    filled_check(state,
                 "well;\"a;b\";\"say \"\"b\"\"\";c,d\nfirst;1.50;;NA\n\"two\nlines\";;2e1;nan\n third;3;null;+4\n",
                 FESCUE_OFFSETS_BOTH, "filled.csv",
                 "well;\"a;b\";\"say \"\"b\"\"\";c,d\nfirst;1.50;12;12.5\n\"two\nlines\";12.5;2e1;13.5\n"
                 "\" third\";3;14;+4\n");
}

static void decimal_commas_stay(void **state)
{
    filled_check(state, ";a;b\nr;1,50;\ns;;2,25\n", FESCUE_OFFSETS_BOTH, "filled.csv",
                 ";a;b\nr;1,50;12\ns;12,5;2,25\n");
}

static void tabs_stay_tabs(void **state)
{
    filled_check(state, "\ta\tb, c\nr1\t1\t\nr2\t\t0.10\n", FESCUE_OFFSETS_BOTH, "filled.tsv",
                 "\ta\tb, c\nr1\t1\t12\nr2\t12.5\t0.10\n");
}

static void long_keeps_titles(void **state)
{
    filled_check(state, "taster,cider,score\nann,dry,7.50\nbob,sweet,8\n", FESCUE_OFFSETS_BOTH, "filled.csv",
                 "taster,cider,score\nann,dry,7.50\nann,sweet,12\nbob,dry,12.5\nbob,sweet,8\n");
}

static void a_table_from_memory_becomes_an_array(void **state)
{
    static const uint32_t rows[] = {0, 1}, columns[] = {0, 1};
    static const double values[] = {0.1, -3};
    struct stand stand;
    char path[PATH_SIZE];
    stand_begin(state, &stand);
    assert_status(stand.context,
                  table_from_triplets(stand.context, 2, 2, 2, rows, columns, values, FESCUE_SINGLE, &stand.table),
                  FESCUE_OK);
    stand_run(&stand, FESCUE_OFFSETS_BOTH, 0);
    stand_write(&stand, write_filled);
    file_check(stand_path(&stand, "filled.mtx", path),
               "%%MatrixMarket matrix array real general\n" CAUTION "2 2\n0.1\n12.5\n12\n-3\n");
    stand_end(&stand);
}

/* ---- what --strict leaves blank -------------------------------------------------------------------------------------
 */

static void strict_check(void **state, const char *text, const char *name, const char *expected)
{
    struct stand stand;
    char path[PATH_SIZE];
    stand_begin(state, &stand);
    stand.options.strict = true;
    stand_read(&stand, text);
    stand_run(&stand, FESCUE_OFFSETS_BOTH, 1);
    stand_write(&stand, write_filled);
    file_check(stand_path(&stand, name, path), expected);
    stand_end(&stand);
}

/* The first two rows and columns hang together, the third row and column are seen apart from them: of the two blocks'
   common cells rank 1 says nothing. */
static void strict_leaves_blank_what_is_not_determined(void **state)
{
    strict_check(state, "x,a,b,c\nr,1,2,\ns,3,,\nt,,,5\n", "filled.csv", "x,a,b,c\nr,1,2,\ns,3,21,\nt,,,5\n");
    strict_check(state, "%%MatrixMarket matrix coordinate real general\n3 3 4\n1 1 1\n1 2 2\n2 1 3\n3 3 5\n",
                 "filled.mtx",
                 "%%MatrixMarket matrix coordinate real general\n" CAUTION "3 3 5\n"
                 "1 1 1\n1 2 2\n2 1 3\n2 2 21\n3 3 5\n");
    strict_check(state, "%%MatrixMarket matrix array real general\n3 3\n1\n3\nnan\n2\nnan\nnan\nnan\nnan\n5\n",
                 "filled.mtx",
                 "%%MatrixMarket matrix array real general\n" CAUTION "3 3\n1\n3\nnan\n2\n21\nnan\nnan\nnan\n5\n");
    strict_check(state, "row,column,value\nr,a,1\nr,b,2\ns,a,3\nt,c,5\n", "filled.csv",
                 "row,column,value\nr,a,1\nr,b,2\ns,a,3\ns,b,21\nt,c,5\n");
}

/* ---- cells.csv ------------------------------------------------------------------------------------------------------
 */

static void cells_have_one_line_each(void **state)
{
    struct stand stand;
    char path[PATH_SIZE];
    stand_begin(state, &stand);
    stand_read(&stand, "x;\"a,b\";b;c\nr;1;2;\ns;3;;\nt;;;5\n");
    assert_status(stand.context, fescue_options_set(stand.context, &stand.options, "bounds", "20:27.5"), FESCUE_OK);
    stand_run(&stand, FESCUE_OFFSETS_BOTH, 1);
    stand_write(&stand, write_cells);
    file_check(stand_path(&stand, "cells.csv", path),
               "row,column,estimate,lower,upper,basis,row_support,column_support\n"
               "r,c,20,20,21.25,offsets,2,1\n"
               "s,b,21,20,22.25,low-rank,1,1\n"
               "s,c,25.5,24.25,26.75,offsets,1,1\n"
               "t,\"a,b\",20,20,21.25,offsets,1,2\n"
               "t,b,26,24.75,27.25,offsets,1,1\n");
    stand_end(&stand);
}

static void cells_are_blank_without_interval_or_by_strict(void **state)
{
    struct stand stand;
    char path[PATH_SIZE];
    stand_begin(state, &stand);
    stand.options.strict = true;
    stand_read(&stand, "x,a,b,c\nr,1,2,\ns,3,,\nt,,,5\n");
    stand_run(&stand, FESCUE_OFFSETS_BOTH, 1);
    stand.judgement.halfwidth = INFINITY;
    stand_write(&stand, write_cells);
    file_check(
        stand_path(&stand, "cells.csv", path),
        "row,column,estimate,lower,upper,basis,row_support,column_support\n"
        "r,c,,,,offsets,2,1\ns,b,21,,,low-rank,1,1\ns,c,,,,offsets,1,1\nt,a,,,,offsets,1,2\nt,b,,,,offsets,1,1\n");
    stand.judgement.halfwidth = NAN;
    assert_true(isnan(run_unseen(&stand.run, 1, 1).lower) && isnan(run_unseen(&stand.run, 1, 1).upper));
    stand_end(&stand);
}

/* Matrix Market has no labels: lines are called by their number. */
static void cells_without_labels_are_numbered(void **state)
{
    struct stand stand;
    char path[PATH_SIZE];
    stand_begin(state, &stand);
    stand_read(&stand, "%%MatrixMarket matrix coordinate real general\n2 2 2\n1 1 1\n1 2 1\n");
    stand_run(&stand, FESCUE_OFFSETS_ROWS, 0);
    stand.judgement.halfwidth = NAN;
    stand_write(&stand, write_cells);
    file_check(stand_path(&stand, "cells.csv", path),
               "row,column,estimate,lower,upper,basis,row_support,column_support\n"
               "2,1,12,,,mean,0,1\n2,2,12,,,mean,0,1\n");
    stand_end(&stand);
}

/* ---- estimates ------------------------------------------------------------------------------------------------------
 */

/* Without a ridge the low-rank part of a cell that is not determined is left out; with one it is shrunk, and stays. */
static void chance_is_left_out(void **state)
{
    struct stand stand;
    stand_begin(state, &stand);
    stand_read(&stand, "x,a,b,c\nr,1,2,\ns,3,,\nt,,,5\n");
    stand_run(&stand, FESCUE_OFFSETS_BOTH, 1);
    assert_close(run_estimate(&stand.run, 1, 1), 21, 0);
    assert_close(run_estimate(&stand.run, 1, 2), 25.5, 0);
    stand.choice.ridge = 0;
    assert_close(run_estimate(&stand.run, 1, 1), 21, 0);
    assert_close(run_estimate(&stand.run, 1, 2), 13.5, 0);
    assert_close(run_unseen(&stand.run, 1, 2).estimate, 13.5, 0);
    stand.choice.ridge = NAN; /* learnt, one a component */
    stand.choice.is_learnt = true;
    assert_close(run_estimate(&stand.run, 1, 2), 25.5, 0);
    stand.choice.ridge = 0;
    stand.choice.is_learnt = false;
    stand.model.bounds = (struct fescue_range){14, 20};
    assert_close(run_estimate(&stand.run, 1, 2), 14, 0);
    assert_close(run_estimate(&stand.run, 1, 1), 20, 0);
    stand_end(&stand);
}

/* A random pattern, with empty lines in it. */
static void pattern_read(struct stand *stand, uint32_t which)
{
    enum { ROWS = 9, COLUMNS = 7 };
    struct triplet_list list = {0};
    struct random_stream random = random_open(7, RANDOM_TEST, which);
    for (uint32_t i = 0; i < ROWS; i++)
        for (uint32_t j = 0; j < COLUMNS; j++)
            if (i != 4 && j != 2 && random_uniform(&random) < 0.15 + 0.05 * (which % 5))
                assert_status(stand->context, triplets_append(stand->context, &list, i, j, 1), FESCUE_OK);
    double *value = list.value;
    assert_status(stand->context,
                  table_from_triplets(stand->context, ROWS, COLUMNS, list.count, list.row, list.column, value,
                                      FESCUE_DOUBLE, &stand->table),
                  FESCUE_OK);
    triplets_free(stand->context, &list);
}

static void count_check(const struct stand *stand)
{
    const struct half *half = &stand->table->cells.by_row;
    uint64_t filled[BASIS_COUNT] = {0}, blank = 0, next = 0;
    for (uint32_t i = 0; i < half->lines; i++)
        for (uint32_t j = 0; j < half->length; j++) {
            if (next < half->start[i + 1] && half->across[next] == j) {
                next++;
                continue;
            }
            struct unseen unseen = run_unseen(&stand->run, i, j);
            filled[unseen.basis]++;
            blank += unseen.is_blank;
        }
    assert_memory_equal(filled, stand->run.filled, sizeof filled);
    assert_int_equal(blank, stand->run.blank);
    assert_int_equal(filled[0] + filled[1] + filled[2] + filled[3] + stand->table->cells.count,
                     (uint64_t)half->lines * half->length);
}

/* Counting by blocks agrees with counting cell by cell. */
static void counts_agree_with_the_cells(void **state)
{
    for (uint32_t which = 0; which < 40; which++)
        for (enum fescue_offsets kind = FESCUE_OFFSETS_BOTH; kind <= FESCUE_OFFSETS_NONE; kind++)
            for (size_t rank = 0; rank < 3; rank++) {
                struct stand stand;
                stand_begin(state, &stand);
                stand.options.strict = which % 2 == 0;
                pattern_read(&stand, which);
                stand_run(&stand, kind, rank);
                count_check(&stand);
                stand_end(&stand);
            }
}

static void what_is_left_out_says_why(void **state)
{
    struct stand stand;
    stand_begin(state, &stand);
    stand.options.format = FESCUE_FORMAT_WIDE;
    stand_read(&stand, "x,a,b\nr,1,2\ns,3,\n");
    stand_run(&stand, FESCUE_OFFSETS_BOTH, 0);
    assert_null(run_why_left_out(&stand.run, true));
    assert_string_equal(run_why_left_out(&stand.run, false),
                        "the table has more than 20000000 cells; --write asks for it all the same");
    stand.options.write = WRITE_CELLS;
    assert_null(run_why_left_out(&stand.run, true));
    assert_string_equal(run_why_left_out(&stand.run, false), "not asked for by --write");
    stand_end(&stand);
}

/* The bits of --write are the positions of its words. */
static void the_bits_of_write_are_its_words(void **state)
{
    static const struct {
        const char *word;
        unsigned bit;
    } words[] = {{"filled", WRITE_FILLED}, {"cells", WRITE_CELLS}, {"factors", WRITE_FACTORS}};
    for (size_t k = 0; k < sizeof words / sizeof words[0]; k++) {
        struct fescue_options options;
        assert_int_equal(fescue_options_set(bench_of(state)->context, &options, "write", words[k].word), FESCUE_OK);
        assert_int_equal(options.write, words[k].bit);
    }
}

/* ---- factors and trace ----------------------------------------------------------------------------------------------
 */

static void factors_are_arrays(void **state)
{
    struct stand stand;
    char path[PATH_SIZE];
    stand_begin(state, &stand);
    stand.options.format = FESCUE_FORMAT_WIDE;
    stand_read(&stand, "x,a,b\nr,1,2\ns,3,\nt,4,5\n");
    stand_run(&stand, FESCUE_OFFSETS_BOTH, 2);
    stand_write(&stand, write_factors);
    file_check(stand_path(&stand, "row-offsets.mtx", path),
               "%%MatrixMarket matrix array real general\n% mean 10\n3 1\n1\n2\n3\n");
    file_check(stand_path(&stand, "column-offsets.mtx", path),
               "%%MatrixMarket matrix array real general\n% mean 10\n2 1\n0.5\n1\n");
    file_check(stand_path(&stand, "left.mtx", path),
               "%%MatrixMarket matrix array real general\n3 2\n1\n2\n3\n1\n2\n3\n");
    file_check(stand_path(&stand, "spectrum.mtx", path), "%%MatrixMarket matrix array real general\n2 1\n2\n0\n");
    file_check(stand_path(&stand, "right.mtx", path), "%%MatrixMarket matrix array real general\n2 2\n1\n2\n1\n2\n");
    stand_end(&stand);
}

static void rank_0_has_offsets_only(void **state)
{
    struct stand stand;
    char path[PATH_SIZE];
    stand_begin(state, &stand);
    stand.options.format = FESCUE_FORMAT_WIDE;
    stand_read(&stand, "x,a,b\nr,1,2\ns,3,\n");
    stand_run(&stand, FESCUE_OFFSETS_MEAN, 0);
    stand_write(&stand, write_factors);
    assert_int_equal(folder_count(stand_path(&stand, "", path)), 2);
    file_check(stand_path(&stand, "row-offsets.mtx", path),
               "%%MatrixMarket matrix array real general\n% mean 10\n2 1\n0\n0\n");
    stand_end(&stand);
}

static void the_trace_is_in_units_of_the_table(void **state)
{
    struct stand stand;
    char path[PATH_SIZE];
    stand_begin(state, &stand);
    stand.options.format = FESCUE_FORMAT_WIDE;
    stand_read(&stand, "x,a,b\nr,1,2\ns,3,\n");
    stand_run(&stand, FESCUE_OFFSETS_MEAN, 1);
    assert_status(stand.context, TAKE(stand.context, 2, &stand.fit.trace), FESCUE_OK);
    stand.fit.trace_count = 2;
    stand.fit.trace[0] = (struct solve_step){1, 0, 0.5, 0.25, 1, 0, 0.1};
    stand.fit.trace[1] = (struct solve_step){1, 1, 0.125, 0.1, 1e-9, 2.5, 0.2};
    stand_write(&stand, write_trace);
    file_check(stand_path(&stand, "trace.csv", path),
               "rank,iteration,objective,rmse,gradient,step\n1,0,0.5,0.5,1,0\n1,1,0.125,0.2,1e-09,2.5\n");
    stand_end(&stand);
}

/* ---- pieces ---------------------------------------------------------------------------------------------------------
 */

static fescue_status fields_write(const struct run *run, struct output *output)
{
    static const char *const fields[] = {"plain",      "",       "a,b",  "a;b",       "say \"x\"",   "\"",
                                         "two\nlines", "cr\rlf", " led", "trailed\t", "inner blank", "\xc3\xa9"};
    struct outfile *file;
    (void)run;
    fescue_status status = output_add(output, "fields", &file);
    for (size_t k = 0; status == FESCUE_OK && k < sizeof fields / sizeof fields[0]; k++) {
        write_field(file, fields[k], ',');
        outfile_text(file, "|");
    }
    return status;
}

/* RFC 4180, section 2, rules 5 to 7. */
static void fields_are_quoted_when_they_have_to_be(void **state)
{
    struct stand stand;
    char path[PATH_SIZE];
    stand_begin(state, &stand);
    stand_write(&stand, fields_write);
    file_check(stand_path(&stand, "fields", path), "plain||\"a,b\"|a;b|\"say \"\"x\"\"\"|\"\"\"\"|\"two\nlines\"|"
                                                   "\"cr\rlf\"|\" led\"|\"trailed\t\"|inner blank|\xc3\xa9|");
}

/* A disk that is full under each writer in turn: its status, and nothing under a final name. */
static void a_full_disk_leaves_nothing(void **state)
{
    static writer *const writers[] = {write_filled, write_cells, write_factors, write_trace, write_record};
    struct stand stand;
    char path[PATH_SIZE];
    stand_begin(state, &stand);
    stand.options.format = FESCUE_FORMAT_WIDE;
    stand_read(&stand, "x,a,b\nr,1,2\ns,3,\n");
    stand_run(&stand, FESCUE_OFFSETS_BOTH, 1);
    for (size_t k = 0; k < sizeof writers / sizeof writers[0]; k++) {
        fault_plan(FAULT_WRITE, 1, true, 28 /* ENOSPC */);
        assert_int_equal(stand_try(&stand, writers[k]), FESCUE_CANNOT_WRITE);
        assert_true(fault_met());
        fault_clear();
        assert_int_equal(folder_count(stand_path(&stand, "", path)), 0);
        fescue_failure_clear(stand.context);
    }
    stand_end(&stand);
}

int main(void)
{
    const struct CMUnitTest tests[] = {
        BENCH_TEST(coordinate_stays_coordinate),
        BENCH_TEST(symmetric_is_written_in_full),
        BENCH_TEST(array_stays_array),
        BENCH_TEST(wide_keeps_labels_and_separator),
        BENCH_TEST(decimal_commas_stay),
        BENCH_TEST(tabs_stay_tabs),
        BENCH_TEST(long_keeps_titles),
        BENCH_TEST(a_table_from_memory_becomes_an_array),
        BENCH_TEST(strict_leaves_blank_what_is_not_determined),
        BENCH_TEST(cells_have_one_line_each),
        BENCH_TEST(cells_are_blank_without_interval_or_by_strict),
        BENCH_TEST(cells_without_labels_are_numbered),
        BENCH_TEST(chance_is_left_out),
        BENCH_TEST(counts_agree_with_the_cells),
        BENCH_TEST(what_is_left_out_says_why),
        BENCH_TEST(the_bits_of_write_are_its_words),
        BENCH_TEST(factors_are_arrays),
        BENCH_TEST(rank_0_has_offsets_only),
        BENCH_TEST(the_trace_is_in_units_of_the_table),
        BENCH_TEST(fields_are_quoted_when_they_have_to_be),
        BENCH_TEST(a_full_disk_leaves_nothing),
    };
    return cmocka_run_group_tests(tests, NULL, NULL);
}
