/* SPDX-License-Identifier: MIT
 *
 * Wall and processor time, in seconds.
 */
#include "base/base.h"

#include <time.h>

static double clock_read(clockid_t id)
{
    struct timespec now;
    clock_gettime(id, &now);
    return (double)now.tv_sec + 1e-9 * (double)now.tv_nsec;
}

double clock_wall(void)
{
    return clock_read(CLOCK_MONOTONIC);
}

double clock_cpu(void)
{
    return clock_read(CLOCK_PROCESS_CPUTIME_ID);
}
