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
 *     with calls  the same with what a call costs, a round of nothing, on top: measured here, with two real threads
 *
 * Two workers that share caches and memory give less than that; what these allow says bench_fescue (limit: two).
 * Measured: the fit of every solver to sown ratings of rank 16, the loading of a pack of them, and the whole job from
 * that pack to written files.
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

enum { TASKS = 256, EMPTY_ROUNDS = 2000, ITERATIONS = 12 };

/* One worker's seconds in blocks, and those of the longer of two workers. */
static struct share {
    double all, blocks, longer;
    uint64_t calls, dealt; /* of them with more than one block: so many blocks */
} share;
static double clock_cost; /* seconds of a look at the clock */
static uint64_t looks;
static bool inside; /* a task that calls for work does it itself: the team of another context, of one */

static struct task_share { /* by task, for whoever looks for the reason */
    team_task *task;
    double all, longer;
    uint64_t calls, blocks;
} tasks[TASKS];

static double clock_own(void)
{
    struct timespec now;
    clock_gettime(CLOCK_THREAD_CPUTIME_ID, &now);
    looks++;
    return (double)now.tv_sec + 1e-9 * (double)now.tv_nsec;
}

static struct task_share *task_share_of(team_task *task)
{
    size_t k = 0;
    while (k < TASKS - 1 && tasks[k].task != NULL && tasks[k].task != task)
        k++;
    tasks[k].task = task;
    return &tasks[k];
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
    struct task_share *own = task_share_of(task);
    double longer = worker[worker[1] > worker[0]];
    share.blocks += worker[0] + worker[1];
    share.longer += longer;
    share.calls += blocks > 1;
    share.dealt += blocks > 1 ? blocks : 0;
    own->all += worker[0] + worker[1];
    own->longer += longer;
    own->calls++;
    own->blocks += blocks;
}

static void nothing(void *job, size_t block, size_t worker)
{
    (void)job, (void)block, (void)worker;
}

/* Wall seconds of a round of nothing with two threads: the quicker half of many counts, of a machine that is busy. */
static double call_cost(void)
{
    double took[EMPTY_ROUNDS];
    fescue_context *context;
    if (fescue_context_create(NULL, &context) != FESCUE_OK)
        exit(1);
    bench_check(context, team_resize(context, 2));
    for (size_t k = 0; k < EMPTY_ROUNDS; k++) {
        double begin = clock_wall();
        __real_team_run(context, 2, nothing, NULL);
        took[k] = clock_wall() - begin;
    }
    fescue_context_destroy(&context);
    return bench_median(took, EMPTY_ROUNDS);
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
    char folder[64], pack[128];
    double call;
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
    fescue_table *table;
    const struct table_reading reading = {.precision = FESCUE_DOUBLE};
    (void)none;
    if (fescue_context_create(NULL, &context) != FESCUE_OK)
        exit(1);
    bench_check(context, team_resize(context, 2));
    bench_check(context, table_read(context, stand->pack, &reading, &table));
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

static int task_order(const void *a, const void *b)
{
    const struct task_share *x = a, *y = b;
    double over_x = x->longer - x->all / 2, over_y = y->longer - y->all / 2;
    return (over_x < over_y) - (over_x > over_y);
}

static void share_report(struct stand *stand, const char *what, const char *solver, stand_work *work)
{
    const char *only = getenv("BENCH_SHARES");
    char name[128];
    snprintf(name, sizeof name, "%s%s%s", what, *solver == '\0' ? "" : ", ", solver);
    if (only != NULL && strstr(name, only) == NULL)
        return;
    share = (struct share){0};
    memset(tasks, 0, sizeof tasks);
    looks = 0;
    double begin = clock_own();
    double counted = work(stand, solver), all = clock_own() - begin;
    share.all = (counted > 0 ? counted : all) - (double)looks * clock_cost;
    double serial = share.all - share.blocks, path = serial + share.longer;
    printf("%-34s cells %.0e  %7.2f s  %7llu calls of %5.0f us  serial %5.2f %%  uneven %5.2f %%  bound %.3f  with "
           "calls %.3f\n",
           name, (double)stand->rating.cells.count, share.all, (unsigned long long)share.calls,
           share.calls == 0 ? 0 : 1e6 * share.blocks / (double)share.calls, 100 * serial / share.all,
           100 * (share.longer - share.blocks / 2) / share.all, share.all / path,
           share.all / (path + (double)share.calls * stand->call));
    qsort(tasks, TASKS, sizeof *tasks, task_order);
    for (int k = 0; getenv("TASKS") && k < 8 && tasks[k].task != NULL; k++)
        printf("    TASK %p all %.4f over %.4f calls %llu blocks %llu\n", (void *)tasks[k].task, tasks[k].all,
               tasks[k].longer - tasks[k].all / 2, (unsigned long long)tasks[k].calls,
               (unsigned long long)tasks[k].blocks);
    fflush(stdout);
}

static void pack_make(struct stand *stand)
{
    const struct half *half = &stand->rating.cells.by_row;
    struct fescue_options options;
    fescue_context *context;
    fescue_table *table;
    char *text;
    uint32_t *row = bench_take(stand->rating.cells.count, sizeof *row);
    if (fescue_context_create(NULL, &context) != FESCUE_OK)
        exit(1);
    for (uint32_t i = 0; i < half->lines; i++)
        for (uint64_t k = half->start[i]; k < half->start[i + 1]; k++)
            row[k] = i;
    fescue_options_standard(&options);
    bench_check(context,
                fescue_table_from_cells(context, stand->rating.cells.rows, stand->rating.cells.columns,
                                        stand->rating.cells.count, row, half->across, half->value, &options, &table));
    bench_check(context, fescue_table_pack(table, stand->pack, &text));
    fescue_text_free(context, &text);
    fescue_table_destroy(&table);
    fescue_context_destroy(&context);
    free(row);
}

static void shares_measure(uint64_t cells, double call)
{
    struct stand stand = {.folder = "/tmp/fescue-shares-XXXXXX", .call = call};
    if (mkdtemp(stand.folder) == NULL)
        exit(1);
    snprintf(stand.pack, sizeof stand.pack, "%s/ratings.pack", stand.folder);
    rating_sow(cells, FESCUE_DOUBLE, &stand.rating);
    pack_make(&stand);
    share_report(&stand, "load pack", "", pack_load);
    for (size_t k = 0; solver_at(k) != NULL; k++)
        share_report(&stand, "fit", solver_name(solver_at(k)), fit_run);
    share_report(&stand, "fill", "auto", job_run);
    share_report(&stand, "fill", "evidence", job_run);
    share_report(&stand, "fill", "alternating", job_run);
    rating_free(&stand.rating);
}

int main(int count, char **argument)
{
    static const double standard[] = {1e6, 1e7};
    clock_measure();
    double call = call_cost();
    printf("a look at the clock %.0f ns; a call for work, a round of nothing, %.1f us\n", 1e9 * clock_cost, 1e6 * call);
    for (int k = 0; k < (count > 1 ? count - 1 : 2); k++) {
        double cells = count > 1 ? strtod(argument[1 + k], NULL) : standard[k];
        shares_measure((uint64_t)cells, call);
    }
    return 0;
}
