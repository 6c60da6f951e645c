/* SPDX-License-Identifier: MIT
 *
 * What a child process does: one job, from its table to its files, in a context of its own.
 *
 * It is a fork without an exec, so it begins with a copy of the night's memory and uses none of it but the task. It
 * closes every descriptor of the night, takes the signals for itself, ends when the night ends (by the same signal that
 * would stop it: with a checkpoint), and lets the system take it first when memory is short. What there is to say goes
 * through the pipe: a line that says what failed and a line of warning, both perhaps empty; then its exit status.
 */
#include "night/night_internal.h"

#include <fcntl.h>
#include <signal.h>
#include <stdio.h>
#include <string.h>
#include <sys/prctl.h>
#include <unistd.h>

/* How long to wait for another process at work on the same output: one that was asked to stop, as a rule, and is
   writing its checkpoint. */
static const double patience = 60;

struct telling {
    char warning[SENTENCE_SIZE];
};

/* The handler's only way to the context. */
static fescue_context *_Atomic working;

static void signal_take(int number)
{
    (void)number;
    fescue_context *context = working;
    if (context != NULL)
        fescue_context_cancel(context);
}

static void signals_set(void)
{
    static const int asking[] = {SIGINT, SIGTERM, SIGHUP};
    struct sigaction action = {.sa_handler = signal_take}, before;
    for (size_t k = 0; k < sizeof asking / sizeof *asking; k++)
        if (sigaction(asking[k], NULL, &before) == 0 && before.sa_handler != SIG_IGN)
            sigaction(asking[k], &action, NULL);
}

/* Where the system does not allow it, it takes whom it likes. */
static void offer_to_system(void)
{
    static const char score[] = "500";
    int descriptor = open("/proc/self/oom_score_adj", O_WRONLY | O_CLOEXEC);
    if (descriptor < 0)
        return;
    (void)(write(descriptor, score, sizeof score - 1) < 0);
    close(descriptor);
}

static void surroundings_leave(pid_t night, int pipe)
{
    if (pipe > 3)
        close_range(3, (unsigned)pipe - 1, 0);
    close_range((unsigned)pipe + 1, ~0U, 0);
    prctl(PR_SET_PDEATHSIG, SIGTERM);
    if (getppid() != night) /* it ended before that */
        _exit(fescue_status_exit_code(FESCUE_STOPPED));
    offer_to_system();
}

/* The last sentence of the log that tells of a checkpoint that was not used. */
static void log_take(void *data, const char *sentence)
{
    struct telling *telling = data;
    if (strstr(sentence, "starting over") != NULL)
        snprintf(telling->warning, sizeof telling->warning, "%s", sentence);
}

static fescue_status job_run(fescue_context *context, const struct task *task)
{
    const char *place = task->job->output;
    fescue_hold *hold = NULL;
    fescue_table *table = NULL;
    fescue_fill *fill = NULL;
    fescue_status status;
    TRY(fescue_table_read(context, task->job->input, &task->options, &table));
    TRY(fescue_place_hold(context, place, patience, &hold));
    TRY(fescue_fill_table(table, &task->options, &fill));
    if (is_cancelled(context))
        TRY(FAIL(context, FESCUE_STOPPED, "asked to stop"));
    TRY(fescue_fill_write(fill, place));
done:
    fescue_fill_destroy(&fill);
    fescue_table_destroy(&table);
    fescue_place_release(&hold);
    return status;
}

static void report(int pipe, const char *message, const char *warning)
{
    char text[2 * SENTENCE_SIZE + 2];
    int length = snprintf(text, sizeof text, "%s\n%s\n", message, warning);
    (void)(write(pipe, text, (size_t)length) < 0); /* a pipe takes so much at once */
}

_Noreturn void child_run(const struct task *task, pid_t night, int pipe)
{
    struct telling telling = {{0}};
    struct fescue_hooks hooks = {.data = &telling, .log = log_take};
    fescue_context *context = NULL;
    signals_set();
    surroundings_leave(night, pipe);
    fescue_status status = fescue_context_create(&hooks, &context);
    if (status == FESCUE_OK) {
        working = context;
        status = job_run(context, task);
    }
    const char *message = context == NULL ? fescue_status_text(status) : fescue_failure_text(context);
    report(pipe, status == FESCUE_OK ? "" : message, telling.warning);
    _exit(fescue_status_exit_code(status));
}
