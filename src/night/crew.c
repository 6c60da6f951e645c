/* SPDX-License-Identifier: MIT
 *
 * The children: begun, watched, and what became of them.
 *
 * A child's end of the pipe closes when the child ends, however that happens, so waiting for pipes is waiting for
 * children, without signals. While waiting, what each holds in memory is looked at every `look` seconds: the library
 * keeps to its limit by itself, and what other libraries take shows here. One that holds more than its limit and some
 * margin is ended. When all together hold more than the night has, the one that is furthest above what was guessed for
 * it is ended and runs again, alone.
 */
#include "night/night_internal.h"

#include <errno.h>
#include <fcntl.h>
#include <math.h>
#include <poll.h>
#include <signal.h>
#include <stdio.h>
#include <string.h>
#include <sys/resource.h>
#include <sys/wait.h>
#include <unistd.h>

static const double look = 0.1;  /* seconds: a job takes some hundred MB in that time at most */
static const double grace = 120; /* seconds for a child to write its checkpoint before it is ended */
/* What program and libraries hold beside the tables and fits that are counted, and what the allocator rounds up. */
static const double margin_bytes = 64e6, margin_share = 1.1;

/* ---- beginning -----------------------------------------------------------------------------------------------------
 */

static void report_take(struct task *task)
{
    char text[2 * SENTENCE_SIZE + 2], *line = text;
    size_t used = 0;
    ptrdiff_t got;
    do {
        got = read(task->pipe, text + used, sizeof text - 1 - used);
        used += got > 0 ? (size_t)got : 0;
    } while (got > 0 || (got < 0 && errno == EINTR));
    text[used] = '\0';
    close(task->pipe);
    task->pipe = -1;
    char *end = strchrnul(line, '\n');
    snprintf(task->message, sizeof task->message, "%.*s", (int)(end - line), line);
    line = *end == '\0' ? end : end + 1;
    end = strchrnul(line, '\n');
    snprintf(task->warning, sizeof task->warning, "%.*s", (int)(end - line), line);
}

fescue_status crew_begin(struct fescue_night *night, struct task *task)
{
    int ends[2] = {-1, -1};
    pid_t self = getpid();
    fescue_status status;
    task->state = STATE_RUNNING;
    task->message[0] = task->warning[0] = task->flags[0] = '\0';
    task->asked_at = 0;
    task->resident = 0;
    task->is_over_memory = task->is_killed = task->is_crowded = false;
    task->attempt = 0;
    if (ledger_attempt_begin(&night->ledger, task) != FESCUE_OK)
        night_trouble(night); /* the job is worth more than the line about it */
    if (pipe2(ends, O_CLOEXEC) != 0)
        TRY(FAIL(night->context, FESCUE_NO_MEMORY, "%s: no pipe to a child: %s", task->job->name, strerror(errno)));
    task->begun = clock_wall();
    task->process = fork();
    if (task->process == 0)
        child_run(task, self, ends[1]);
    if (task->process < 0)
        TRY(FAIL(night->context, FESCUE_NO_MEMORY, "%s: no child process: %s", task->job->name, strerror(errno)));
    task->pipe = ends[0];
    ends[0] = -1;
done:
    for (size_t k = 0; k < 2; k++)
        if (ends[k] >= 0)
            close(ends[k]);
    return status;
}

/* ---- ending --------------------------------------------------------------------------------------------------------
 */

static fescue_status status_of_exit(int code)
{
#define STATUS_OF_EXIT(name, number, text)                                                                             \
    if (code == number)                                                                                                \
        return name;
    FESCUE_STATUS_LIST(STATUS_OF_EXIT)
#undef STATUS_OF_EXIT
    return FESCUE_DEFECT;
}

/* A child that a signal ended says nothing itself. */
static void death_tell(struct task *task, int number)
{
    char held[WORD_SIZE], most[WORD_SIZE], limit[WORD_SIZE];
    bytes_words((double)task->resident, held);
    bytes_words((double)task->memory, most);
    bytes_words(task->memory_limit, limit);
    task->status = FESCUE_DEFECT;
    if (task->is_over_memory) {
        task->status = FESCUE_NO_MEMORY;
        snprintf(task->message, sizeof task->message, "ended: it held %s, over its memory limit of %s", held, limit);
    } else if (task->is_crowded) {
        task->status = FESCUE_STOPPED;
        snprintf(task->message, sizeof task->message, "ended at %s, more than was guessed; it runs again alone", held);
    } else if (task->is_killed) {
        task->status = FESCUE_STOPPED;
        snprintf(task->message, sizeof task->message, "ended: it did not stop when it was asked to");
    } else if (number == SIGKILL) {
        task->status = FESCUE_NO_MEMORY;
        snprintf(task->message, sizeof task->message,
                 "killed from outside, at %s: by the system for want of memory, or by somebody", most);
    } else {
        snprintf(task->message, sizeof task->message, "died of signal %d (%s)", number, strsignal(number));
    }
}

static void outcome_take(struct fescue_night *night, struct task *task)
{
    if (!outcome_read(night->context, task->job->output, &task->outcome)) {
        task->state = STATE_FAILED;
        task->status = FESCUE_CANNOT_WRITE;
        snprintf(task->message, sizeof task->message, "%s/run.json is not there, or no record", task->job->output);
        return;
    }
    if (drift_judge(night, task) != FESCUE_OK)
        night_trouble(night);
}

static void task_end(struct fescue_night *night, struct task *task)
{
    struct rusage usage = {0};
    int how = 0;
    report_take(task);
    while (wait4(task->process, &how, 0, &usage) < 0 && errno == EINTR)
        ;
    task->process = 0;
    task->seconds = clock_wall() - task->begun;
    task->cpu = (double)usage.ru_utime.tv_sec + (double)usage.ru_stime.tv_sec +
                1e-6 * (double)(usage.ru_utime.tv_usec + usage.ru_stime.tv_usec);
    task->memory = (int64_t)usage.ru_maxrss * 1024;
    task->status = WIFEXITED(how) ? status_of_exit(WEXITSTATUS(how)) : FESCUE_DEFECT;
    if (WIFSIGNALED(how))
        death_tell(task, WTERMSIG(how));
    task->state = task->status == FESCUE_OK        ? STATE_DONE
                  : task->status == FESCUE_STOPPED ? STATE_STOPPED
                                                   : STATE_FAILED;
    if (task->state == STATE_DONE)
        outcome_take(night, task);
    if (task->outcome.cpu > task->cpu) /* with what earlier attempts did, of which a checkpoint knew */
        task->cpu = task->outcome.cpu;
    if (ledger_attempt_end(&night->ledger, task) != FESCUE_OK)
        night_trouble(night);
    if (task->is_crowded && task->state == STATE_STOPPED && !task->alone) {
        task->state = STATE_WAITING;
        task->alone = true;
    }
}

/* ---- watching ------------------------------------------------------------------------------------------------------
 */

/* Without what is mapped from files: that the system takes back when it wants to. */
static uint64_t resident_of(pid_t process)
{
    char path[64], text[128] = "";
    unsigned long long pages = 0, of_files = 0;
    snprintf(path, sizeof path, "/proc/%ld/statm", (long)process);
    int descriptor = open(path, O_RDONLY | O_CLOEXEC);
    if (descriptor < 0)
        return 0;
    ptrdiff_t got = read(descriptor, text, sizeof text - 1);
    close(descriptor);
    if (got <= 0 || sscanf(text, "%*u %llu %llu", &pages, &of_files) != 2 || pages < of_files)
        return 0;
    return (uint64_t)(pages - of_files) * (uint64_t)sysconf(_SC_PAGESIZE);
}

static void memory_watch(struct fescue_night *night)
{
    struct task *worst = NULL;
    double together = 0, most = 0;
    size_t running = 0;
    for (size_t k = 0; k < night->plan.count; k++) {
        struct task *task = &night->tasks[k];
        if (task->state != STATE_RUNNING)
            continue;
        double now = (double)resident_of(task->process);
        task->resident = now > (double)task->resident ? (uint64_t)now : task->resident;
        together += now;
        running++;
        if (now > task->memory_limit * margin_share + margin_bytes) {
            task->is_over_memory = true;
            kill(task->process, SIGKILL);
        } else if (now - task->guess_memory > most) {
            most = now - task->guess_memory;
            worst = task;
        }
    }
    if (together > night->memory + margin_bytes && running > 1 && worst != NULL && !worst->is_killed) {
        worst->is_crowded = true;
        kill(worst->process, SIGKILL);
    }
}

/* Ends the stubborn. */
static void patience_watch(struct fescue_night *night)
{
    for (size_t k = 0; k < night->plan.count; k++) {
        struct task *task = &night->tasks[k];
        if (task->state == STATE_RUNNING && task->asked_at > 0 && clock_wall() - task->asked_at > grace) {
            task->is_killed = true;
            kill(task->process, SIGKILL);
        }
    }
}

void crew_ask_to_stop(struct fescue_night *night)
{
    for (size_t k = 0; k < night->plan.count; k++) {
        struct task *task = &night->tasks[k];
        if (task->state != STATE_RUNNING || task->asked_at > 0)
            continue;
        task->asked_at = clock_wall();
        kill(task->process, SIGTERM);
    }
}

bool crew_watch(struct fescue_night *night)
{
    enum { POLLS = 1024 }; /* the most workers a night has */
    struct pollfd polls[POLLS];
    struct task *tasks[POLLS];
    nfds_t count = 0;
    bool ended = false;
    for (size_t k = 0; k < night->plan.count && count < POLLS; k++)
        if (night->tasks[k].state == STATE_RUNNING) {
            tasks[count] = &night->tasks[k];
            polls[count++] = (struct pollfd){.fd = night->tasks[k].pipe, .events = POLLIN};
        }
    int ready = poll(polls, count, (int)(1000 * look));
    for (nfds_t k = 0; k < count && ready > 0; k++)
        if (polls[k].revents != 0) {
            task_end(night, tasks[k]);
            ended = true;
        }
    memory_watch(night);
    patience_watch(night);
    return ended;
}
