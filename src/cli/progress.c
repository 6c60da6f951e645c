/* SPDX-License-Identifier: MIT
 *
 * The moving line on a terminal: what is being done, how far it is, and how long the rest takes at the rate so far:
 *
 *     reading, 141 MB/s  34 %, 12 s left
 *
 * It appears after a second, so that short runs stay still, and is gone before anything else is said.
 */
#include "cli.h"

#include <string.h>
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

/* Notes when work of another kind begins; what follows a comma in the name of a stage may change on its way. */
static void stage_note(struct progress *progress, const char *stage, double time)
{
    size_t length = strcspn(stage, ",");
    if (length >= sizeof progress->stage)
        length = sizeof progress->stage - 1;
    if (strncmp(progress->stage, stage, length) == 0 && progress->stage[length] == '\0')
        return;
    memcpy(progress->stage, stage, length);
    progress->stage[length] = '\0';
    progress->stage_started = time;
}

static void left_print(double seconds)
{
    if (seconds < 100)
        fprintf(stderr, ", %.0f s left", seconds);
    else if (seconds < 100 * 60)
        fprintf(stderr, ", %.0f min left", seconds / 60);
    else
        fprintf(stderr, ", %.0f h left", seconds / 3600);
}

static void share_print(double share, double taken)
{
    static const double least = 0.01; /* less of it done says nothing of the rest */
    share = share < 1 ? share : 1;
    fprintf(stderr, "  %.0f %%", 100 * share);
    if (share >= least)
        left_print(taken * (1 - share) / share);
}

bool progress_draw(void *data, const char *stage, double share)
{
    struct progress *progress = data;
    if (!progress->draws)
        return true;
    double time = now();
    stage_note(progress, stage, time);
    if (time - progress->started < first_after || time - progress->drawn < again_after)
        return true;
    fprintf(stderr, "\r%s", stage);
    if (share >= 0)
        share_print(share, time - progress->stage_started);
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
