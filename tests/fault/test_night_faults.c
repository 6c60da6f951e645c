/* SPDX-License-Identifier: MIT
 *
 * Fault sweeps over a night: plan, lock, ledger, children, drift, the pages of the morning. One allocation or one file
 * call of the night's own fails, then the next one, and so on. After every run:
 *
 *   - the status is one that the fault may have; where the night itself failed the context keeps a sentence of one line
 *   - no block is alive, no descriptor more is open than before, no child is left
 *   - the morning's folder holds all pages of a night, or the last one's, or none under a final name
 *   - no job's folder holds results without their record
 *   - a clean night then comes to its end, the ledger is sound (PRAGMA integrity_check), nothing in it is left running,
 *     and the results are those of the reference, byte for byte
 *
 * The sweeps take a sample of the calls; with SWEEP=all in the environment they take every one, but of malloc's, which
 * are tens of thousands in SQLite, a thousand.
 */
#include "../unit/support_faults.h"
#include "../unit/support_malloc.h"
#include "night/night_internal.h"

#include <errno.h>
#include <stdio.h>
#include <string.h>
#include <sys/wait.h>

enum { ROWS = 8, COLUMNS = 6, JOBS = 2 };

static struct ground {
    struct bench *bench;
    char plan[PATH_SIZE], ledger[PATH_SIZE], lock[PATH_SIZE], morning[PATH_SIZE], results[JOBS][PATH_SIZE];
    struct snapshot reference[JOBS];
} ground;

/* ---- one night ------------------------------------------------------------------------------------------------------
 */

enum night_kind {
    NIGHT_UNCHANGED, /* nothing to do: plan, lock, ledger, morning */
    NIGHT_AGAIN,     /* both jobs run: children and drift too */
    NIGHT_HISTORY,
};

static fescue_status night_once(fescue_context *context, enum night_kind kind)
{
    struct fescue_night_options options;
    fescue_night *night = NULL;
    char *history = NULL;
    fescue_night_options_standard(&options);
    options.threads = 1;
    options.again = kind == NIGHT_AGAIN;
    fescue_status status = fescue_night_read(context, ground.plan, &options, &night);
    assert_int_equal(status == FESCUE_OK, night != NULL);
    if (status != FESCUE_OK)
        return status;
    if (kind == NIGHT_HISTORY) {
        status = fescue_night_history(night, &history);
        assert_int_equal(status == FESCUE_OK, history != NULL);
        memory_give(context, &history);
    } else {
        status = fescue_night_run(night);
    }
    fescue_night_destroy(&night);
    return status;
}

static fescue_status night_run(enum night_kind kind)
{
    fescue_context *context;
    fescue_status status = test_context_try(&context);
    if (status != FESCUE_OK)
        return status;
    status = night_once(context, kind);
    const char *sentence = fescue_failure_text(context);
    if (status != FESCUE_OK && status != FESCUE_SOME_FAILED)
        assert_true(sentence[0] != '\0' && strchr(sentence, '\n') == NULL);
    assert_no_leak(context);
    fescue_context_destroy(&context);
    return status;
}

/* ---- what has to hold after it --------------------------------------------------------------------------------------
 */

static bool is_in(const struct snapshot *snapshot, const char *name)
{
    for (size_t k = 0; k < snapshot->count; k++)
        if (strcmp(snapshot->files[k].name, name) == 0)
            return true;
    return false;
}

static const char *pages_complaint(bool is_tidy)
{
    struct snapshot found;
    const char *complaint = NULL;
    snapshot_take(ground.morning, &found);
    if (is_in(&found, "night.json") && !(is_in(&found, "summary.txt") && is_in(&found, "index.html")))
        complaint = "the morning is sealed, but not whole";
    if (is_tidy && folder_count_suffix(ground.morning, ".part") > 0)
        complaint = "a temporary file is left of the morning";
    snapshot_free(&found);
    return complaint;
}

static const char *results_complaint(void)
{
    const char *complaint = NULL;
    for (size_t k = 0; k < JOBS; k++) {
        struct snapshot found;
        snapshot_take(ground.results[k], &found);
        if (!snapshots_match(&found, &ground.reference[k]))
            complaint = "the results of a job are not those of the reference";
        snapshot_free(&found);
    }
    return complaint;
}

struct ledger_look {
    int64_t bad, running, sum;
};

static void look_take(void *data, sqlite3_stmt *row)
{
    struct ledger_look *look = data;
    look->bad = strcmp((const char *)sqlite3_column_text(row, 0), "ok") != 0;
}

static void count_take(void *data, sqlite3_stmt *row)
{
    *(int64_t *)data = sqlite3_column_int64(row, 0);
}

static const char *ledger_complaint(void)
{
    fescue_context *context = test_context_create();
    struct ledger ledger;
    struct ledger_look look = {.bad = 1};
    assert_status(context, ledger_open(context, ground.ledger, &ledger), FESCUE_OK);
    assert_status(context, ledger_ask(&ledger, look_take, &look, "PRAGMA integrity_check", ""), FESCUE_OK);
    assert_status(context,
                  ledger_ask(&ledger, count_take, &look.running,
                             "SELECT (SELECT count(*) FROM attempt WHERE state = 'running') +"
                             " (SELECT count(*) FROM night WHERE state = 'running')",
                             ""),
                  FESCUE_OK);
    ledger_close(&ledger);
    fescue_context_destroy(&context);
    return look.bad != 0 ? "the ledger is not sound" : look.running != 0 ? "the ledger has something running" : NULL;
}

static const char *clean_complaint(void)
{
    if (night_run(NIGHT_UNCHANGED) != FESCUE_OK)
        return "the clean night after it failed";
    if (file_exists(ground.lock))
        return "the clean night after it left its lock";
    const char *complaint = pages_complaint(true);
    complaint = complaint == NULL ? results_complaint() : complaint;
    return complaint == NULL ? ledger_complaint() : complaint;
}

static const char *faulty_complaint(enum night_kind kind, const struct fault_case *fault, uint64_t nth, bool lasting,
                                    bool *met)
{
    static char text[128];
    size_t descriptors = descriptors_count();
    uint64_t blocks = test_blocks_alive();
    fault_plan(fault->kind, nth, lasting, fault->error);
    fescue_status status = night_run(kind);
    *met = fault_met();
    fault_clear();
    if (test_blocks_alive() != blocks)
        return "blocks are alive";
    if (descriptors_count() != descriptors)
        return "a descriptor is open, or one too many was closed";
    if (waitpid(-1, NULL, WNOHANG) >= 0 || errno != ECHILD)
        return "a child is left";
    if (*met ? (fault->allowed & ALLOWED(status)) == 0 : status != FESCUE_OK) {
        snprintf(text, sizeof text, "an unexpected status, \"%s\"", fescue_status_text(status));
        return text;
    }
    return pages_complaint(!(fault->kind == FAULT_UNLINK && lasting));
}

/* ---- sweeps ---------------------------------------------------------------------------------------------------------
 */

enum { SAMPLE_WHOLE = 1000 };

/* `sample`: about so many runs of the calls that there are, spread evenly. */
static void sweep(enum night_kind kind, const struct fault_case *fault, bool lasting, uint64_t sample)
{
    const char *wish = getenv("SWEEP"), *complaint;
    bool met = true;
    uint64_t runs = 0, most = wish != NULL && strcmp(wish, "all") == 0 ? SAMPLE_WHOLE : sample;
    fault_clear();
    assert_int_equal(night_run(kind), FESCUE_OK);
    uint64_t calls = fault_calls(fault->kind), step = calls > most ? calls / most : 1;
    for (uint64_t nth = 1; met; nth += step) {
        complaint = faulty_complaint(kind, fault, nth, lasting, &met);
        if (complaint == NULL)
            complaint = clean_complaint();
        if (complaint != NULL)
            fail_msg("%s number %llu of %llu%s: %s", fault_name(fault->kind), (unsigned long long)nth,
                     (unsigned long long)calls, lasting ? " and all later ones" : "", complaint);
        runs += met;
    }
    assert_true(runs > 0);
    print_message("# %s%s: %llu of %llu\n", fault_name(fault->kind), lasting ? " lasting" : "",
                  (unsigned long long)runs, (unsigned long long)calls);
}

/* Where nothing but the job's child, or the line of one of them, is hurt, the night goes on. */
#define ANYWAY (ALLOWED(FESCUE_OK) | ALLOWED(FESCUE_SOME_FAILED) | ALLOWED(FESCUE_CANNOT_WRITE))
static const struct fault_case memory_fault = {FAULT_TAKE, 0, ANYWAY | ALLOWED(FESCUE_NO_MEMORY)};
static const struct fault_case malloc_fault = {FAULT_MALLOC, ENOMEM, ANYWAY | ALLOWED(FESCUE_NO_MEMORY)};

static void an_allocation_may_fail_in_a_quiet_night(void **state)
{
    (void)state;
    sweep(NIGHT_UNCHANGED, &memory_fault, false, 40);
    sweep(NIGHT_UNCHANGED, &memory_fault, true, 20);
}

static void an_allocation_may_fail_in_a_busy_night(void **state)
{
    (void)state;
    sweep(NIGHT_AGAIN, &memory_fault, false, 25);
}

static void an_allocation_may_fail_in_the_history(void **state)
{
    (void)state;
    sweep(NIGHT_HISTORY, &memory_fault, false, 10);
}

static void malloc_may_fail(void **state)
{
    (void)state;
    if (!HAS_OWN_MALLOC) {
        print_message("# not with a sanitizer\n");
        return;
    }
    sweep(NIGHT_UNCHANGED, &malloc_fault, false, 30);
    sweep(NIGHT_HISTORY, &malloc_fault, false, 10);
}

#define NO_FILE (ANYWAY | ALLOWED(FESCUE_NO_INPUT) | ALLOWED(FESCUE_CANNOT_CREATE))
static const struct fault_case file_faults[] = {
    {FAULT_OPEN, EACCES, NO_FILE},
    {FAULT_OPEN, EMFILE, NO_FILE},
    {FAULT_READ, EIO, NO_FILE},
    {FAULT_SHORT_READ, 0, ALLOWED(FESCUE_OK)},
    {FAULT_WRITE, ENOSPC, ANYWAY},
    {FAULT_SHORT_WRITE, 0, ALLOWED(FESCUE_OK)},
    {FAULT_SYNC, EIO, NO_FILE},
    {FAULT_CLOSE, EIO, ANYWAY},
    {FAULT_RENAME, EXDEV, ANYWAY},
    {FAULT_UNLINK, EROFS, ANYWAY},
    {FAULT_MAKE_DIRECTORY, EROFS, NO_FILE},
};
enum { FILE_FAULTS = sizeof file_faults / sizeof file_faults[0] };

static void a_file_call_may_fail_in_a_quiet_night(void **state)
{
    (void)state;
    for (size_t k = 0; k < FILE_FAULTS; k++) {
        sweep(NIGHT_UNCHANGED, &file_faults[k], false, 6);
        sweep(NIGHT_UNCHANGED, &file_faults[k], true, 3);
    }
}

static void a_file_call_may_fail_in_a_busy_night(void **state)
{
    (void)state;
    for (size_t k = 0; k < FILE_FAULTS; k++)
        sweep(NIGHT_AGAIN, &file_faults[k], false, 2);
}

/* ---- the ground -----------------------------------------------------------------------------------------------------
 */

static void table_put(const char *path, uint32_t which)
{
    FILE *file = fopen(path, "w");
    assert_non_null(file);
    fputs("week", file);
    for (unsigned j = 0; j < COLUMNS; j++)
        fprintf(file, ",well %u", j);
    for (unsigned i = 0; i < ROWS; i++) {
        fprintf(file, "\nw%u", i);
        for (unsigned j = 0; j < COLUMNS; j++)
            if (random_uniform_at(43, RANDOM_TEST, 2 * which, i * COLUMNS + j) < 0.15)
                fputc(',', file);
            else
                fprintf(file, ",%.2f",
                        3 + i * 0.5 * (1 + j % 3) + random_uniform_at(43, RANDOM_TEST, 2 * which + 1, i * COLUMNS + j));
    }
    fputc('\n', file);
    assert_int_equal(fclose(file), 0);
}

static int ground_open(void **state)
{
    static const char *const tables[JOBS] = {"levels.csv", "cider.csv"}, *const results[JOBS] = {"one", "two"};
    char path[PATH_SIZE];
    bench_setup(state);
    ground.bench = bench_of(state);
    const char *folder = ground.bench->folder;
    for (uint32_t k = 0; k < JOBS; k++) {
        table_put(path_in(folder, tables[k], path), k);
        path_in(folder, results[k], ground.results[k]);
    }
    path_in(folder, "plan-ledger.db", ground.ledger);
    path_in(folder, "plan-ledger.lock", ground.lock);
    path_in(folder, "plan-morning", ground.morning);
    file_put_text(path_in(folder, "plan.ini", ground.plan),
                  "[night]\nrank = 1\nridge = 0.1\noffsets = both\nfolds = 0\nwrite = filled,factors\n"
                  "[one]\ninput = levels.csv\noutput = one\n[two]\ninput = cider.csv\noutput = two\nafter = one\n");
    fault_clear();
    assert_int_equal(night_run(NIGHT_AGAIN), FESCUE_OK);
    for (size_t k = 0; k < JOBS; k++) {
        snapshot_take(ground.results[k], &ground.reference[k]);
        assert_true(ground.reference[k].count > 3);
    }
    return 0;
}

static int ground_close(void **state)
{
    for (size_t k = 0; k < JOBS; k++)
        snapshot_free(&ground.reference[k]);
    return bench_teardown(state);
}

int main(void)
{
    const struct CMUnitTest tests[] = {
        cmocka_unit_test(an_allocation_may_fail_in_a_quiet_night),
        cmocka_unit_test(an_allocation_may_fail_in_a_busy_night),
        cmocka_unit_test(an_allocation_may_fail_in_the_history),
        cmocka_unit_test(malloc_may_fail),
        cmocka_unit_test(a_file_call_may_fail_in_a_quiet_night),
        cmocka_unit_test(a_file_call_may_fail_in_a_busy_night),
    };
    return cmocka_run_group_tests(tests, ground_open, ground_close);
}
