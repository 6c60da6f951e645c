/* SPDX-License-Identifier: MIT
 *
 * Tables from small texts.
 */
#include "support_reader.h"

#include <math.h>
#include <stdio.h>
#include <stdlib.h>
#include <string.h>
#include <zlib.h>

fescue_status bytes_read(struct bench *bench, const void *bytes, size_t count, const struct table_reading *reading,
                         fescue_table **out)
{
    static const struct table_reading standard;
    char path[PATH_SIZE];
    fescue_failure_clear(bench->context);
    file_put(path_in(bench->folder, "input", path), bytes, count);
    return table_read(bench->context, path, reading != NULL ? reading : &standard, out);
}

fescue_table *text_read(struct bench *bench, const char *text, const struct table_reading *reading)
{
    fescue_table *table;
    assert_status(bench->context, bytes_read(bench, text, strlen(text), reading, &table), FESCUE_OK);
    assert_non_null(table);
    return table;
}

void bytes_refused(struct bench *bench, const void *bytes, size_t count, const struct table_reading *reading,
                   const char *sentence)
{
    char path[PATH_SIZE], expected[2 * PATH_SIZE];
    fescue_table *table;
    snprintf(expected, sizeof expected, "%s: %s", path_in(bench->folder, "input", path), sentence);
    fescue_status status = bytes_read(bench, bytes, count, reading, &table);
    assert_string_equal(fescue_failure_text(bench->context), expected);
    assert_status(bench->context, status, FESCUE_BAD_DATA);
    assert_null(table);
    assert_no_leak(bench->context);
}

void text_refused(struct bench *bench, const char *text, const struct table_reading *reading, const char *sentence)
{
    bytes_refused(bench, text, strlen(text), reading, sentence);
}

void table_check(const fescue_table *table, const char *cells)
{
    char *text = NULL;
    size_t size = 0;
    FILE *out = open_memstream(&text, &size);
    assert_non_null(out);
    assert_non_null(table->texts);
    const struct half *rows = &table->cells.by_row;
    for (uint32_t i = 0; i < rows->lines; i++)
        for (uint64_t k = rows->start[i]; k < rows->start[i + 1]; k++) {
            char row[16], column[16], buffer[32];
            size_t length;
            const char *value = texts_of(table->texts, &table->cells, k, buffer, &length);
            fprintf(out, "%s|%s|%.*s\n", label_text(&table->row_labels, i, row),
                    label_text(&table->column_labels, rows->across[k], column), (int)length, value);
        }
    fclose(out);
    assert_string_equal(text, cells);
    free(text);
}

static void halves_equal(const struct cells *a, const struct half *left, const struct cells *b,
                         const struct half *right)
{
    assert_int_equal(left->lines, right->lines);
    assert_int_equal(left->length, right->length);
    assert_memory_equal(left->start, right->start, ((size_t)left->lines + 1) * sizeof *left->start);
    for (uint64_t k = 0; k < a->count; k++) {
        assert_int_equal(left->across[k], right->across[k]);
        double x = cells_value(a, left, k), y = cells_value(b, right, k);
        assert_memory_equal(&x, &y, sizeof x);
    }
}

void tables_equal(const fescue_table *a, const fescue_table *b)
{
    assert_int_equal(a->cells.count, b->cells.count);
    assert_int_equal(a->cells.precision, b->cells.precision);
    halves_equal(&a->cells, &a->cells.by_row, &b->cells, &b->cells.by_row);
    halves_equal(&a->cells, &a->cells.by_column, &b->cells, &b->cells.by_column);
}

/* ---- what must hold -------------------------------------------------------------------------------------------- */

static bool half_is_sound(const struct cells *cells, const struct half *half)
{
    bool sound = half->start[0] == 0 && half->start[half->lines] == cells->count;
    for (uint32_t i = 0; i < half->lines; i++)
        for (uint64_t k = half->start[i]; k < half->start[i + 1]; k++)
            sound = sound && half->across[k] < half->length && isfinite(cells_value(cells, half, k)) &&
                    (k == half->start[i] || half->across[k - 1] < half->across[k]);
    return sound;
}

static bool labels_are_sound(const struct labels *labels)
{
    size_t length = 0;
    for (uint32_t i = 0; labels->text != NULL && i < labels->count; i++)
        length += strlen(labels->text[i]);
    return labels->text == NULL || length > 0;
}

/* A text that is kept reads as the value (with a decimal comma made a point). */
static bool texts_are_sound(const fescue_table *table)
{
    bool sound = true;
    for (uint64_t k = 0; table->texts != NULL && k < table->cells.count; k++) {
        char buffer[32];
        size_t length;
        const char *text = texts_of(table->texts, &table->cells, k, buffer, &length);
        char *copy = strndup(text, length);
        if (table->look.decimal == ',' && strchr(copy, ',') != NULL)
            *strchr(copy, ',') = '.';
        double value = strtod(copy, NULL), kept = cells_value(&table->cells, &table->cells.by_row, k);
        free(copy);
        sound = sound && (table->cells.precision == FESCUE_SINGLE ? (float)value == (float)kept : value == kept);
    }
    return sound;
}

bool table_is_sound(const fescue_table *table)
{
    const struct cells *cells = &table->cells;
    return cells->count > 0 && table->row_labels.count == cells->rows && table->column_labels.count == cells->columns &&
           half_is_sound(cells, &cells->by_row) && half_is_sound(cells, &cells->by_column) &&
           labels_are_sound(&table->row_labels) && labels_are_sound(&table->column_labels) && texts_are_sound(table);
}

void gzip_append(char **bytes, size_t *count, const void *text, size_t length)
{
    enum { GZIP = 15 + 16, MEMORY = 8 };
    z_stream deflating = {0};
    assert_int_equal(deflateInit2(&deflating, Z_BEST_COMPRESSION, Z_DEFLATED, GZIP, MEMORY, Z_DEFAULT_STRATEGY), Z_OK);
    size_t room = deflateBound(&deflating, length);
    *bytes = realloc(*bytes, *count + room);
    assert_non_null(*bytes);
    deflating.next_in = (unsigned char *)(uintptr_t)text;
    deflating.avail_in = (uInt)length;
    deflating.next_out = (unsigned char *)*bytes + *count;
    deflating.avail_out = (uInt)room;
    assert_int_equal(deflate(&deflating, Z_FINISH), Z_STREAM_END);
    *count += room - deflating.avail_out;
    deflateEnd(&deflating);
}
