/* SPDX-License-Identifier: MIT
 *
 * The workers. The calling thread is worker 0; the others are threads that sleep between rounds of work.
 *
 * Who takes which block is left to chance (an atomic counter), and it does not matter: block bounds are fixed by the
 * caller, every block writes to a place of its own, and team_sum, the only place that adds over blocks, goes in block
 * order. A build over several ranks adds its all-reduce there and nowhere else.
 *
 * A round costs one wake-up. Solvers call rounds back to back, so a thread first looks out for the next one for some
 * microseconds before it goes to sleep.
 */
#include "base/context_internal.h"

#include <assert.h>
#include <sched.h>
#include <signal.h>
#include <string.h>

/* About 20 microseconds, the price of one sleep and wake-up: looking out longer could cost more than it saves. */
enum { LOOK_OUT = 500 };

static inline void look_away(void)
{
#if defined(__x86_64__) || defined(__i386__)
    __builtin_ia32_pause();
#endif
}

static void blocks_work(struct team *team, size_t worker)
{
    for (;;) {
        size_t block = atomic_fetch_add(&team->next_block, 1);
        if (block >= team->blocks)
            return;
        team->task(team->job, block, worker);
    }
}

/* Waits for a round other than `seen` and returns its number; *leaving tells whether it is the call to go home. */
static uint64_t round_await(struct team *team, uint64_t seen, bool *leaving)
{
    for (int look = 0; look < LOOK_OUT && atomic_load(&team->round) == seen; look++)
        look_away();
    pthread_mutex_lock(&team->lock);
    while (atomic_load(&team->round) == seen)
        pthread_cond_wait(&team->called, &team->lock);
    seen = atomic_load(&team->round);
    *leaving = team->leaving;
    pthread_mutex_unlock(&team->lock);
    return seen;
}

static void *member_live(void *argument)
{
    const struct team_member *member = argument;
    struct team *team = member->team;
    bool leaving = false;
    for (uint64_t seen = 0;;) {
        seen = round_await(team, seen, &leaving);
        if (leaving)
            return NULL;
        blocks_work(team, member->worker);
        pthread_mutex_lock(&team->lock);
        if (atomic_fetch_sub(&team->busy, 1) == 1)
            pthread_cond_signal(&team->finished);
        pthread_mutex_unlock(&team->lock);
    }
}

static void round_call(struct team *team)
{
    pthread_mutex_lock(&team->lock);
    atomic_store(&team->busy, team->workers - 1);
    atomic_fetch_add(&team->round, 1);
    pthread_cond_broadcast(&team->called);
    pthread_mutex_unlock(&team->lock);
}

static void round_finish(struct team *team)
{
    for (int look = 0; look < LOOK_OUT && atomic_load(&team->busy) != 0; look++)
        look_away();
    pthread_mutex_lock(&team->lock);
    while (atomic_load(&team->busy) != 0)
        pthread_cond_wait(&team->finished, &team->lock);
    pthread_mutex_unlock(&team->lock);
}

void team_open(struct team *team)
{
    pthread_mutex_init(&team->lock, NULL);
    pthread_cond_init(&team->called, NULL);
    pthread_cond_init(&team->finished, NULL);
    team->workers = 1;
}

/* Sends all threads home. */
static void team_dismiss(struct team *team)
{
    team->leaving = true;
    round_call(team);
    for (size_t k = 1; k < team->workers; k++)
        pthread_join(team->member[k].thread, NULL);
    team->leaving = false;
    atomic_store(&team->round, 0);
    team->workers = 1;
}

void team_close(struct team *team)
{
    team_dismiss(team);
    pthread_cond_destroy(&team->finished);
    pthread_cond_destroy(&team->called);
    pthread_mutex_destroy(&team->lock);
}

/* Signals go to the threads of the program around us, never to a worker. */
static int member_start(struct team *team, size_t worker)
{
    struct team_member *member = &team->member[worker];
    *member = (struct team_member){.team = team, .worker = worker};
    sigset_t all, before;
    sigfillset(&all);
    pthread_sigmask(SIG_SETMASK, &all, &before);
    int error = pthread_create(&member->thread, NULL, member_live, member);
    pthread_sigmask(SIG_SETMASK, &before, NULL);
    return error;
}

static size_t processors_allowed(void)
{
    cpu_set_t set;
    if (sched_getaffinity(0, sizeof set, &set) != 0)
        return 1;
    int count = CPU_COUNT(&set);
    return count < 1 ? 1 : (size_t)count;
}

fescue_status team_resize(fescue_context *context, size_t workers)
{
    struct team *team = &context->team;
    assert(!team->running);
    if (workers == 0)
        workers = processors_allowed();
    if (workers > TEAM_MOST_WORKERS)
        workers = TEAM_MOST_WORKERS;
    if (workers == team->workers)
        return FESCUE_OK;
    team_dismiss(team);
    while (team->workers < workers) {
        int error = member_start(team, team->workers);
        if (error != 0) {
            size_t started = team->workers;
            team_dismiss(team);
            return FAIL(context, FESCUE_NO_MEMORY, "of %zu threads only %zu could be started: %s", workers, started,
                        error_text(context, error));
        }
        team->workers++;
    }
    return FESCUE_OK;
}

size_t team_workers(const fescue_context *context)
{
    return context->team.workers;
}

void team_run(fescue_context *context, size_t blocks, team_task *task, void *job)
{
    struct team *team = &context->team;
    assert(!team->running);
    team->running = true;
    team->task = task;
    team->job = job;
    team->blocks = blocks;
    atomic_store(&team->next_block, 0);
    bool alone = team->workers == 1 || blocks < 2;
    if (!alone)
        round_call(team);
    blocks_work(team, 0);
    if (!alone)
        round_finish(team);
    team->running = false;
}

void team_sum(fescue_context *context, const double *partial, size_t blocks, size_t width, double *out)
{
    (void)context; /* ranks, once there are several, are known to the context */
    memset(out, 0, width * sizeof *out);
    for (size_t block = 0; block < blocks; block++)
        for (size_t k = 0; k < width; k++)
            out[k] += partial[block * width + k];
}
