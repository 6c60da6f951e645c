/* SPDX-License-Identifier: MIT
 *
 * Instants from labels, as ISO 8601 writes them (and RFC 3339, its profile for the network):
 *
 *     date      =  YYYY-MM-DD | YYYYMMDD | YYYY-Www[-D] | YYYYWww[D] | YYYY-DDD | YYYYDDD | YYYY-MM
 *     time      =  hh | hh:mm | hhmm | hh:mm:ss | hhmmss, with a fraction (point or comma) of its last part
 *     offset    =  Z | +hh | +hhmm | +hh:mm, or with -
 *     instant   =  date [ (T | t | one blank) time [offset] ]
 *
 * Years 0001 to 9999 of the Gregorian calendar, carried on to before it was made. 24:00 is the end of a day. A leap
 * second (RFC 3339, section 5.7) is taken where one can be, and is the first second of the next minute: nobody counts
 * them, here as in Unix time. A month without a day is its first day, a week its Monday. A year alone is a number, not
 * a date, and so are the seven digits of YYYYDDD, which look like anybody's serial numbers, as long as no time follows.
 *
 * Nothing depends on the locale or on the time zone of the machine. Cost: one pass over at most some forty bytes.
 */
#include "table/table_internal.h"

enum { NANO = 1000000000, MINUTE = 60, HOUR = 3600, DAY = 86400 };

/* Days from 1 January of the year 1 to 1 January 1970: 1969 years, 477 leap days. */
#define DAYS_TO_1970 INT64_C(719162)

struct cursor {
    const char *at, *end;
};

static bool is_digit(char c)
{
    return (unsigned char)(c - '0') < 10;
}

static bool is_next(const struct cursor *cursor, char c)
{
    return cursor->at < cursor->end && *cursor->at == c;
}

static bool take(struct cursor *cursor, char c)
{
    bool is_there = is_next(cursor, c);
    cursor->at += is_there;
    return is_there;
}

static size_t digits_ahead(const struct cursor *cursor)
{
    const char *at = cursor->at;
    while (at < cursor->end && is_digit(*at))
        at++;
    return (size_t)(at - cursor->at);
}

/* A number of just so many digits, least to most. */
static bool number_take(struct cursor *cursor, size_t digits, int least, int most, int *number)
{
    *number = 0;
    if (digits_ahead(cursor) < digits)
        return false;
    for (size_t k = 0; k < digits; k++)
        *number = 10 * *number + (*cursor->at++ - '0');
    return *number >= least && *number <= most;
}

/* ---- dates: days since 1 January of the year 1, which is a Monday --------------------------------------------------
 */

static bool is_leap(int year)
{
    return year % 4 == 0 && (year % 100 != 0 || year % 400 == 0);
}

static int64_t year_start(int year)
{
    int64_t before = year - 1;
    return 365 * before + before / 4 - before / 100 + before / 400;
}

static int month_start(int year, int month)
{
    static const int start[] = {0, 31, 59, 90, 120, 151, 181, 212, 243, 273, 304, 334, 365};
    return start[month - 1] + (month > 2 && is_leap(year));
}

/* The Monday of week 1, which is the week with 4 January in it. */
static int64_t week_start(int year)
{
    int64_t fourth = year_start(year) + 3;
    return fourth - fourth % 7;
}

static bool month_day(int year, int month, int day, int64_t *days)
{
    *days = year_start(year) + month_start(year, month) + day - 1;
    return day <= month_start(year, month + 1) - month_start(year, month);
}

/* Behind the W. */
static bool week_take(struct cursor *cursor, int year, bool is_extended, bool *has_day, int64_t *days)
{
    int week, day = 1;
    if (!number_take(cursor, 2, 1, 53, &week))
        return false;
    *has_day = is_extended ? take(cursor, '-') : digits_ahead(cursor) > 0;
    if (*has_day && !number_take(cursor, 1, 1, 7, &day))
        return false;
    *days = week_start(year) + 7 * (week - 1) + day - 1;
    return week < 53 || *days < week_start(year + 1);
}

static bool ordinal_take(struct cursor *cursor, int year, int64_t *days)
{
    int day;
    bool is_day = number_take(cursor, 3, 1, is_leap(year) ? 366 : 365, &day);
    *days = year_start(year) + day - 1;
    return is_day;
}

/* Behind the year: "-MM-DD", "-MM", or "MMDD". */
static bool month_take(struct cursor *cursor, int year, bool is_extended, bool *has_day, int64_t *days)
{
    int month, day = 1;
    if (!number_take(cursor, 2, 1, 12, &month))
        return false;
    *has_day = !is_extended || take(cursor, '-');
    if (*has_day && !number_take(cursor, 2, 1, 31, &day))
        return false;
    return month_day(year, month, day, days);
}

static bool date_take(struct cursor *cursor, bool *has_day, bool *is_serial, int64_t *days)
{
    int year;
    *has_day = true;
    *is_serial = false;
    size_t together = digits_ahead(cursor);
    if (!number_take(cursor, 4, 1, 9999, &year))
        return false;
    bool is_extended = take(cursor, '-');
    if (take(cursor, 'W'))
        return week_take(cursor, year, is_extended, has_day, days);
    size_t digits = digits_ahead(cursor);
    *is_serial = together == 7;
    if (digits == 3)
        return ordinal_take(cursor, year, days);
    return digits == (is_extended ? 2 : 4) && month_take(cursor, year, is_extended, has_day, days);
}

/* ---- times ----------------------------------------------------------------------------------------------------------
 */

/* The fraction of a part that lasts `unit` seconds, in nanoseconds; digits beyond the ninth are dropped. */
static bool fraction_take(struct cursor *cursor, int unit, int64_t *nanos)
{
    int64_t fraction = 0, weight = NANO;
    *nanos = 0;
    if (!take(cursor, '.') && !take(cursor, ','))
        return true;
    if (digits_ahead(cursor) == 0)
        return false;
    for (; cursor->at < cursor->end && is_digit(*cursor->at); cursor->at++) {
        weight /= 10;
        fraction += weight * (*cursor->at - '0');
    }
    *nanos = fraction * unit;
    return true;
}

/* Whether another part of a time follows; the first separator tells between basic and extended. */
static bool part_follows(struct cursor *cursor, bool is_first, bool *is_extended)
{
    if (is_first)
        *is_extended = is_next(cursor, ':');
    return *is_extended ? take(cursor, ':') : digits_ahead(cursor) > 0;
}

static bool time_take(struct cursor *cursor, int64_t *second, int64_t *nanos)
{
    int hour, minute = 0, seconds = 0, unit = HOUR;
    bool is_extended = false;
    if (!number_take(cursor, 2, 0, 24, &hour))
        return false;
    if (part_follows(cursor, true, &is_extended)) {
        unit = MINUTE;
        if (!number_take(cursor, 2, 0, 59, &minute))
            return false;
        if (part_follows(cursor, false, &is_extended)) {
            unit = 1;
            if (!number_take(cursor, 2, 0, 60, &seconds))
                return false;
        }
    }
    if (!fraction_take(cursor, unit, nanos))
        return false;
    *second = (int64_t)HOUR * hour + MINUTE * minute + seconds;
    if (seconds == 60 && minute % 15 != 14) /* 23:59:60Z, where clocks differ from it by quarters of an hour */
        return false;
    return *second < DAY || (*second == DAY && (seconds == 60 || *nanos == 0));
}

static bool offset_take(struct cursor *cursor, int *offset)
{
    int hour, minute = 0;
    *offset = 0;
    if (take(cursor, 'Z') || take(cursor, 'z'))
        return true;
    bool is_west = is_next(cursor, '-');
    if (!take(cursor, '-') && !take(cursor, '+'))
        return false;
    if (!number_take(cursor, 2, 0, 23, &hour))
        return false;
    bool is_extended = take(cursor, ':');
    if ((is_extended || cursor->at < cursor->end) && !number_take(cursor, 2, 0, 59, &minute))
        return false;
    *offset = (is_west ? -1 : 1) * (HOUR * hour + MINUTE * minute);
    return true;
}

bool time_label_parse(const char *text, const char *end, struct instant *instant)
{
    struct cursor cursor = {text, end};
    int64_t days, second = 0, nanos = 0;
    int offset = 0;
    bool has_day, is_serial;
    *instant = (struct instant){0};
    if (!date_take(&cursor, &has_day, &is_serial, &days))
        return false;
    if (cursor.at == cursor.end) {
        if (is_serial)
            return false;
    } else {
        if (!has_day || !(take(&cursor, 'T') || take(&cursor, 't') || take(&cursor, ' ')))
            return false;
        if (!time_take(&cursor, &second, &nanos))
            return false;
        instant->has_offset = cursor.at < cursor.end;
        if (instant->has_offset && (!offset_take(&cursor, &offset) || cursor.at < cursor.end))
            return false;
    }
    instant->second = DAY * (days - DAYS_TO_1970) + second - offset + nanos / NANO;
    instant->nano = (int32_t)(nanos % NANO);
    return true;
}
