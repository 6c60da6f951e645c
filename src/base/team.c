/* SPDX-License-Identifier: MIT
 *
 * The workers. The calling thread is worker 0; the others are threads that sleep between rounds of work.
 *
 * Each worker begins with the same share of the blocks whenever there are as many, so that it finds in its own cache
 * what it has left there in the round before, and then helps others with theirs. Who takes which block is thus left to
 * chance, and it does not matter: block bounds are fixed by the caller, every block writes to a place of its own, and
 * team_sum, the only place that adds over blocks, goes in block order. A build over several ranks adds its all-reduce
 * there and nowhere else.
 *
 * A worker joins a round while it is open, and the caller, who works too, closes it when no block is left and waits for
 * those who have joined. Whoever comes later, because the machine is busy with other things, is not waited for: on a
 * machine without a free processor a round costs hardly more than its work.
 *
 * Solvers call rounds back to back, so a thread first looks out for what it waits for before it goes to sleep: for as
 * long as a sleep and a wake-up take, so that it never wastes more than about what it could have saved.
 */
#include "base/context_internal.h"

#include <assert.h>
#include <sched.h>
#include <signal.h>
#include <string.h>

/* Seconds; from the call to the first work of one who sleeps they measure 20 to 80 microseconds. */
static const double look_out = 50e-6;
enum { LOOKS_A_CLOCK = 8 }; /* a clock takes as long as one or two looks */

static inline void look_away(void)
{
#if defined(__x86_64__) || defined(__i386__)
    __builtin_ia32_pause();
#endif
}

static bool has_begun(struct team *team, uint64_t seen)
{
    return atomic_load(&team->round) != seen;
}

static bool has_finished(struct team *team, uint64_t none)
{
    (void)none;
    return atomic_load(&team->busy) == 0;
}

/* Until it is so, but not for long. */
static void look_for(struct team *team, bool (*is_so)(struct team *team, uint64_t seen), uint64_t seen)
{
    if (is_so(team, seen))
        return;
    for (double end = clock_wall() + look_out; clock_wall() < end;)
        for (int look = 0; look < LOOKS_A_CLOCK; look++) {
            if (is_so(team, seen))
                return;
            look_away();
        }
}

/* Its own share, and then what is left of those of the others. */
static void blocks_work(struct team *team, size_t worker)
{
    for (size_t k = 0; k < team->workers; k++) {
        struct team_member *of = &team->member[(worker + k) % team->workers];
        size_t block;
        while ((block = atomic_fetch_add(&of->next_block, 1)) < of->last_block)
            team->task(team->job, block, worker);
    }
}

static void blocks_share(struct team *team, size_t blocks)
{
    for (size_t k = 0; k < team->workers; k++) {
        team->member[k].last_block = blocks * (k + 1) / team->workers;
        atomic_store(&team->member[k].next_block, blocks * k / team->workers);
    }
}

/* Waits for a round other than *seen that is still open, and joins it; false when it is the call to go home. */
static bool round_join(struct team *team, uint64_t *seen)
{
    bool joined, leaving;
    do {
        look_for(team, has_begun, *seen);
        pthread_mutex_lock(&team->lock);
        while (!has_begun(team, *seen))
            pthread_cond_wait(&team->called, &team->lock);
        *seen = atomic_load(&team->round);
        leaving = team->leaving;
        joined = team->open;
        if (joined)
            atomic_fetch_add(&team->busy, 1);
        pthread_mutex_unlock(&team->lock);
    } while (!joined && !leaving);
    return joined;
}

static void round_leave(struct team *team)
{
    pthread_mutex_lock(&team->lock);
    if (atomic_fetch_sub(&team->busy, 1) == 1)
        pthread_cond_signal(&team->finished);
    pthread_mutex_unlock(&team->lock);
}

static void *member_live(void *argument)
{
    const struct team_member *member = argument;
    struct team *team = member->team;
    for (uint64_t seen = 0; round_join(team, &seen);) {
        blocks_work(team, member->worker);
        round_leave(team);
    }
    return NULL;
}

/* Calls as many as there is work for; leaving: all, to go home. */
static void round_open(struct team *team, size_t others, bool leaving)
{
    pthread_mutex_lock(&team->lock);
    team->open = !leaving;
    team->leaving = leaving;
    atomic_fetch_add(&team->round, 1);
    if (others < team->workers - 1)
        for (size_t k = 0; k < others; k++)
            pthread_cond_signal(&team->called);
    else
        pthread_cond_broadcast(&team->called);
    pthread_mutex_unlock(&team->lock);
}

static void round_close(struct team *team)
{
    pthread_mutex_lock(&team->lock);
    team->open = false;
    pthread_mutex_unlock(&team->lock);
    look_for(team, has_finished, 0);
    pthread_mutex_lock(&team->lock);
    while (!has_finished(team, 0))
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
    round_open(team, team->workers - 1, true);
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
    member->team = team;
    member->worker = worker;
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
    blocks_share(team, blocks);
    bool alone = team->workers == 1 || blocks < 2;
    if (!alone)
        round_open(team, blocks - 1, false);
    blocks_work(team, 0);
    if (!alone)
        round_close(team);
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
