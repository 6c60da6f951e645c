/* SPDX-License-Identifier: MIT
 *
 * One value of an option: from text, to text, and in words.
 *
 *   count   digits                                     real    a decimal number
 *   word    one out of `words`                         words   some of `words`, commas between
 *   text    any but the empty one                      flag    yes, no, or nothing for yes
 *   range   LO:HI, either side may be blank            time    seconds, or hours, minutes, seconds: 1h30m, 15m, 2.5s
 *   bytes   a number with K, M, G, T (powers of 1000) or KiB, MiB, GiB, TiB (powers of 1024)
 *
 * None of it depends on the locale. The text of a value is taken back as the same value: times come out in seconds,
 * sizes in bytes.
 */
#include "job/job_internal.h"

#include <assert.h>
#include <inttypes.h>
#include <math.h>
#include <stdio.h>
#include <string.h>

/* ---- lists of words, "a|b|c" ------------------------------------------------------------------------------------- */

/* Position of [text, end) among the words, or -1. */
static int word_find(const char *words, const char *text, const char *end)
{
    size_t length = (size_t)(end - text);
    for (int position = 0; *words != '\0'; position++) {
        size_t size = strcspn(words, "|");
        if (size == length && memcmp(words, text, size) == 0)
            return position;
        words += size + (words[size] == '|');
    }
    return -1;
}

static const char *word_at(const char *words, int position, int *length)
{
    for (; position > 0; position--)
        words += strcspn(words, "|") + 1;
    *length = (int)strcspn(words, "|");
    return words;
}

static int word_count(const char *words)
{
    int count = 1;
    for (; *words != '\0'; words++)
        count += *words == '|';
    return count;
}

/* ---- from text ----------------------------------------------------------------------------------------------------
 */

static bool is_auto(const char *text)
{
    return strcmp(text, "auto") == 0;
}

static bool is_within(const struct fescue_option *option, double value)
{
    return value >= option->least && value <= option->most;
}

static bool count_parse(const struct fescue_option *option, const char *text, int64_t *count)
{
    int64_t value = 0;
    if (option->can_be_auto && is_auto(text)) {
        *count = FESCUE_AUTO;
        return true;
    }
    if (*text == '\0')
        return false;
    for (; *text != '\0'; text++)
        if (*text < '0' || *text > '9' || __builtin_mul_overflow(value, 10, &value) ||
            __builtin_add_overflow(value, *text - '0', &value))
            return false;
    if (!is_within(option, (double)value))
        return false;
    *count = value;
    return true;
}

static bool real_parse(const struct fescue_option *option, const char *text, double *real)
{
    double value;
    if (option->can_be_auto && is_auto(text)) {
        *real = FESCUE_AUTO;
        return true;
    }
    if (!number_parse(text, text + strlen(text), &value) || !is_within(option, value))
        return false;
    *real = value;
    return true;
}

static bool word_parse(const struct fescue_option *option, const char *text, int *word)
{
    int position = word_find(option->words, text, text + strlen(text));
    if (position >= 0)
        *word = position;
    return position >= 0;
}

static bool words_parse(const struct fescue_option *option, const char *text, unsigned *words)
{
    unsigned set = 0;
    if (option->can_be_auto && is_auto(text)) {
        *words = (unsigned)FESCUE_AUTO;
        return true;
    }
    for (;; text++) {
        const char *end = text + strcspn(text, ",");
        int position = word_find(option->words, text, end);
        if (position < 0)
            return false;
        set |= 1U << position;
        text = end;
        if (*text == '\0')
            break;
    }
    *words = set;
    return true;
}

static bool flag_parse(const char *text, bool *flag)
{
    bool is_yes = text == NULL || strcmp(text, "yes") == 0;
    if (!is_yes && strcmp(text, "no") != 0)
        return false;
    *flag = is_yes;
    return true;
}

static bool range_parse(const char *text, struct fescue_range *range)
{
    struct fescue_range value = {-INFINITY, INFINITY};
    const char *colon = strchr(text, ':'), *end = text + strlen(text);
    if (colon == NULL)
        return false;
    if (colon > text && !(number_parse(text, colon, &value.low) && isfinite(value.low)))
        return false;
    if (colon + 1 < end && !(number_parse(colon + 1, end, &value.high) && isfinite(value.high)))
        return false;
    if (!(value.low < value.high))
        return false;
    *range = value;
    return true;
}

/* The largest unit comes first and none comes twice; a number without a unit stands alone. */
static bool time_parse(const struct fescue_option *option, const char *text, double *seconds)
{
    static const char units[] = "hms";
    static const double sizes[] = {3600, 60, 1};
    double value, total = 0;
    size_t next = 0; /* the first unit that may still come */
    if (number_parse(text, text + strlen(text), &value)) {
        total = value;
    } else {
        do {
            size_t length = strcspn(text, units);
            const char *unit = text[length] == '\0' ? NULL : strchr(units + next, text[length]);
            if (unit == NULL || text[0] == '-' || !number_parse(text, text + length, &value))
                return false;
            total += value * sizes[unit - units];
            next = (size_t)(unit - units) + 1;
            text += length + 1;
        } while (*text != '\0');
    }
    if (!is_within(option, total))
        return false;
    *seconds = total;
    return true;
}

/* Bytes are whole: 1.5K is 1500, 1.0001K is refused. */
static bool bytes_parse(const struct fescue_option *option, const char *text, int64_t *bytes)
{
    static const char units[] = "KMGT";
    size_t length = strcspn(text, units);
    double value, size = 1;
    if (!number_parse(text, text + length, &value))
        return false;
    if (text[length] != '\0') {
        const char *rest = text + length + 1;
        bool is_binary = strcmp(rest, "iB") == 0;
        if (!is_binary && *rest != '\0' && strcmp(rest, "B") != 0)
            return false;
        for (const char *unit = units; *unit != '\0'; unit++) {
            size *= is_binary ? 1024 : 1000;
            if (*unit == text[length])
                break;
        }
    }
    value *= size;
    if (!is_within(option, value) || value != floor(value))
        return false;
    *bytes = (int64_t)value;
    return true;
}

bool option_value_parse(const struct fescue_option *option, const char *text, void *field)
{
    if (option->kind == FESCUE_KIND_FLAG)
        return flag_parse(text, field);
    if (text == NULL)
        return false;
    switch (option->kind) {
    case FESCUE_KIND_COUNT:
        return count_parse(option, text, field);
    case FESCUE_KIND_REAL:
        return real_parse(option, text, field);
    case FESCUE_KIND_WORD:
        return word_parse(option, text, field);
    case FESCUE_KIND_WORDS:
        return words_parse(option, text, field);
    case FESCUE_KIND_RANGE:
        return range_parse(text, field);
    case FESCUE_KIND_TIME:
        return time_parse(option, text, field);
    case FESCUE_KIND_BYTES:
        return bytes_parse(option, text, field);
    case FESCUE_KIND_TEXT:
    case FESCUE_KIND_FLAG:
        break;
    }
    if (*text == '\0')
        return false;
    *(const char **)field = text;
    return true;
}

/* ---- to text ------------------------------------------------------------------------------------------------------
 */

static void real_text(double value, char *text, size_t size)
{
    char digits[32];
    real_to_text(value, FESCUE_DOUBLE, digits);
    snprintf(text, size, "%s", digits);
}

static void words_text(const char *words, unsigned set, char *text, size_t size)
{
    size_t used = 0;
    text[0] = '\0';
    for (int position = 0; position < word_count(words); position++) {
        if ((set >> position & 1U) == 0)
            continue;
        int length;
        const char *word = word_at(words, position, &length);
        int put = snprintf(text + used, size - used, "%s%.*s", used == 0 ? "" : ",", length, word);
        assert(put > 0 && (size_t)put < size - used);
        used += (size_t)put;
    }
}

static void range_text(struct fescue_range range, char *text, size_t size)
{
    char low[32] = "", high[32] = "";
    if (isfinite(range.low))
        real_to_text(range.low, FESCUE_DOUBLE, low);
    if (isfinite(range.high))
        real_to_text(range.high, FESCUE_DOUBLE, high);
    snprintf(text, size, "%s:%s", low, high);
}

static bool is_field_auto(const struct fescue_option *option, const void *field)
{
    if (!option->can_be_auto)
        return false;
    switch (option->kind) {
    case FESCUE_KIND_COUNT:
        return *(const int64_t *)field == FESCUE_AUTO;
    case FESCUE_KIND_REAL:
        return *(const double *)field == (double)FESCUE_AUTO;
    case FESCUE_KIND_WORDS:
        return *(const unsigned *)field == (unsigned)FESCUE_AUTO;
    default:
        return false;
    }
}

void fescue_option_text(const struct fescue_option *option, const void *options, char *text, size_t size)
{
    const void *field = (const char *)options + option->position;
    const char *word;
    int length;
    assert(size >= 128);
    if (is_field_auto(option, field)) {
        snprintf(text, size, "auto");
        return;
    }
    switch (option->kind) {
    case FESCUE_KIND_COUNT:
    case FESCUE_KIND_BYTES:
        snprintf(text, size, "%" PRId64, *(const int64_t *)field);
        break;
    case FESCUE_KIND_REAL:
    case FESCUE_KIND_TIME:
        real_text(*(const double *)field, text, size);
        break;
    case FESCUE_KIND_WORD:
        word = word_at(option->words, *(const int *)field, &length);
        snprintf(text, size, "%.*s", length, word);
        break;
    case FESCUE_KIND_WORDS:
        words_text(option->words, *(const unsigned *)field, text, size);
        break;
    case FESCUE_KIND_TEXT:
        word = *(const char *const *)field;
        snprintf(text, size, "%s", word == NULL ? "" : word);
        break;
    case FESCUE_KIND_FLAG:
        snprintf(text, size, "%s", *(const bool *)field ? "yes" : "no");
        break;
    case FESCUE_KIND_RANGE:
        range_text(*(const struct fescue_range *)field, text, size);
        break;
    }
}

/* ---- in words -----------------------------------------------------------------------------------------------------
 */

/* "a, b or c" out of "a|b|c". */
static void words_list(const char *words, const char *last, char *text, size_t size)
{
    size_t used = 0;
    int count = word_count(words);
    for (int position = 0; position < count && used < size; position++) {
        int length;
        const char *word = word_at(words, position, &length);
        const char *between = position == 0 ? "" : position == count - 1 ? last : ", ";
        used += (size_t)snprintf(text + used, size - used, "%s%.*s", between, length, word);
    }
}

void option_value_expected(const struct fescue_option *option, char *text, size_t size)
{
    char least[32], most[32], words[256] = "";
    const char *or_auto = option->can_be_auto ? ", or auto" : "";
    real_to_text(option->least, FESCUE_DOUBLE, least);
    real_to_text(option->most, FESCUE_DOUBLE, most);
    switch (option->kind) {
    case FESCUE_KIND_COUNT:
        snprintf(text, size, "a whole number from %.0f to %.0f%s", option->least, option->most, or_auto);
        break;
    case FESCUE_KIND_REAL:
        snprintf(text, size, "a number from %s to %s%s", least, most, or_auto);
        break;
    case FESCUE_KIND_WORD:
        words_list(option->words, " or ", words, sizeof words);
        snprintf(text, size, "%s", words);
        break;
    case FESCUE_KIND_WORDS:
        words_list(option->words, " and ", words, sizeof words);
        snprintf(text, size, "some of %s with commas between%s", words, or_auto);
        break;
    case FESCUE_KIND_TEXT:
        snprintf(text, size, "a text that is not empty");
        break;
    case FESCUE_KIND_FLAG:
        snprintf(text, size, "yes, no, or nothing for yes");
        break;
    case FESCUE_KIND_RANGE:
        snprintf(text, size, "LO:HI, a lower and a higher number, one of which may be left out");
        break;
    case FESCUE_KIND_TIME:
        snprintf(text, size, "a time such as 90, 15m, 2h or 1h30m, at most %s seconds", most);
        break;
    case FESCUE_KIND_BYTES:
        snprintf(text, size, "a size in whole bytes such as 500M, 2G or 1GiB, at most %s", most);
        break;
    }
}
