/* SPDX-License-Identifier: MIT
 *
 * Plans: what is taken, and that what is not is told with file, line and key.
 */
#include "night/night_internal.h"
#include "support.h"

#include <math.h>
#include <stdio.h>
#include <string.h>

static fescue_status plan_of(struct bench *bench, const char *text, struct plan *plan)
{
    char path[PATH_SIZE];
    file_put_text(path_in(bench->folder, "plan.ini", path), text);
    fescue_status status = plan_read(bench->context, path, plan);
    return status == FESCUE_OK ? plan_jobs(plan) : status;
}

static void a_plan_is_read(void **state)
{
    struct bench *bench = bench_of(state);
    struct plan plan;
    char want[PATH_SIZE];
    assert_status(bench->context,
                  plan_of(bench,
                          "# a comment\n[night]\nuntil = 05:30 ; in the morning\nthreads = 2\nrank = 4\n\n"
                          "  [fen wells]\n  input = data/fen.csv.gz\n"
                          "[cider]\ninput=/srv/cider.csv\noutput = out/{name}-x/\nrank = 2\nafter = fen wells\n"
                          "deadline = 90m\nmemory = 2G\n",
                          &plan),
                  FESCUE_OK);
    assert_int_equal(plan.count, 2);
    assert_int_equal(plan.options.threads, 2);
    assert_int_equal(plan.until.kind, MOMENT_CLOCK);
    assert_close(plan.until.seconds, 5.5 * 3600, 0);
    assert_string_equal(plan.jobs[0].name, "fen wells");
    assert_string_equal(plan.jobs[0].input, path_in(bench->folder, "data/fen.csv.gz", want));
    assert_string_equal(plan.jobs[0].output, path_in(bench->folder, "data/fen-filled", want));
    assert_int_equal(plan.jobs[0].options.rank, 4);
    assert_int_equal(plan.jobs[0].options.threads, FESCUE_AUTO); /* the night's are those of all together */
    assert_string_equal(plan.jobs[1].input, "/srv/cider.csv");
    assert_string_equal(plan.jobs[1].output, path_in(bench->folder, "out/cider-x", want));
    assert_int_equal(plan.jobs[1].options.rank, 2);
    assert_int_equal(plan.jobs[1].options.memory_limit, 2000000000);
    assert_true(plan.jobs[1].has_memory && !plan.jobs[0].has_memory);
    assert_int_equal(plan.jobs[1].deadline.kind, MOMENT_AFTER);
    assert_close(plan.jobs[1].deadline.seconds, 5400, 0);
    assert_true(plan.jobs[1].after[0] && !plan.jobs[0].after[1]);
    plan_free(&plan);
}

static void wildcards_make_jobs(void **state)
{
    struct bench *bench = bench_of(state);
    struct plan plan;
    char path[PATH_SIZE];
    file_put_text(path_in(bench->folder, "b.csv", path), "");
    file_put_text(path_in(bench->folder, "a.csv.gz", path), "");
    assert_status(bench->context,
                  plan_of(bench,
                          "[all]\ninput = *.csv*\noutput = out\n[none]\ninput = *.nothing\n[end]\n"
                          "input = end.mtx\nafter = all, none\n",
                          &plan),
                  FESCUE_OK);
    assert_int_equal(plan.count, 3);
    assert_string_equal(plan.jobs[0].name, "all/a");
    assert_string_equal(plan.jobs[1].name, "all/b");
    assert_string_equal(plan.jobs[1].output, path_in(bench->folder, "out/b", path));
    assert_true(plan.jobs[2].after[0] && plan.jobs[2].after[1]);
    plan_free(&plan);
}

static void what_is_wrong_is_told(void **state)
{
    static const struct {
        const char *text, *sentence;
    } cases[] = {
        {"[a]\ninput = x\nrnk = 3\n", "line 3: [a] takes no key \"rnk\"; the nearest is \"rank\""},
        {"[night]\nuntill = 05:30\n", "line 2: [night] takes no key \"untill\"; the nearest is \"until\""},
        {"[night]\noutput = x\n", "line 2: [night] takes no key \"output\""},
        {"[a]\ninput = x\nrank = many\n",
         "line 3: rank: found \"many\", expected a whole number from 0 to 256, or auto"},
        {"[night]\nrank = -1\n[a]\ninput = x\n", "line 2: rank: found \"-1\""},
        {"[night]\nuntil = 25:00\n[a]\ninput = x\n", "line 2: until: found \"25:00\""},
        {"[a]\ninput = x\ndeadline = soon\n", "line 3: deadline: found \"soon\""},
        {"[a]\ninput = x\ndeadline = 0\n", "line 3: deadline: found \"0\""},
        {"[a]\nrank = 3\n", "line 1: [a] has no input"},
        {"[a]\n[b]\ninput = x\n", "line 1: [a] has no input"},
        {"[a]\ninput = -\n", "line 2: input: found \"-\""},
        {"[a]\ninput = x\noutput = \n", "line 3: output: found nothing"},
        {"[a]\ninput = x\n[a]\ninput = y\n", "line 3: the section [a] comes a second time, after line 1"},
        {"[a]\ninput = x\ninput = y\n", "line 3: \"input\" comes a second time in [a], after line 2"},
        {"[a]\ninput = x\n    y\n", "line 3: found neither [section] nor key = value"},
        {"input = x\n", "line 1: found \"input\" before any section"},
        {"[a\ninput = x\n", "line 1: a section without its \"]\""},
        {"[a<b]\ninput = x\n", "line 1: found the section [a<b]"},
        {"[a]\ninput = x\noutput = o\n[b]\ninput = y\noutput = o\n", "line 6: b has the output of a"},
        {"[a]\ninput = x\noutput = o/p\n[b]\ninput = y\noutput = ./o//./p/\n", "line 6: b has the output of a"},
        {"[a]\ninput = x\nmemory = lots\n", "line 3: memory: found \"lots\", expected a size"},
        {"[a]\ninput = x/t.csv\noutput = x\n", "line 3: the results of a would lie among its own input"},
        {"[a]\ninput = x\nafter = b\n", "line 3: after: there is no job [b]"},
        {"[a]\ninput = x\nafter = b\n[b]\ninput = y\nafter = a\n", "line 3: a waits for itself"},
        {"[night]\nrank = 3\n", "no job"},
        {"", "no job"},
    };
    struct bench *bench = bench_of(state);
    for (size_t k = 0; k < sizeof cases / sizeof cases[0]; k++) {
        struct plan plan = {0};
        fescue_status status = plan_of(bench, cases[k].text, &plan);
        const char *said = fescue_failure_text(bench->context);
        if (status != FESCUE_USAGE || strstr(said, cases[k].sentence) == NULL || strstr(said, "plan.ini: ") == NULL)
            fail_msg("%s: status %d, \"%s\"", cases[k].text, (int)status, said);
        plan.context = bench->context;
        plan_free(&plan);
        fescue_failure_clear(bench->context);
    }
}

static void a_long_line_is_not_cut(void **state)
{
    struct bench *bench = bench_of(state);
    struct plan plan = {0};
    char text[512];
    snprintf(text, sizeof text, "[a]\ninput = %0300d\n", 7);
    assert_status(bench->context, plan_of(bench, text, &plan), FESCUE_USAGE);
    assert_non_null(strstr(fescue_failure_text(bench->context), "line 2: the line has 308 bytes"));
}

static void every_option_of_fill_is_a_key(void **state)
{
    struct bench *bench = bench_of(state);
    size_t count;
    const struct fescue_option *table = fescue_option_table(&count);
    for (size_t k = 0; k < count; k++) {
        struct plan plan = {0};
        char text[512], standard[128];
        struct fescue_options options;
        if ((table[k].commands & FESCUE_FOR_FILL) == 0 || table[k].kind == FESCUE_KIND_TEXT)
            continue;
        fescue_options_standard(&options);
        fescue_option_text(&table[k], &options, standard, sizeof standard);
        snprintf(text, sizeof text, "[a]\ninput = x\n%s = %s\n", table[k].name, standard);
        if (plan_of(bench, text, &plan) != FESCUE_OK)
            fail_msg("%s: %s", table[k].name, fescue_failure_text(bench->context));
        plan_free(&plan);
    }
}

static void moments_are_read(void **state)
{
    fescue_context *context = bench_of(state)->context;
    struct moment moment;
    assert_true(moment_parse(context, "00:00", false, &moment) && moment.seconds == 0);
    assert_true(moment_parse(context, "9:05", false, &moment) && moment.seconds == 32700);
    assert_true(moment_parse(context, "23:59", true, &moment) && moment.kind == MOMENT_CLOCK);
    assert_true(moment_parse(context, "1h30m", true, &moment) && moment.kind == MOMENT_AFTER);
    static const char *const wrong[] = {"24:00", "12:60", "12:5", ":30", "12", "12:30:00", "noon", ""};
    for (size_t k = 0; k < sizeof wrong / sizeof *wrong; k++)
        assert_false(moment_parse(context, wrong[k], false, &moment));
    assert_true(isinf(moment_seconds(&(struct moment){0})));
    double seconds = moment_seconds(&(struct moment){MOMENT_CLOCK, 43200});
    assert_true(seconds > 0 && seconds <= 25 * 3600);
}

static void every_allocation_may_fail(void **state)
{
    struct bench *bench = bench_of(state);
    bool met = true;
    for (uint64_t n = 1; met; n++) {
        struct plan plan = {0};
        fault_plan(FAULT_TAKE, n, false, 0);
        fescue_status status = plan_of(bench,
                                       "[night]\nrank = 3\n[a]\ninput = x\n[b]\ninput = y\nafter = a\n"
                                       "output = {name}-{name}\nmemory = 1G\n",
                                       &plan);
        met = fault_met();
        fault_clear();
        assert_int_equal(status, met ? FESCUE_NO_MEMORY : FESCUE_OK);
        plan.context = bench->context;
        plan_free(&plan);
        assert_no_leak(bench->context);
        fescue_failure_clear(bench->context);
    }
}

int main(void)
{
    const struct CMUnitTest tests[] = {BENCH_TEST(a_plan_is_read),
                                       BENCH_TEST(wildcards_make_jobs),
                                       BENCH_TEST(what_is_wrong_is_told),
                                       BENCH_TEST(a_long_line_is_not_cut),
                                       BENCH_TEST(every_option_of_fill_is_a_key),
                                       BENCH_TEST(moments_are_read),
                                       BENCH_TEST(every_allocation_may_fail)};
    return cmocka_run_group_tests_name("plan", tests, NULL, NULL);
}
