/* SPDX-License-Identifier: MIT
 *
 * The completed table in the shape it came in: seen cells byte for byte as they were read, unseen ones as estimates.
 *
 *   came as                      goes as                                         unseen, left blank by --strict
 *   Matrix Market coordinate     filled.mtx, coordinate, general, row by row     no line
 *   Matrix Market array          filled.mtx, array, general                      nan
 *   from memory                  filled.mtx, array, general                      nan
 *   wide text                    filled.csv or .tsv, same separator and corner   empty field
 *   long text                    filled.csv or .tsv, same titles, row by row     no line
 *
 * Estimates take the input's decimal sign. A table from memory has no text: its cells are written as the shortest
 * decimals that read back the same.
 */
#include "write/write.h"

#include <string.h>

struct filling {
    const struct run *run;
    const fescue_table *table;
    struct outfile *file;
    char separator;
};

/* What stands in one cell. */
struct content {
    bool is_seen, is_blank;
    uint64_t seen; /* number in row order */
    double estimate;
};

const char *filled_name(const fescue_table *table)
{
    bool is_text = table->look.shape == SHAPE_WIDE || table->look.shape == SHAPE_LONG;
    if (!is_text)
        return "filled.mtx";
    return table->look.separator == '\t' ? "filled.tsv" : "filled.csv";
}

/* The content of a cell; *next is the row's next seen cell, and is stepped over when it is this one. */
static struct content content_at(const struct filling *filling, uint32_t row, uint32_t column, uint64_t *next)
{
    const struct half *half = &filling->table->cells.by_row;
    if (*next < half->start[row + 1] && half->across[*next] == column)
        return (struct content){.is_seen = true, .seen = (*next)++};
    struct unseen unseen = run_unseen(filling->run, row, column);
    return (struct content){.is_blank = unseen.is_blank, .estimate = unseen.estimate};
}

/* The shortest decimal that reads back the same, with the decimal sign that the input has. */
static void real_put(const struct filling *filling, double value, enum fescue_precision precision)
{
    char text[32];
    size_t length = real_to_text(value, precision, text);
    char *point = memchr(text, '.', length);
    if (point != NULL && filling->table->look.decimal == ',')
        *point = ',';
    outfile_write(filling->file, text, length);
}

static void seen_put(const struct filling *filling, uint64_t k)
{
    const struct cells *cells = &filling->table->cells;
    char buffer[32];
    size_t length;
    if (filling->table->texts == NULL) {
        real_put(filling, cells_value(cells, &cells->by_row, k), cells->precision);
        return;
    }
    const char *text = texts_of(filling->table->texts, cells, k, buffer, &length);
    outfile_write(filling->file, text, length);
}

static void content_put(const struct filling *filling, const struct content *content, const char *blank)
{
    if (content->is_seen)
        seen_put(filling, content->seen);
    else if (content->is_blank)
        outfile_text(filling->file, blank);
    else
        real_put(filling, content->estimate, FESCUE_DOUBLE);
}

/* ---- Matrix Market ------------------------------------------------------------------------------------------------
 */

static void header_put(const struct filling *filling, const char *format)
{
    outfile_format(filling->file, "%%%%MatrixMarket matrix %s real general\n", format);
    outfile_format(filling->file, "%% completed by fescue " FESCUE_VERSION "\n%% %s\n", run_caution);
}

static fescue_status coordinate_put(const struct filling *filling)
{
    const struct cells *cells = &filling->table->cells;
    struct outfile *file = filling->file;
    uint64_t next = 0;
    header_put(filling, "coordinate");
    outfile_format(file, "%u %u ", cells->rows, cells->columns);
    outfile_count(file, (uint64_t)cells->rows * cells->columns - filling->run->blank);
    outfile_text(file, "\n");
    for (uint32_t row = 0; row < cells->rows; row++)
        for (uint32_t column = 0; column < cells->columns; column++) {
            struct content content = content_at(filling, row, column, &next);
            if (content.is_blank)
                continue;
            outfile_count(file, (uint64_t)row + 1);
            outfile_text(file, " ");
            outfile_count(file, (uint64_t)column + 1);
            outfile_text(file, " ");
            content_put(filling, &content, "");
            outfile_text(file, "\n");
        }
    return outfile_status(file);
}

/* Column after column, while seen cells are numbered row by row: every row keeps its own place. */
static fescue_status array_put(const struct filling *filling)
{
    const struct cells *cells = &filling->table->cells;
    struct outfile *file = filling->file;
    uint64_t *next = NULL;
    fescue_status status;
    TRY(TAKE(filling->run->context, cells->rows, &next));
    for (uint32_t row = 0; row < cells->rows; row++)
        next[row] = cells->by_row.start[row];
    header_put(filling, "array");
    outfile_format(file, "%u %u\n", cells->rows, cells->columns);
    for (uint32_t column = 0; column < cells->columns; column++)
        for (uint32_t row = 0; row < cells->rows; row++) {
            struct content content = content_at(filling, row, column, &next[row]);
            content_put(filling, &content, "nan");
            outfile_text(file, "\n");
        }
    TRY(outfile_status(file));
done:
    GIVE(filling->run->context, &next);
    return status;
}

/* ---- delimited text -----------------------------------------------------------------------------------------------
 */

static void field_put(const struct filling *filling, const char *text)
{
    write_field(filling->file, text, filling->separator);
}

static void separator_put(const struct filling *filling)
{
    outfile_write(filling->file, &filling->separator, 1);
}

static fescue_status wide_put(const struct filling *filling)
{
    const fescue_table *table = filling->table;
    char buffer[16];
    uint64_t next = 0;
    if (table->look.corner != NULL)
        field_put(filling, table->look.corner);
    for (uint32_t column = 0; column < table->cells.columns; column++) {
        separator_put(filling);
        field_put(filling, label_text(&table->column_labels, column, buffer));
    }
    for (uint32_t row = 0; row < table->cells.rows; row++) {
        outfile_text(filling->file, "\n");
        field_put(filling, label_text(&table->row_labels, row, buffer));
        for (uint32_t column = 0; column < table->cells.columns; column++) {
            struct content content = content_at(filling, row, column, &next);
            separator_put(filling);
            content_put(filling, &content, "");
        }
    }
    outfile_text(filling->file, "\n");
    return outfile_status(filling->file);
}

static void titles_put(const struct filling *filling)
{
    const struct table_look *look = &filling->table->look;
    if (look->row_title == NULL || look->column_title == NULL || look->value_title == NULL)
        return;
    field_put(filling, look->row_title);
    separator_put(filling);
    field_put(filling, look->column_title);
    separator_put(filling);
    field_put(filling, look->value_title);
    outfile_text(filling->file, "\n");
}

static fescue_status long_put(const struct filling *filling)
{
    const fescue_table *table = filling->table;
    char row_buffer[16], column_buffer[16];
    uint64_t next = 0;
    titles_put(filling);
    for (uint32_t row = 0; row < table->cells.rows; row++)
        for (uint32_t column = 0; column < table->cells.columns; column++) {
            struct content content = content_at(filling, row, column, &next);
            if (content.is_blank)
                continue;
            field_put(filling, label_text(&table->row_labels, row, row_buffer));
            separator_put(filling);
            field_put(filling, label_text(&table->column_labels, column, column_buffer));
            separator_put(filling);
            content_put(filling, &content, "");
            outfile_text(filling->file, "\n");
        }
    return outfile_status(filling->file);
}

fescue_status write_filled(const struct run *run, struct output *output)
{
    struct filling filling = {.run = run, .table = run->table, .separator = run->table->look.separator};
    fescue_status status = output_add(output, filled_name(run->table), &filling.file);
    if (status != FESCUE_OK)
        return status;
    switch (run->table->look.shape) {
    case SHAPE_MM_COORDINATE:
        return coordinate_put(&filling);
    case SHAPE_WIDE:
        return wide_put(&filling);
    case SHAPE_LONG:
        return long_put(&filling);
    case SHAPE_MM_ARRAY:
    case SHAPE_MEMORY:
        break;
    }
    return array_put(&filling);
}
