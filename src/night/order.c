/* SPDX-License-Identifier: MIT
 *
 * Which job begins next, and with what.
 *
 * A job waits for those it is `after`. Of those that wait for none, the one with the nearest deadline goes first, then
 * the one that is guessed to take longest (Graham 1969, "Bounds on multiprocessing timing anomalies": the longest first
 * ends at most a third later than the best order), then as the plan has them. Small jobs run side by side with a worker
 * each, which wastes nothing on waiting for one another; results do not depend on the number of workers. A job that
 * would take longer than its share of all the work that is left, or more than half the memory, runs alone with all
 * workers; while it comes next nothing else begins.
 *
 * Guesses: what the job's last run took, by the size of its input now and then; for a new job the pace of others, and
 * for a new ledger a guess at that. A guess that is wrong costs order and nothing else: limits hold anyway.
 *
 * When the time that is left is less than the guess, the cross-validation shrinks before the fits do.
 */
#include "night/night_internal.h"

#include <math.h>
#include <stdio.h>
#include <stdlib.h>
#include <string.h>
#include <sys/stat.h>
#include <time.h>

/* Without any history: seconds of processors a byte of text, and what a packed byte stands for. Measured on the demo
   tables, about; bytes of memory a byte of text likewise. */
static const double first_pace = 1e-5, packed = 4, memory_pace = 15, memory_least = 6e7;
/* Room for what grew since last time. */
static const double memory_slack = 1.2;
/* Cross-validation is about so many times the fits before it; with FOLDS_FEW folds most of that is saved. */
static const double folds_weight = 3;
enum { FOLDS_FEW = 2 };
/* A run is expected to take up to this much longer than guessed. */
static const double time_slack = 1.25;

/* ---- guesses -------------------------------------------------------------------------------------------------------
 */

static bool is_packed(const char *path)
{
    size_t length = strlen(path);
    return length > 3 && strcmp(path + length - 3, ".gz") == 0;
}

static fescue_status task_guess(struct fescue_night *night, struct task *task)
{
    struct attempt last;
    struct stat found;
    const char *input = task->job->input;
    double disk = stat(input, &found) == 0 ? (double)found.st_size : 0;
    double size = is_packed(input) ? packed * disk : disk;
    fescue_status status;
    TRY(ledger_last_done(&night->ledger, task->job->name, &last));
    task->guess_cpu = night->pace > 0 ? night->pace * disk : first_pace * size;
    task->guess_memory = memory_least + memory_pace * size;
    if (last.number != 0 && last.input_bytes > 0 && last.cpu >= 0) {
        double growth = disk / (double)last.input_bytes;
        task->guess_cpu = last.cpu * growth;
        task->guess_memory = fmax((double)last.memory, memory_least) * fmax(growth, 1) * memory_slack;
    }
    if (task->job->has_memory && task->job->options.memory_limit > 0)
        task->guess_memory = (double)task->job->options.memory_limit;
    task->guess_memory = fmin(task->guess_memory, night->memory);
done:
    return status;
}

fescue_status order_guess(struct fescue_night *night)
{
    fescue_status status = FESCUE_OK;
    night->pace = ledger_pace(&night->ledger);
    for (size_t k = 0; k < night->plan.count && status == FESCUE_OK; k++)
        status = task_guess(night, &night->tasks[k]);
    return status;
}

/* ---- time ----------------------------------------------------------------------------------------------------------
 */

/* Seconds to the next such time of day; what has just passed is tomorrow's. */
static double seconds_until(const struct moment *moment)
{
    time_t now = time(NULL), then;
    struct tm parts;
    if (localtime_r(&now, &parts) == NULL)
        return INFINITY;
    parts.tm_hour = (int)(moment->seconds / 3600);
    parts.tm_min = (int)(moment->seconds / 60) % 60;
    parts.tm_sec = 0;
    parts.tm_isdst = -1;
    then = mktime(&parts);
    if (then <= now) {
        parts.tm_mday++;
        parts.tm_isdst = -1;
        then = mktime(&parts);
    }
    return (double)(then - now);
}

double moment_seconds(const struct moment *moment)
{
    if (moment->kind == MOMENT_NONE)
        return INFINITY;
    return moment->kind == MOMENT_AFTER ? moment->seconds : seconds_until(moment);
}

double order_time_left(const struct fescue_night *night, const struct task *task)
{
    double left = night->ends > 0 ? night->ends - clock_wall() : INFINITY;
    return fmin(left, moment_seconds(&task->job->deadline));
}

/* ---- what goes next ------------------------------------------------------------------------------------------------
 */

static bool is_done(enum state state)
{
    return state == STATE_DONE || state == STATE_UNCHANGED;
}

/* Whether the task waits for none; one that never will be able to begin is skipped. */
static bool is_ready(struct fescue_night *night, struct task *task)
{
    bool is_ready = task->state == STATE_WAITING;
    for (size_t k = 0; k < night->plan.count && task->state == STATE_WAITING; k++) {
        const struct task *other = &night->tasks[k];
        if (!task->job->after[k])
            continue;
        is_ready = is_ready && is_done(other->state);
        if (other->state == STATE_FAILED || other->state == STATE_SKIPPED) {
            task->state = STATE_SKIPPED;
            snprintf(task->message, sizeof task->message, "not begun: it comes after %s, which %s", other->job->name,
                     other->state == STATE_FAILED ? "failed" : "was skipped");
        }
    }
    return is_ready && task->state == STATE_WAITING;
}

/* Whether a goes before b; the earlier one at equals. */
static bool goes_before(const struct task *a, const struct task *b)
{
    double of_a = moment_seconds(&a->job->deadline), of_b = moment_seconds(&b->job->deadline);
    if (of_a != of_b && (isfinite(of_a) || isfinite(of_b)))
        return of_a < of_b;
    return a->guess_cpu > b->guess_cpu;
}

struct load {
    size_t running, ready, threads; /* threads: in use */
    double memory, work;            /* memory in use; seconds that running and waiting tasks were guessed to take */
    bool has_alone;
};

static struct load load_now(struct fescue_night *night, struct task **first)
{
    struct load load = {0};
    *first = NULL;
    for (size_t k = 0; k < night->plan.count; k++) {
        struct task *task = &night->tasks[k];
        bool ready = is_ready(night, task);
        if (task->state == STATE_RUNNING) {
            load.running++;
            load.threads += task->threads;
            load.memory += task->guess_memory;
            load.has_alone = load.has_alone || task->alone;
        }
        if (task->state == STATE_RUNNING || task->state == STATE_WAITING)
            load.work += task->guess_cpu;
        load.ready += ready;
        if (ready && (*first == NULL || goes_before(task, *first)))
            *first = task;
    }
    return load;
}

static size_t threads_for(const struct fescue_night *night, const struct load *load, const struct task *task)
{
    size_t threads = night->threads;
    if (task->options.threads != FESCUE_AUTO && (size_t)task->options.threads < threads)
        return (size_t)task->options.threads;
    if (task->alone || task->job->options.threads != FESCUE_AUTO)
        return threads;
    size_t free = threads - load->threads, each = free / (load->ready > 0 ? load->ready : 1);
    return each > 1 ? each : 1;
}

struct task *order_next(struct fescue_night *night)
{
    struct task *task;
    struct load load = load_now(night, &task);
    if (task == NULL || load.has_alone || load.threads >= night->threads)
        return NULL;
    bool is_large =
        task->guess_memory > night->memory / 2 || task->guess_cpu * (double)night->threads > load.work * (1 + 1e-9);
    task->alone = task->alone || is_large;
    if (task->alone && load.running > 0)
        return NULL;
    task->options = task->job->options;
    task->threads = threads_for(night, &load, task);
    if (load.running > 0 &&
        (load.threads + task->threads > night->threads || load.memory + task->guess_memory > night->memory))
        return NULL;
    task->options.threads = (int64_t)task->threads;
    task->options.checkpoint = task->options.checkpoint_every > 0 ? task->checkpoint : NULL;
    task->memory_limit = task->options.memory_limit > 0 ? (double)task->options.memory_limit : night->memory;
    return task;
}

/* ---- when time is short --------------------------------------------------------------------------------------------
 */

void order_shrink(const struct fescue_night *night, struct task *task)
{
    double left = order_time_left(night, task), need = task->guess_cpu / (double)task->threads * time_slack;
    double deadline = moment_seconds(&task->job->deadline);
    task->shrunk[0] = '\0';
    if (isfinite(deadline) && (task->options.time_limit <= 0 || deadline < task->options.time_limit))
        task->options.time_limit = deadline;
    bool has_few = task->options.folds != FESCUE_AUTO && task->options.folds <= FOLDS_FEW;
    if (need <= left || task->options.folds == 0 || (has_few && need <= folds_weight * left))
        return;
    task->options.folds = need <= folds_weight * left ? FOLDS_FEW : 0;
    snprintf(task->shrunk, sizeof task->shrunk, "%d folds of cross-validation, for want of time",
             (int)task->options.folds);
}
