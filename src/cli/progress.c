/* SPDX-License-Identifier: MIT
 *
 * The moving line on a terminal: what is being done and how far it is. It appears after a second, so that short runs
 * stay still, and is gone before anything else is said.
 */
#include "cli.h"

#include <time.h>
#include <unistd.h>

static const double first_after = 1;  /* seconds: what is over sooner needs no progress */
static const double again_after = .1; /* seconds between two drawings: more often is only flicker */

static double now(void)
{
    struct timespec time;
    clock_gettime(CLOCK_MONOTONIC, &time);
    return (double)time.tv_sec + 1e-9 * (double)time.tv_nsec;
}

void progress_open(struct progress *progress)
{
    *progress = (struct progress){.draws = isatty(STDERR_FILENO) != 0, .started = now()};
}

void progress_clear(struct progress *progress)
{
    if (progress->visible)
        fputs("\r\033[K", stderr);
    progress->visible = false;
}

bool progress_draw(void *data, const char *stage, double share)
{
    struct progress *progress = data;
    if (!progress->draws)
        return true;
    double time = now();
    if (time - progress->started < first_after || time - progress->drawn < again_after)
        return true;
    fprintf(stderr, "\r%s", stage);
    if (share >= 0)
        fprintf(stderr, " %3.0f %%", 100 * (share < 1 ? share : 1));
    fputs("\033[K", stderr);
    fflush(stderr);
    progress->visible = true;
    progress->drawn = time;
    return true;
}

void progress_log(void *data, const char *sentence)
{
    struct progress *progress = data;
    if (!progress->tells)
        return;
    progress_clear(progress);
    fprintf(stderr, "%s\n", sentence);
}
