/* SPDX-License-Identifier: MIT
 *
 * Fault sweeps over a survey and over a table from numbers in memory: jobs that write nothing.
 */
#include "../unit/support_faults.h"

#include <errno.h>
#include <stdlib.h>
#include <string.h>

static char *expected_text; /* the survey without a fault */

static fescue_status survey_job(fescue_context *context, const struct fault_job *job)
{
    struct fescue_options options;
    fescue_table *table = NULL;
    fescue_survey *survey = NULL;
    fescue_options_standard(&options);
    options.threads = (int64_t)job->threads;
    fescue_status status = fescue_table_read(context, job->input, &options, &table);
    assert_int_equal(status == FESCUE_OK, table != NULL);
    if (status == FESCUE_OK) {
        status = fescue_survey_table(table, &options, &survey);
        assert_int_equal(status == FESCUE_OK, survey != NULL);
    }
    if (survey != NULL && expected_text == NULL)
        expected_text = strdup(fescue_survey_text(survey));
    if (survey != NULL)
        assert_string_equal(fescue_survey_text(survey), expected_text);
    fescue_survey_destroy(&survey);
    fescue_table_destroy(&table);
    return status;
}

static fescue_status memory_job(fescue_context *context, const struct fault_job *job)
{
    static const uint32_t row[] = {2, 0, 1, 0}, column[] = {0, 1, 1, 0};
    static const double value[] = {1.5, -2, 3, 0};
    struct fescue_options options;
    fescue_table *table = NULL;
    fescue_options_standard(&options);
    options.threads = (int64_t)job->threads;
    fescue_status status = fescue_table_from_cells(context, 3, 2, 4, row, column, value, &options, &table);
    assert_int_equal(status == FESCUE_OK, table != NULL);
    fescue_table_destroy(&table);
    return status;
}

static const struct fault_case faults[] = {
    {FAULT_TAKE, 0, ALLOWED(FESCUE_NO_MEMORY) | ALLOWED(FESCUE_OK)}, /* a block may stay larger than it need be */
    {FAULT_OPEN, ENFILE, ALLOWED(FESCUE_NO_INPUT)},
    {FAULT_READ, EIO, ALLOWED(FESCUE_NO_INPUT)},
    {FAULT_SHORT_READ, 0, ALLOWED(FESCUE_OK)},
    {FAULT_CLOSE, EIO, ALLOWED(FESCUE_OK)},
};

static void a_survey_survives_every_fault(void **state)
{
    static const char text[] = "row label,column label,value\n"
                               "Mere,amber,4.5\nMere,rust,7\n\"North, fen\",amber,3\nSluice,\"deep \"\"red\"\"\",9.5\n"
                               "Sluice,amber,5\nMere,gold,6.5\n\"North, fen\",rust,8\n";
    char path[PATH_SIZE];
    file_put_text(path_in(bench_of(state)->folder, "panel.csv", path), text);
    for (size_t k = 0; k < sizeof faults / sizeof faults[0]; k++)
        for (size_t threads = 1; threads <= 2; threads++) {
            const struct fault_job job = {.name = "survey", .input = path, .threads = threads, .run = survey_job};
            const struct fault_sweep sweep = {.job = &job, .fault = &faults[k], .lasting = threads == 2};
            assert_true(fault_sweep_run(&sweep) > 0);
        }
    free(expected_text);
}

static void a_table_from_memory_survives_every_fault(void **state)
{
    const struct fault_job job = {.name = "table from memory", .threads = 1, .run = memory_job};
    const struct fault_sweep sweep = {.job = &job, .fault = &faults[0]};
    (void)state;
    assert_true(fault_sweep_run(&sweep) > 5);
}

int main(void)
{
    const struct CMUnitTest tests[] = {
        BENCH_TEST(a_survey_survives_every_fault),
        BENCH_TEST(a_table_from_memory_survives_every_fault),
    };
    return cmocka_run_group_tests(tests, NULL, NULL);
}
