/* SPDX-License-Identifier: MIT
 *
 * Times and sizes in words.
 */
#include "night/night_internal.h"

#include <stdio.h>
#include <time.h>

void time_words(char text[WORD_SIZE])
{
    time_t now = time(NULL);
    struct tm parts;
    text[0] = '\0';
    if (gmtime_r(&now, &parts) != NULL)
        strftime(text, WORD_SIZE, "%Y-%m-%dT%H:%M:%SZ", &parts);
}

void seconds_words(double seconds, char text[WORD_SIZE])
{
    double most = 1e9; /* thirty years: what is longer is no time of a job */
    seconds = seconds > 0 ? (seconds < most ? seconds : most) : 0;
    long whole = (long)(seconds + 0.5);
    if (seconds < 9.95)
        snprintf(text, WORD_SIZE, "%ld.%ld s", (long)(10 * seconds + 0.5) / 10, (long)(10 * seconds + 0.5) % 10);
    else if (whole < 120)
        snprintf(text, WORD_SIZE, "%ld s", whole);
    else if (whole < 7200)
        snprintf(text, WORD_SIZE, "%ld min %ld s", whole / 60, whole % 60);
    else
        snprintf(text, WORD_SIZE, "%ld h %ld min", whole / 3600, whole % 3600 / 60);
}

void bytes_words(double bytes, char text[WORD_SIZE])
{
    static const char *const units[] = {"kB", "MB", "GB", "TB", "PB"};
    double scale = 1000;
    size_t unit = 0;
    while (unit + 1 < sizeof units / sizeof *units && bytes / scale >= 1000) {
        scale *= 1000;
        unit++;
    }
    long tenths = (long)(10 * bytes / scale + 0.5);
    if (tenths >= 1000)
        snprintf(text, WORD_SIZE, "%ld %s", tenths / 10, units[unit]);
    else
        snprintf(text, WORD_SIZE, "%ld.%ld %s", tenths / 10, tenths % 10, units[unit]);
}
