/* SPDX-License-Identifier: MIT
 *
 * run.json: read back by the library that it was not printed by alone, field by field.
 */
#include "stand.h"

#include <jansson.h>
#include <stdlib.h>
#include <string.h>

static json_t *record_read(const struct stand *stand)
{
    char path[PATH_SIZE];
    json_error_t error;
    json_t *record = json_load_file(stand_path(stand, "run.json", path), JSON_REJECT_DUPLICATES, &error);
    if (record == NULL)
        fail_msg("line %d: %s", error.line, error.text);
    return record;
}

/* The value at a path such as "choice/errors/rmse"; fails the test when there is none. */
static json_t *value_at(json_t *record, const char *path)
{
    for (const char *key = path; *key != '\0';) {
        char name[64] = "";
        size_t length = strcspn(key, "/");
        assert_true(length < sizeof name);
        memcpy(name, key, length);
        record = json_object_get(record, name);
        if (record == NULL)
            fail_msg("%s is not there", path);
        key += length + (key[length] == '/');
    }
    return record;
}

static void text_check(json_t *record, const char *path, const char *expected)
{
    assert_true(json_is_string(value_at(record, path)));
    assert_string_equal(json_string_value(value_at(record, path)), expected);
}

static void count_check(json_t *record, const char *path, json_int_t expected)
{
    assert_true(json_is_integer(value_at(record, path)));
    assert_int_equal(json_integer_value(value_at(record, path)), expected);
}

/* To the last bit. */
static void real_check(json_t *record, const char *path, double expected)
{
    if (!json_is_real(value_at(record, path)))
        fail_msg("%s is not a real", path);
    assert_true(json_real_value(value_at(record, path)) == expected);
}

static void stand_make(void **state, struct stand *stand, const char *text)
{
    stand_begin(state, stand);
    stand_read(stand, text);
    stand_run(stand, FESCUE_OFFSETS_BOTH, 2);
}

static const char example[] = "x,a,b,c\nr,1,2,\ns,3,4,\nt,,,5\n";

static void every_documented_field_is_there(void **state)
{
    struct stand stand;
    char path[PATH_SIZE];
    struct choose_step steps[] = {{FESCUE_OFFSETS_NONE, 0, 0, {3, 1.0 / 3, 0.3}},
                                  {FESCUE_OFFSETS_BOTH, 2, 0.1, {3, 0.1, 0.05}}};
    stand_make(state, &stand, example);
    stand.choice.errors = (struct errors){3, 1.0 / 7, 1e-300};
    stand.choice.offsets_errors = (struct errors){3, 12345678901234567.0, 2};
    stand.choice.offsets_only_rank0_rmse = 2.5;
    stand.choice.path = steps;
    stand.choice.path_count = 2;
    stand.fit.iterations = 17;
    stand.fit.objective = 0.1;
    stand.fit.gradient = 1e-10;
    stand.fit.rmse = 0.25;
    stand.run.hidden = 3;
    stand.run.started = 1e9;
    stand.run.seconds_wall = 1.5;
    stand_write(&stand, write_record);
    json_t *record = record_read(&stand);
    text_check(record, "program", "fescue");
    text_check(record, "version", FESCUE_VERSION);
    text_check(record, "caution", run_caution);
    text_check(record, "instructions/loops", kernel_name());
    text_check(record, "instructions/products", openblas_kernels());
    text_check(record, "input/path", path_in(stand.folder, "table", path));
    text_check(record, "input/shape", "wide");
    count_check(record, "input/bytes", (json_int_t)strlen(example));
    count_check(record, "input/rows", 3);
    count_check(record, "input/columns", 3);
    count_check(record, "input/observed", 5);
    count_check(record, "input/duplicates", 0);
    text_check(record, "choice/offsets", "both");
    count_check(record, "choice/rank", 2);
    real_check(record, "choice/ridge", 0.5);
    assert_true(json_is_false(value_at(record, "choice/learnt")));
    assert_null(json_object_get(value_at(record, "choice"), "noise"));
    count_check(record, "choice/hidden", 3);
    count_check(record, "choice/judged", 3);
    real_check(record, "choice/errors/rmse", 1.0 / 7);
    real_check(record, "choice/errors/mae", 1e-300);
    real_check(record, "choice/errors_of_offsets_alone/rmse", 12345678901234567.0);
    real_check(record, "choice/errors_of_offsets_alone/mae", 2);
    real_check(record, "choice/rmse_of_best_offsets_alone", 2.5);
    assert_true(json_is_false(value_at(record, "choice/noiseless")));
    assert_true(json_is_false(value_at(record, "choice/hidden_for_choice_only")));
    real_check(record, "judgement/interval/level", 0.9);
    real_check(record, "judgement/interval/halfwidth", 1.25);
    assert_int_equal(json_array_size(value_at(record, "choice/path")), 2);
    json_t *step = json_array_get(value_at(record, "choice/path"), 0);
    text_check(step, "offsets", "none");
    count_check(step, "rank", 0);
    real_check(step, "rmse", 1.0 / 3);
    text_check(record, "fit/solver", "grassmann-cg");
    text_check(record, "fit/start", "grown");
    text_check(record, "fit/stop", "gradient");
    text_check(record, "fit/stop_means", "the gradient fell below the tolerance");
    assert_true(json_is_true(value_at(record, "fit/converged")));
    count_check(record, "fit/iterations", 17);
    real_check(record, "fit/objective", 0.1);
    real_check(record, "fit/gradient", 1e-10);
    real_check(record, "fit/scale", 2);
    real_check(record, "fit/rmse_seen", 0.5);
    count_check(record, "model/rank", 2);
    real_check(record, "model/mean", 10);
    real_check(record, "model/row_ridge", 0);
    real_check(record, "model/column_ridge", 0);
    assert_int_equal(json_array_size(value_at(record, "model/spectrum")), 2);
    assert_true(json_is_string(value_at(record, "model/formula")));
    count_check(record, "unseen/cells", 4);
    count_check(record, "unseen/low-rank", 0);
    count_check(record, "unseen/offsets", 4);
    count_check(record, "unseen/mean", 0);
    count_check(record, "unseen/left_blank", 0);
    text_check(record, "files/filled.csv", "written");
    json_decref(record);
    stand_end(&stand);
}

static void what_is_not_finite_is_null(void **state)
{
    static const char *const nulls[] = {"choice/errors/rmse", "choice/errors/mae",
                                        "choice/errors_of_offsets_alone/rmse", "judgement/interval/halfwidth",
                                        "choice/rmse_of_best_offsets_alone"};
    const double halfwidths[] = {NAN, INFINITY};
    for (size_t h = 0; h < 2; h++) {
        struct stand stand;
        stand_make(state, &stand, example);
        stand.judgement.halfwidth = halfwidths[h];
        stand_write(&stand, write_record);
        json_t *record = record_read(&stand);
        for (size_t k = 0; k < sizeof nulls / sizeof nulls[0]; k++)
            assert_true(json_is_null(value_at(record, nulls[k])));
        json_decref(record);
        stand_end(&stand);
    }
}

static void what_was_learnt_is_told(void **state)
{
    static const char *const noises[] = {"equal", "of every column", "of every row"};
    for (size_t k = 0; k < 3; k++) {
        struct stand stand;
        stand_make(state, &stand, example);
        stand.choice.is_learnt = true;
        stand.choice.ridge = NAN;
        stand.choice.learnt.noise = (enum evidence_noise)k;
        stand_write(&stand, write_record);
        json_t *record = record_read(&stand);
        assert_true(json_is_null(value_at(record, "choice/ridge")));
        assert_true(json_is_true(value_at(record, "choice/learnt")));
        text_check(record, "choice/noise", noises[k]);
        json_decref(record);
        stand_end(&stand);
    }
}

static void every_option_that_bears_on_results_is_there(void **state)
{
    struct stand stand;
    size_t count, listed = 0;
    const struct fescue_option *table = fescue_option_table(&count);
    stand_make(state, &stand, example);
    stand.options.strict = true;
    stand.options.ridge = 0.1;
    stand.options.output = "elsewhere";
    stand.options.row_weights = "rows.csv";
    stand_write(&stand, write_record);
    json_t *record = record_read(&stand), *options = value_at(record, "options");
    for (size_t k = 0; k < count; k++) {
        char text[128];
        json_t *value = json_object_get(options, table[k].name);
        if (strcmp(table[k].name, "output") == 0 || strcmp(table[k].name, "threads") == 0 ||
            strncmp(table[k].name, "checkpoint", 10) == 0) {
            assert_null(value);
            continue;
        }
        fescue_option_text(&table[k], &stand.options, text, sizeof text);
        if (table[k].kind == FESCUE_KIND_TEXT && text[0] == '\0') { /* not given */
            assert_null(value);
            continue;
        }
        assert_string_equal(json_string_value(value), text);
        listed++;
    }
    assert_int_equal(json_object_size(options), listed);
    text_check(record, "options/ridge", "0.1");
    text_check(record, "options/strict", "yes");
    json_decref(record);
    stand_end(&stand);
}

/* Options as recorded set the same options again. */
static void options_of_the_record_repeat_the_run(void **state)
{
    struct stand stand;
    struct fescue_options again;
    const char *name;
    json_t *text;
    stand_make(state, &stand, example);
    assert_status(stand.context, fescue_options_set(stand.context, &stand.options, "bounds", "-1:2.5"), FESCUE_OK);
    assert_status(stand.context, fescue_options_set(stand.context, &stand.options, "write", "cells,factors"),
                  FESCUE_OK);
    stand_write(&stand, write_record);
    json_t *record = record_read(&stand);
    fescue_options_standard(&again);
    json_object_foreach(value_at(record, "options"), name, text) assert_status(
        stand.context, fescue_options_set(stand.context, &again, name, json_string_value(text)), FESCUE_OK);
    assert_true(again.bounds.low == -1 && again.bounds.high == 2.5);
    assert_int_equal(again.write, WRITE_CELLS | WRITE_FACTORS);
    assert_int_equal(again.seed, stand.options.seed);
    assert_true(again.holdout == stand.options.holdout && again.ridge == stand.options.ridge);
    json_decref(record);
    stand_end(&stand);
}

static void files_say_why_they_are_not_there(void **state)
{
    struct stand stand;
    stand_begin(state, &stand);
    stand_read(&stand, "%%MatrixMarket matrix array real general\n2 2\n1\n2\n3\nnan\n");
    stand_run(&stand, FESCUE_OFFSETS_BOTH, 0);
    stand.run.writes_cells = false;
    stand_write(&stand, write_record);
    json_t *record = record_read(&stand);
    text_check(record, "input/shape", "matrix-market array");
    text_check(record, "files/filled.mtx", "written");
    text_check(record, "files/cells.csv",
               "left out: the table has more than 20000000 cells; --write asks for it all the same");
    text_check(record, "files/row-offsets.mtx", "written");
    text_check(record, "files/left.mtx", "left out: the rank is 0");
    text_check(record, "files/trace.csv", "written");
    json_decref(record);
    stand_end(&stand);
}

/* Text of a JSON file is UTF-8 (RFC 8259, section 8.1); a path may be any bytes. */
static void any_path_can_be_recorded(void **state)
{
    static const struct {
        const char *name, *recorded;
    } names[] = {
        {"caf\xc3\xa9", "caf\xc3\xa9"}, {"a\"b\nc\\", "a\"b\nc\\"}, {"caf\xe9", "caf?"}, {"\xc3\xa9\xff", "???"}};
    for (size_t k = 0; k < sizeof names / sizeof names[0]; k++) {
        struct stand stand;
        char path[PATH_SIZE], expected[PATH_SIZE];
        const struct table_reading reading = {0};
        stand_begin(state, &stand);
        file_put_text(path_in(stand.folder, names[k].name, path), example);
        assert_status(stand.context, table_read(stand.context, path, &reading, &stand.table), FESCUE_OK);
        stand_run(&stand, FESCUE_OFFSETS_MEAN, 0);
        stand_write(&stand, write_record);
        json_t *record = record_read(&stand);
        text_check(record, "input/path", path_in(stand.folder, names[k].recorded, expected));
        json_decref(record);
        stand_end(&stand);
    }
}

static char *record_bytes(const struct stand *stand)
{
    char path[PATH_SIZE];
    size_t count;
    stand_write(stand, write_record);
    return file_get(stand_path(stand, "run.json", path), &count);
}

/* All that may differ when a run is repeated stands in the last object. */
static void only_timing_differs(void **state)
{
    struct stand stand;
    stand_make(state, &stand, example);
    char *first = record_bytes(&stand);
    stand.run.started = 1.7e9;
    stand.run.seconds_wall = 99;
    stand.run.seconds_cpu = 98;
    assert_status(stand.context, team_resize(stand.context, 3), FESCUE_OK);
    char *second = record_bytes(&stand);
    assert_string_not_equal(first, second);
    char *end = strstr(second, "\"timing\": {");
    assert_non_null(end);
    assert_memory_equal(first, second, (size_t)(end - second));
    assert_non_null(strstr(end, "\"started\": \"2023-11-14T22:13:20Z\"")); /* date -u -d @1700000000 */
    assert_non_null(strstr(end, "\"seconds\": 99.0"));
    assert_non_null(strstr(end, "\"threads\": 3"));
    free(first);
    free(second);
    stand_end(&stand);
}

/* ---- lack of memory -------------------------------------------------------------------------------------------------
 */

static size_t jansson_calls, jansson_nth, jansson_alive;

static void *jansson_take(size_t size)
{
    if (++jansson_calls >= jansson_nth)
        return NULL;
    jansson_alive++;
    return malloc(size);
}

static void jansson_give(void *block)
{
    jansson_alive -= block != NULL;
    free(block);
}

/* The library's memory ends at each of its allocations in turn, until a record is written without meeting the end. */
static void a_lack_of_memory_in_the_library_is_told(void **state)
{
    struct stand stand;
    char path[PATH_SIZE];
    stand_make(state, &stand, example);
    json_set_alloc_funcs(jansson_take, jansson_give);
    fescue_status status = FESCUE_NO_MEMORY;
    for (jansson_nth = 1; status != FESCUE_OK; jansson_nth++) {
        jansson_calls = 0;
        status = stand_try(&stand, write_record);
        assert_int_equal(jansson_alive, 0);
        if (jansson_calls < jansson_nth)
            break;
        assert_int_equal(status, FESCUE_NO_MEMORY);
        assert_false(file_exists(stand_path(&stand, "run.json", path)));
        fescue_failure_clear(stand.context);
    }
    json_set_alloc_funcs(malloc, free);
    assert_status(stand.context, status, FESCUE_OK);
    assert_true(jansson_nth > 100);
    json_decref(record_read(&stand));
    stand_end(&stand);
}

static void a_lack_of_our_own_memory_is_told(void **state)
{
    struct stand stand;
    char path[PATH_SIZE];
    stand_make(state, &stand, example);
    for (uint64_t nth = 1;; nth++) {
        fault_plan(FAULT_TAKE, nth, false, 0);
        fescue_status status = stand_try(&stand, write_record);
        bool met = fault_met();
        fault_clear();
        if (!met) {
            assert_status(stand.context, status, FESCUE_OK);
            break;
        }
        assert_int_equal(status, FESCUE_NO_MEMORY);
        assert_false(file_exists(stand_path(&stand, "run.json", path)));
        fescue_failure_clear(stand.context);
    }
    stand_end(&stand);
}

int main(void)
{
    const struct CMUnitTest tests[] = {
        BENCH_TEST(every_documented_field_is_there),
        BENCH_TEST(what_is_not_finite_is_null),
        BENCH_TEST(what_was_learnt_is_told),
        BENCH_TEST(every_option_that_bears_on_results_is_there),
        BENCH_TEST(options_of_the_record_repeat_the_run),
        BENCH_TEST(files_say_why_they_are_not_there),
        BENCH_TEST(any_path_can_be_recorded),
        BENCH_TEST(only_timing_differs),
        BENCH_TEST(a_lack_of_memory_in_the_library_is_told),
        BENCH_TEST(a_lack_of_our_own_memory_is_told),
    };
    return cmocka_run_group_tests(tests, NULL, NULL);
}
