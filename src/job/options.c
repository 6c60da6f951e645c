/* SPDX-License-Identifier: MIT
 *
 * The tables of options, made from the lists in include/fescue_*options.def, and setting an option by name.
 */
#include "job/job_internal.h"

#include <assert.h>
#include <string.h>

/* The lists name a kind as the type of its field does, in small letters. */
enum {
    kind_count = FESCUE_KIND_COUNT,
    kind_real = FESCUE_KIND_REAL,
    kind_word = FESCUE_KIND_WORD,
    kind_words = FESCUE_KIND_WORDS,
    kind_text = FESCUE_KIND_TEXT,
    kind_flag = FESCUE_KIND_FLAG,
    kind_range = FESCUE_KIND_RANGE,
    kind_time = FESCUE_KIND_TIME,
    kind_bytes = FESCUE_KIND_BYTES
};

#define ENTRY_(structure, field, kind, name, letter, automatic, standard, least, most, words, commands, help)          \
    {name,  letter,   (enum fescue_option_kind)kind_##kind, automatic, standard, least, most,                          \
     words, commands, offsetof(struct structure, field),    help},

static const struct fescue_option option_table[] = {
#define OPTION(...) ENTRY_(fescue_options, __VA_ARGS__)
#include "fescue_options.def"
#undef OPTION
};

static const struct fescue_option sow_option_table[] = {
#define OPTION(...) ENTRY_(fescue_sow_options, __VA_ARGS__)
#include "fescue_sow_options.def"
#undef OPTION
};

static const struct fescue_option night_option_table[] = {
#define OPTION(...) ENTRY_(fescue_night_options, __VA_ARGS__)
#include "fescue_night_options.def"
#undef OPTION
};

const struct fescue_option *fescue_option_table(size_t *count)
{
    *count = sizeof option_table / sizeof option_table[0];
    return option_table;
}

const struct fescue_option *fescue_sow_option_table(size_t *count)
{
    *count = sizeof sow_option_table / sizeof sow_option_table[0];
    return sow_option_table;
}

const struct fescue_option *fescue_night_option_table(size_t *count)
{
    *count = sizeof night_option_table / sizeof night_option_table[0];
    return night_option_table;
}

static void *field_of(const struct fescue_option *option, void *options)
{
    return (char *)options + option->position;
}

static void standard_set(const struct fescue_option *table, size_t count, void *options)
{
    for (size_t k = 0; k < count; k++) {
        void *field = field_of(&table[k], options);
        if (table[k].kind == FESCUE_KIND_RANGE)
            option_value_parse(&table[k], ":", field);
        if (table[k].standard == NULL)
            continue;
        bool is_value = option_value_parse(&table[k], table[k].standard, field);
        assert(is_value);
        (void)is_value;
    }
}

void fescue_options_standard(struct fescue_options *options)
{
    size_t count;
    const struct fescue_option *table = fescue_option_table(&count);
    *options = (struct fescue_options){0};
    standard_set(table, count, options);
}

void fescue_sow_options_standard(struct fescue_sow_options *options)
{
    size_t count;
    const struct fescue_option *table = fescue_sow_option_table(&count);
    *options = (struct fescue_sow_options){0};
    standard_set(table, count, options);
}

void fescue_night_options_standard(struct fescue_night_options *options)
{
    size_t count;
    const struct fescue_option *table = fescue_night_option_table(&count);
    *options = (struct fescue_night_options){0};
    standard_set(table, count, options);
}

static fescue_status option_set(fescue_context *context, const struct fescue_option *table, size_t count, void *options,
                                const char *const name_and_text[2])
{
    const char *name = name_and_text[0], *text = name_and_text[1];
    char expected[512];
    const struct fescue_option *option = table;
    while (option < table + count && strcmp(option->name, name) != 0)
        option++;
    if (option == table + count)
        return FAIL(context, FESCUE_USAGE, "there is no option --%s", name);
    if (option_value_parse(option, text, field_of(option, options)))
        return FESCUE_OK;
    option_value_expected(option, expected, sizeof expected);
    if (text == NULL)
        return FAIL(context, FESCUE_USAGE, "--%s: no value was given, expected %s", name, expected);
    return FAIL(context, FESCUE_USAGE, "--%s: found \"%s\", expected %s", name, text, expected);
}

fescue_status fescue_options_set(fescue_context *context, struct fescue_options *options, const char *name,
                                 const char *text)
{
    size_t count;
    const struct fescue_option *table = fescue_option_table(&count);
    return option_set(context, table, count, options, (const char *const[]){name, text});
}

fescue_status fescue_sow_options_set(fescue_context *context, struct fescue_sow_options *options, const char *name,
                                     const char *text)
{
    size_t count;
    const struct fescue_option *table = fescue_sow_option_table(&count);
    return option_set(context, table, count, options, (const char *const[]){name, text});
}

fescue_status fescue_night_options_set(fescue_context *context, struct fescue_night_options *options, const char *name,
                                       const char *text)
{
    size_t count;
    const struct fescue_option *table = fescue_night_option_table(&count);
    return option_set(context, table, count, options, (const char *const[]){name, text});
}

static size_t smaller(size_t a, size_t b)
{
    return a < b ? a : b;
}

/* Dynamic programming, row by row. */
size_t fescue_slips(const char *typed, size_t length, const char *name)
{
    enum { LONGEST = 40 };
    size_t row[LONGEST + 1];
    if (length > LONGEST)
        return LONGEST;
    for (size_t i = 0; i <= length; i++)
        row[i] = i;
    for (size_t j = 0; name[j] != '\0'; j++) {
        size_t corner = row[0]++;
        for (size_t i = 0; i < length; i++) {
            size_t change = corner + (typed[i] != name[j]);
            corner = row[i + 1];
            row[i + 1] = smaller(change, 1 + smaller(row[i], row[i + 1]));
        }
    }
    return row[length];
}
