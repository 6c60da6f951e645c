/* SPDX-License-Identifier: MIT
 *
 * What makes a checkpoint one of this very job: version and kernels of the program, the input, and the options that
 * bear on results. Limits of time and memory and the number of workers may differ: they do not change what a piece of
 * work comes to.
 */
#include "job/job_internal.h"

#include <inttypes.h>
#include <stdio.h>
#include <string.h>

static const char *const not_bearing[] = {"output",       "threads",    "time-limit",
                                          "memory-limit", "checkpoint", "checkpoint-every"};

bool option_is_bearing(const struct fescue_option *option)
{
    for (size_t k = 0; k < sizeof not_bearing / sizeof *not_bearing; k++)
        if (strcmp(option->name, not_bearing[k]) == 0)
            return false;
    return (option->commands & FESCUE_FOR_FILL) != 0;
}

void option_line_add(char text[OPTIONS_SIZE], size_t *used, const char *name, const char *value)
{
    int put = snprintf(text + *used, OPTIONS_SIZE - *used, "%s=%s\n", name, value);
    if (put > 0 && (size_t)put < OPTIONS_SIZE - *used)
        *used += (size_t)put;
}

void options_words(const struct fescue_options *options, char text[OPTIONS_SIZE])
{
    size_t count, used = 0;
    const struct fescue_option *table = fescue_option_table(&count);
    text[0] = '\0';
    for (size_t k = 0; k < count; k++) {
        char value[256];
        if (!option_is_bearing(&table[k]))
            continue;
        const char *const *given = (const void *)((const char *)options + table[k].position);
        bool is_text =
            table[k].kind == FESCUE_KIND_TEXT; /* as in the record: of any length, and left out if not given */
        if (is_text && *given == NULL)
            continue;
        if (!is_text)
            fescue_option_text(&table[k], options, value, sizeof value);
        option_line_add(text, &used, table[k].name, is_text ? *given : value);
    }
}

/* Of a table that did not come from a file. */
static uint64_t cells_digest(const struct cells *cells)
{
    size_t size = cells->precision == FESCUE_SINGLE ? sizeof(float) : sizeof(double);
    const struct half *half = &cells->by_row;
    uint64_t digest = memo_digest(0, half->start, ((size_t)half->lines + 1) * sizeof *half->start);
    digest = memo_digest(digest, half->across, cells->count * sizeof *half->across);
    return memo_digest(digest, half->value, cells->count * size);
}

fescue_status checkpoint_open(const fescue_table *table, const struct fescue_options *options)
{
    const struct cells *cells = &table->cells;
    char lines[OPTIONS_SIZE];
    struct text text = {.context = table->context};
    char *identity = NULL;
    fescue_status status = FESCUE_OK;
    if (options->checkpoint == NULL || options->checkpoint_every <= 0) {
        memo_close(table->context);
        return FESCUE_OK;
    }
    options_words(options, lines);
    text_add(&text, "version=%s\nloops=%s\nproducts=%s\n", FESCUE_VERSION, kernel_name(), openblas_kernels());
    text_add(&text, "input of %" PRIu64 " bytes with checksum %08" PRIx32 "\n", table->input_bytes, table->input_crc32);
    text_add(&text, "%" PRIu32 " rows, %" PRIu32 " columns, %" PRIu64 " cells, %016" PRIx64 "\n", cells->rows,
             cells->columns, cells->count, table->look.shape == SHAPE_MEMORY ? cells_digest(cells) : 0);
    if (cells->by_row.weight != NULL) /* the files that they come from may have changed */
        text_add(&text, "weights %016" PRIx64 "\n",
                 memo_digest(0, cells->by_row.weight, cells->count * sizeof *cells->by_row.weight));
    for (const char *line = lines, *end; (end = strchr(line, '\n')) != NULL; line = end + 1)
        text_add(&text, "%.*s\n", (int)(end - line), line);
    TRY(text_finish(&text, &identity));
    TRY(memo_open(table->context, options->checkpoint, identity, options->checkpoint_every));
done:
    GIVE(table->context, &identity);
    return status;
}
