/* SPDX-License-Identifier: MIT
 *
 * What two workers can give at most, whatever else the machine does meanwhile.
 *
 *     bench_shares [cells ...]           default 1e6 1e7
 *     BENCH_SHARES    only what holds this in its name, such as "fit, alternating"    [all]
 *
 * Linked with --wrap=team_run, so that every call for work comes here. The team is of two, and the code sees two, but
 * one thread does all the blocks, in order, under its own processor clock, which stands still while others have the
 * machine. What was spent outside of blocks is serial; the blocks of a call are dealt to two imagined workers, each to
 * the one that is free first, as the counter of the real team deals them; then
 *
 *     serial      seconds outside of blocks, over all
 *     uneven      what one worker waits for the other, over all
 *     bound       all over (serial + the longer of both workers' times, call by call)
 *     with calls  the same with what the calls cost on top, as measured here with two real threads: one who is still
 *                 looking out is there at once, one who went to sleep, after as long a serial stretch, has to be woken
 *
 * Two workers that share caches and memory give less than that: beside every figure of two threads bench_fescue tells
 * what the machine gives. Measured: the fit of every solver to sown ratings of rank 16, twelve iterations of it, the
 * loading of a pack of them, and the whole job from that pack to written files.
 */
#include "rating.h"

#include "solve/solve.h"

#include <stdio.h>
#include <stdlib.h>
#include <string.h>
#include <time.h>
#include <unistd.h>

void __real_team_run(fescue_context *context, size_t blocks, team_task *task, void *job);
void __wrap_team_run(fescue_context *context, size_t blocks, team_task *task, void *job);

enum { ITERATIONS = 12 };
static const double look_out = 50e-6; /* as team.c has it */

static struct share {
    double all, blocks, longer; /* seconds in blocks, and those of the longer of two workers */
    uint64_t calls, woken;      /* with more than one block; of these, after a serial stretch of `look_out` */
} share;
static double clock_cost; /* seconds of a look at the clock */
static uint64_t looks;
static double left; /* when the last blocks were done */
static bool inside; /* a task that calls for work does it itself: the team of another context, of one */

static double clock_own(void)
{
    struct timespec now;
    clock_gettime(CLOCK_THREAD_CPUTIME_ID, &now);
    looks++;
    return (double)now.tv_sec + 1e-9 * (double)now.tv_nsec;
}

void __wrap_team_run(fescue_context *context, size_t blocks, team_task *task, void *job)
{
    double worker[2] = {0, 0};
    if (inside || team_workers(context) == 1) {
        __real_team_run(context, blocks, task, job);
        return;
    }
    inside = true;
    double begin = clock_own(), at = begin;
    for (size_t block = 0; block < blocks; block++) {
        task(job, block, 0);
        double now = clock_own(), took = now - at - clock_cost;
        worker[worker[1] < worker[0]] += took > 0 ? took : 0;
        at = now;
    }
    inside = false;
    share.blocks += worker[0] + worker[1];
    share.longer += worker[worker[1] > worker[0]];
    share.calls += blocks > 1;
    share.woken += blocks > 1 && begin - left > look_out;
    left = at;
}

/* ---- what a call costs ---------------------------------------------------------------------------------------------
 */

enum { CALLS = 1000, CALL_BLOCKS = 20 };
static const double block_seconds = 10e-6;

static void seconds_pass(double seconds)
{
    for (double end = clock_wall() + seconds; clock_wall() < end;)
        ;
}

static void block_pass(void *job, size_t block, size_t worker)
{
    (void)job, (void)block, (void)worker;
    seconds_pass(block_seconds);
}

/* Seconds by which two threads take longer than half of the blocks after a serial stretch. On a busy machine most take
   longer than that for other reasons: the hundredth part that went best counts. */
static double call_cost(double stretch)
{
    double took[CALLS];
    fescue_context *context;
    if (fescue_context_create(NULL, &context) != FESCUE_OK)
        exit(1);
    bench_check(context, team_resize(context, 2));
    for (size_t k = 0; k < CALLS; k++) {
        seconds_pass(stretch);
        double begin = clock_wall();
        __real_team_run(context, CALL_BLOCKS, block_pass, NULL);
        took[k] = clock_wall() - begin - CALL_BLOCKS * block_seconds / 2;
    }
    fescue_context_destroy(&context);
    bench_median(took, CALLS);
    return took[CALLS / 100];
}

static void clock_measure(void)
{
    enum { LOOKS = 100000 };
    double begin = clock_own();
    for (int k = 0; k < LOOKS; k++)
        clock_own();
    clock_cost = (clock_own() - begin) / LOOKS;
}

/* ---- what is measured ----------------------------------------------------------------------------------------------
 */

struct stand {
    struct rating rating;
    char folder[512], pack[600];
    double call, wake; /* seconds of a call, and of one that wakes */
};

typedef double stand_work(struct stand *stand, const char *solver); /* seconds of it that count; 0: all */

static double fit_run(struct stand *stand, const char *solver)
{
    struct fit_outcome outcome;
    rating_fit(&stand->rating, solver, RATING_RANK, 2, ITERATIONS, &outcome);
    return outcome.cpu;
}

static double pack_load(struct stand *stand, const char *none)
{
    fescue_context *context;
    (void)none;
    fescue_table *table = bench_load(stand->pack, FESCUE_DOUBLE, 2, &context);
    table_destroy(&table);
    fescue_context_destroy(&context);
    return 0;
}

/* Load, choose, fit, judge, write. */
static double job_run(struct stand *stand, const char *solver)
{
    struct fescue_options options;
    fescue_context *context;
    fescue_table *table;
    fescue_fill *fill;
    if (fescue_context_create(NULL, &context) != FESCUE_OK)
        exit(1);
    fescue_options_standard(&options);
    bench_check(context, fescue_options_set(context, &options, "threads", "2"));
    bench_check(context, fescue_options_set(context, &options, "solver", solver));
    bench_check(context, fescue_options_set(context, &options, "write", "factors"));
    if (strcmp(solver, "auto") != 0)
        bench_check(context, fescue_options_set(context, &options, "rank", "16"));
    bench_check(context, fescue_table_read(context, stand->pack, &options, &table));
    bench_check(context, fescue_fill_table(table, &options, &fill));
    bench_check(context, fescue_fill_write(fill, stand->folder));
    fescue_fill_destroy(&fill);
    fescue_table_destroy(&table);
    fescue_context_destroy(&context);
    return 0;
}

static void share_report(struct stand *stand, const char *what, const char *solver, stand_work *work)
{
    const char *only = getenv("BENCH_SHARES");
    char name[128];
    snprintf(name, sizeof name, "%s%s%s", what, *solver == '\0' ? "" : ", ", solver);
    if (only != NULL && strstr(name, only) == NULL)
        return;
    share = (struct share){0};
    looks = 0;
    double begin = left = clock_own();
    double counted = work(stand, solver), all = clock_own() - begin;
    share.all = (counted > 0 ? counted : all) - (double)looks * clock_cost;
    double serial = share.all - share.blocks, path = serial + share.longer;
    double calls = (double)(share.calls - share.woken) * stand->call + (double)share.woken * stand->wake;
    printf("%-34s cells %.0e  %7.3f s  calls %6llu  woken %5llu  serial %5.2f %%  uneven %5.2f %%  bound %.3f  with "
           "calls %.3f\n",
           name, (double)stand->rating.cells.count, share.all, (unsigned long long)share.calls,
           (unsigned long long)share.woken, 100 * serial / share.all,
           100 * (share.longer - share.blocks / 2) / share.all, share.all / path, share.all / (path + calls));
    fflush(stdout);
}

static void shares_measure(uint64_t cells, double call, double wake)
{
    struct stand stand = {.call = call, .wake = wake};
    const char *parent = getenv("TMPDIR");
    char clear[600];
    snprintf(stand.folder, sizeof stand.folder, "%s/fescue-bench-XXXXXX", parent != NULL ? parent : "/tmp");
    if (mkdtemp(stand.folder) == NULL)
        exit(1);
    snprintf(stand.pack, sizeof stand.pack, "%s/ratings.pack", stand.folder);
    rating_sow(cells, FESCUE_DOUBLE, &stand.rating);
    rating_pack(&stand.rating, stand.pack);
    share_report(&stand, "load pack", "", pack_load);
    for (size_t k = 0; solver_at(k) != NULL; k++)
        share_report(&stand, "fit", solver_name(solver_at(k)), fit_run);
    share_report(&stand, "fill", "auto", job_run);
    share_report(&stand, "fill", "evidence", job_run);
    share_report(&stand, "fill", "alternating", job_run);
    rating_free(&stand.rating);
    snprintf(clear, sizeof clear, "rm -r '%s'", stand.folder);
    if (system(clear) != 0)
        fprintf(stderr, "bench: %s stays\n", stand.folder);
}

int main(int count, char **argument)
{
    static const double standard[] = {1e6, 1e7};
    clock_measure();
    double call = call_cost(0), wake = call_cost(2 * look_out);
    printf("a call costs %.1f us, one that wakes %.1f us\n", 1e6 * call, 1e6 * wake);
    for (int k = 0; k < (count > 1 ? count - 1 : 2); k++) {
        double cells = count > 1 ? strtod(argument[1 + k], NULL) : standard[k];
        shares_measure((uint64_t)cells, call, wake);
    }
    return 0;
}
