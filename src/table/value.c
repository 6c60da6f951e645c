/* SPDX-License-Identifier: MIT
 *
 * A value as it may stand in a cell, and what is wrong with one that may not.
 */
#include "table/table_internal.h"

#include <math.h>
#include <strings.h>

/* "inf", "-Infinity" and the like: what programs write where a number had no bounds. */
static bool is_infinity(const char *text, const char *end)
{
    if (text < end && (*text == '-' || *text == '+'))
        text++;
    return (end - text == 3 && strncasecmp(text, "inf", 3) == 0) ||
           (end - text == 8 && strncasecmp(text, "infinity", 8) == 0);
}

bool is_nan_text(const char *text, const char *end)
{
    if (end - text < 3 || (end[-1] | ' ') != 'n') /* nearly all texts leave here */
        return false;
    if (text < end && (*text == '-' || *text == '+'))
        text++;
    return end - text == 3 && strncasecmp(text, "nan", 3) == 0;
}

const char *value_parse(const char *text, const char *end, enum fescue_precision precision, double *value)
{
    if (!number_parse(text, end, value))
        return is_infinity(text, end) ? "is not finite" : "is not a number";
    if (!isfinite(*value))
        return "is too large for a double";
    if (precision == FESCUE_SINGLE && !isfinite((float)*value))
        return "is too large for single precision";
    return NULL;
}
