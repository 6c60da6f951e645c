/* SPDX-License-Identifier: MIT
 *
 * A night from its plan to its morning.
 *
 *     lock the plan --> open the ledger --> find out what became of attempts that a dead night left
 *     --> while there is something to do: begin, watch --> morning
 *
 * A night that is asked to stop, or whose time is over, asks its children to stop; each writes a checkpoint and ends.
 * The next night of the same plan goes on from there. An attempt that was running when its night died has ended itself
 * by then, or is about to (its output is locked until it has); if it published its results in its last moments they are
 * taken as they lie there: the record in its folder is another than before it began, and of the options it ran with.
 * So no job is lost, and none runs twice to completion.
 *
 * What goes wrong with the ledger in the middle of a night is kept for the morning (night_trouble), and the jobs go on.
 */
#include "night/night_internal.h"

#include <math.h>
#include <stdio.h>
#include <string.h>
#include <sys/sysinfo.h>
#include <time.h>
#include <unistd.h>

/* Of the machine's memory, when the plan sets no limit: the rest is the system's and its cache's. */
static const double memory_share = 0.8;
/* Seconds to wait for a child of a dead night, which writes its checkpoint. */
static const double patience = 120;
/* And for the plan's lock: a child that was just forked when its night died holds it for a moment. */
static const double short_patience = 3;

void night_trouble(struct fescue_night *night)
{
    if (night->trouble[0] == '\0')
        snprintf(night->trouble, sizeof night->trouble, "%s", fescue_failure_text(night->context));
    fescue_failure_clear(night->context);
}

/* ---- reading -------------------------------------------------------------------------------------------------------
 */

static void given_take(const struct fescue_night_options *given, struct plan *plan)
{
    struct fescue_night_options *options = &plan->options;
    options->again = given->again;
    options->history = given->history;
    options->list = given->list;
    if (given->until != NULL)
        options->until = given->until;
    if (given->lasting > 0)
        options->lasting = given->lasting;
    if (given->threads != FESCUE_AUTO)
        options->threads = given->threads;
    if (given->memory > 0)
        options->memory = given->memory;
}

static fescue_status tasks_create(struct fescue_night *night)
{
    fescue_status status;
    TRY(TAKE(night->context, night->plan.count, &night->tasks));
    for (size_t k = 0; k < night->plan.count; k++) {
        struct task *task = &night->tasks[k];
        task->job = &night->plan.jobs[k];
        task->options = task->job->options;
        task->pipe = -1;
        task->outcome.mae = task->outcome.distance = NAN;
        for (size_t i = 0; i < FIGURES; i++)
            task->outcome.figure[i] = NAN;
        options_words(&task->options, task->wanted);
        TRY(text_join(night->context, &task->checkpoint, task->job->output, "/.fescue-checkpoint", NULL));
    }
done:
    return status;
}

fescue_status fescue_night_read(fescue_context *context, const char *path, const struct fescue_night_options *given,
                                fescue_night **out)
{
    fescue_night *night = NULL;
    struct plan *plan;
    fescue_status status;
    *out = NULL;
    TRY(TAKE(context, 1, &night));
    night->context = context;
    plan = &night->plan;
    TRY(plan_read(context, path, plan));
    TRY(plan_jobs(plan));
    given_take(given, plan);
    if (plan->options.until != NULL && !moment_parse(context, plan->options.until, false, &plan->until))
        TRY(FAIL(context, FESCUE_USAGE, "--until: found \"%s\", expected a time of day such as 05:30",
                 plan->options.until));
    TRY(text_join(context, &night->place, plan->stem, "-morning", NULL));
    TRY(text_join(context, &night->ledger_path, plan->stem, "-ledger.db", NULL));
    TRY(text_join(context, &night->lock_path, plan->stem, "-ledger.lock", NULL));
    TRY(tasks_create(night));
    TRY(plan_text(plan, &night->text));
    *out = night;
    night = NULL;
done:
    fescue_night_destroy(&night);
    return status;
}

void fescue_night_destroy(fescue_night **pointer)
{
    fescue_night *night = *pointer;
    if (night == NULL)
        return;
    fescue_context *context = night->context;
    for (size_t k = 0; night->tasks != NULL && k < night->plan.count; k++)
        GIVE(context, &night->tasks[k].checkpoint);
    GIVE(context, &night->tasks);
    GIVE(context, &night->place);
    GIVE(context, &night->ledger_path);
    GIVE(context, &night->lock_path);
    GIVE(context, &night->text);
    night->plan.context = context;
    plan_free(&night->plan);
    GIVE(context, pointer);
}

const char *fescue_night_text(const fescue_night *night)
{
    return night->text;
}

const char *fescue_night_place(const fescue_night *night)
{
    return night->place;
}

/* ---- what a dead night left ----------------------------------------------------------------------------------------
 */

static void outcome_sum(fescue_context *context, const char *output, char sum[WORD_SIZE])
{
    char *path = NULL;
    int64_t bytes;
    if (text_join(context, &path, output, "/run.json", NULL) != FESCUE_OK ||
        file_sum(context, path, sum, &bytes) != FESCUE_OK) {
        fescue_failure_clear(context);
        sum[0] = '\0';
    }
    GIVE(context, &path);
}

/* Whether the attempt published its results before it died; then *outcome is theirs. */
static bool is_published(fescue_context *context, const struct attempt *attempt, struct outcome *outcome)
{
    char sum[WORD_SIZE];
    outcome_sum(context, attempt->output, sum);
    return sum[0] != '\0' && strcmp(sum, attempt->record_before) != 0 &&
           outcome_read(context, attempt->output, outcome) && strcmp(outcome->options, attempt->options) == 0;
}

static fescue_status left_settle(struct fescue_night *night, const struct attempt *attempt)
{
    struct plan_job job = {.name = (char *)attempt->job, .output = (char *)attempt->output};
    struct task task = {.job = &job, .attempt = attempt->number, .state = STATE_LOST, .status = FESCUE_STOPPED};
    fescue_hold *hold = NULL;
    fescue_status status = FESCUE_OK;
    snprintf(task.message, sizeof task.message, "the night ended before it, and nobody saw how");
    task.seconds = task.cpu = task.outcome.mae = task.outcome.distance = NAN;
    for (size_t k = 0; k < FIGURES; k++)
        task.outcome.figure[k] = NAN;
    if (access(attempt->output, F_OK) == 0 &&
        fescue_place_hold(night->context, attempt->output, patience, &hold) != FESCUE_OK)
        night_trouble(night);
    if (is_published(night->context, attempt, &task.outcome)) {
        task.state = STATE_DONE;
        task.status = FESCUE_OK;
        task.seconds = task.outcome.wall;
        task.cpu = task.outcome.cpu;
        task.memory = task.outcome.memory;
        snprintf(task.message, sizeof task.message, "found done; the night that ran it had died");
        TRY(drift_judge(night, &task));
    }
    TRY(ledger_attempt_end(&night->ledger, &task));
done:
    fescue_place_release(&hold);
    return status;
}

static fescue_status left_settle_all(struct fescue_night *night)
{
    struct attempt *attempts = NULL;
    size_t count = 0;
    fescue_status status;
    TRY(ledger_left_running(&night->ledger, &attempts, &count));
    for (size_t k = 0; k < count; k++)
        TRY(left_settle(night, &attempts[k]));
    TRY(ledger_do(&night->ledger, "UPDATE night SET state = 'lost' WHERE state = 'running'", ""));
done:
    GIVE(night->context, &attempts);
    return status;
}

/* ---- beginning a task ----------------------------------------------------------------------------------------------
 */

/* Whether the last run had the same input and options, and its results lie there. */
static fescue_status is_unchanged(struct fescue_night *night, struct task *task, bool *unchanged)
{
    struct attempt last;
    struct outcome outcome;
    fescue_status status = ledger_last_done(&night->ledger, task->job->name, &last);
    *unchanged = false;
    if (status != FESCUE_OK || last.number == 0 || task->input_sum[0] == '\0')
        return status;
    bool is_fresh = !night->plan.options.again || last.night > night->fresh_since;
    *unchanged = is_fresh && !last.is_cut && strcmp(last.output, task->job->output) == 0 &&
                 strcmp(last.input_sum, task->input_sum) == 0 && last.input_bytes == task->input_bytes &&
                 strcmp(last.options, task->wanted) == 0 && strcmp(last.version, FESCUE_VERSION) == 0 &&
                 outcome_read(night->context, task->job->output, &outcome) &&
                 strcmp(outcome.input_sum, task->input_sum) == 0 && strcmp(outcome.options, task->wanted) == 0;
    if (*unchanged)
        task->outcome = outcome;
    return FESCUE_OK;
}

static void task_fail(struct fescue_night *night, struct task *task, fescue_status status)
{
    task->state = STATE_FAILED;
    task->status = status;
    snprintf(task->message, sizeof task->message, "%s", fescue_failure_text(night->context));
    fescue_failure_clear(night->context);
    if (ledger_attempt_end(&night->ledger, task) != FESCUE_OK)
        night_trouble(night);
}

static fescue_status task_note_unchanged(struct fescue_night *night, struct task *task)
{
    fescue_status status;
    task->state = STATE_UNCHANGED;
    task->seconds = task->cpu = 0;
    TRY(ledger_attempt_begin(&night->ledger, task));
    TRY(ledger_attempt_end(&night->ledger, task));
done:
    return status;
}

static void task_begin(struct fescue_night *night, struct task *task)
{
    bool unchanged = false;
    if (file_sum(night->context, task->job->input, task->input_sum, &task->input_bytes) != FESCUE_OK)
        fescue_failure_clear(night->context); /* the child will say it */
    snprintf(task->as_run, sizeof task->as_run, "%s", task->wanted);
    if (is_unchanged(night, task, &unchanged) != FESCUE_OK)
        night_trouble(night);
    if (unchanged) {
        if (task_note_unchanged(night, task) != FESCUE_OK)
            night_trouble(night);
        return;
    }
    task->goes_on = access(task->checkpoint, F_OK) == 0;
    order_shrink(night, task);
    options_words(&task->options, task->as_run);
    outcome_sum(night->context, task->job->output, task->record_before);
    fescue_status status = crew_begin(night, task);
    if (status != FESCUE_OK)
        task_fail(night, task, status);
}

/* ---- the night -----------------------------------------------------------------------------------------------------
 */

static void limits_set(struct fescue_night *night)
{
    const struct fescue_night_options *options = &night->plan.options;
    struct sysinfo machine;
    double for_machine = sysinfo(&machine) == 0 ? (double)machine.totalram * machine.mem_unit : 4e9;
    double lasting = options->lasting > 0 ? options->lasting : INFINITY;
    long processors = sysconf(_SC_NPROCESSORS_ONLN);
    night->memory = options->memory > 0 ? (double)options->memory : memory_share * for_machine;
    night->threads = options->threads != FESCUE_AUTO ? (size_t)options->threads
                     : processors > 0                ? (size_t)processors
                                                     : 1;
    lasting = fmin(lasting, moment_seconds(&night->plan.until));
    if (!isfinite(lasting))
        return;
    night->ends = clock_wall() + lasting;
    if (night->plan.until.kind == MOMENT_CLOCK)
        night->ends_on_wall = (double)time(NULL) + moment_seconds(&night->plan.until);
}

static bool is_over(const struct fescue_night *night)
{
    return is_cancelled(night->context) || (night->ends > 0 && clock_wall() >= night->ends) ||
           (night->ends_on_wall > 0 && (double)time(NULL) >= night->ends_on_wall);
}

static bool is_anything_running(const struct fescue_night *night)
{
    for (size_t k = 0; k < night->plan.count; k++)
        if (night->tasks[k].state == STATE_RUNNING)
            return true;
    return false;
}

static void night_work(struct fescue_night *night)
{
    for (bool changed = true;;) {
        bool over = is_over(night);
        struct task *task;
        while (changed && !over && (task = order_next(night)) != NULL) {
            task_begin(night, task);
            over = is_over(night);
        }
        if (over)
            crew_ask_to_stop(night);
        if (!is_anything_running(night))
            return;
        changed = crew_watch(night);
    }
}

/* Those not begun say so. */
static void waiting_tell(struct fescue_night *night)
{
    const char *why = is_cancelled(night->context) ? "the night was asked to stop" : "the time was over";
    for (size_t k = 0; k < night->plan.count; k++) {
        struct task *task = &night->tasks[k];
        if (task->state == STATE_WAITING)
            snprintf(task->message, sizeof task->message, "not begun: %s",
                     is_over(night) ? why : "it waits for a stopped job");
        if (task->state != STATE_WAITING && task->state != STATE_SKIPPED)
            continue;
        if (ledger_attempt_begin(&night->ledger, task) != FESCUE_OK ||
            ledger_attempt_end(&night->ledger, task) != FESCUE_OK)
            night_trouble(night);
        task->attempt = 0;
    }
}

static fescue_status fresh_find(struct fescue_night *night);

static fescue_status night_hold(struct fescue_night *night)
{
    fescue_status status;
    TRY(ledger_open(night->context, night->ledger_path, &night->ledger));
    TRY(left_settle_all(night));
    TRY(fresh_find(night));
    TRY(ledger_night_begin(&night->ledger, night->plan.options.again));
    TRY(order_guess(night));
    time_words(night->began);
    night_work(night);
    time_words(night->ended);
    waiting_tell(night);
    TRY(morning_write(night));
    static const char *const words[] = {[FESCUE_OK] = "done", [FESCUE_SOME_FAILED] = "failed"};
    fescue_status verdict = night_verdict(night);
    TRY(ledger_night_end(&night->ledger, verdict == FESCUE_STOPPED ? "stopped" : words[verdict]));
done:
    ledger_close(&night->ledger);
    return status;
}

static void integer_take(void *data, sqlite3_stmt *row)
{
    *(int64_t *)data = sqlite3_column_int64(row, 0);
}

/* The last night that came to its end: with --again, what later ones did needs not be done again. */
static fescue_status fresh_find(struct fescue_night *night)
{
    return ledger_ask(&night->ledger, integer_take, &night->fresh_since,
                      "SELECT coalesce(max(number), 0) FROM night WHERE state IN ('done', 'failed')", "");
}

fescue_status fescue_night_run(fescue_night *night)
{
    struct lock lock = {0};
    fescue_status status;
    TRY(lock_take(night->context, night->lock_path, night->plan.path, short_patience, &lock));
    limits_set(night);
    TRY(night_hold(night));
    if (night->trouble[0] != '\0')
        TRY(FAIL(night->context, FESCUE_CANNOT_WRITE, "%s", night->trouble));
    status = night_verdict(night);
done:
    lock_give(night->context, &lock);
    return status;
}

fescue_status fescue_night_history(fescue_night *night, char **out)
{
    struct text text = {.context = night->context};
    fescue_status status;
    *out = NULL;
    if (access(night->ledger_path, F_OK) != 0) {
        text_add(&text, "no night yet\n");
        return text_finish(&text, out);
    }
    TRY(ledger_open(night->context, night->ledger_path, &night->ledger));
    status = ledger_history(&night->ledger, &text);
    fescue_status made = text_finish(&text, out);
    if (status == FESCUE_OK)
        status = made;
    if (status != FESCUE_OK)
        GIVE(night->context, out);
done:
    ledger_close(&night->ledger);
    return status;
}
