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
#include "write/write_internal.h"

#include <string.h>

struct filling {
    const struct run *run;
    const fescue_table *table;
    struct outfile *file;
    char separator;
};

/* What stands in one cell. */
struct content {
    uint64_t seen; /* number in row order, or PLACE_UNSEEN */
    bool is_blank;
    double estimate;
};

const char *filled_name(const fescue_table *table)
{
    bool is_text = table->look.shape == SHAPE_WIDE || table->look.shape == SHAPE_LONG;
    if (!is_text)
        return "filled.mtx";
    return table->look.separator == '\t' ? "filled.tsv" : "filled.csv";
}

static struct content content_at(const struct filling *filling, const struct place *at)
{
    if (at->seen != PLACE_UNSEEN)
        return (struct content){.seen = at->seen};
    struct unseen unseen = run_unseen(filling->run, at->row, at->column);
    return (struct content){.seen = PLACE_UNSEEN, .is_blank = unseen.is_blank, .estimate = unseen.estimate};
}

/* The same filling, into the sink of a piece. */
static struct filling filling_into(const void *job, struct outfile *sink)
{
    struct filling filling = *(const struct filling *)job;
    filling.file = sink;
    return filling;
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
    if (content->seen != PLACE_UNSEEN)
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

static void entry_put(const void *job, const struct place *at, struct outfile *sink)
{
    const struct filling filling = filling_into(job, sink);
    struct content content = content_at(&filling, at);
    if (content.is_blank)
        return;
    outfile_count(sink, (uint64_t)at->row + 1);
    outfile_text(sink, " ");
    outfile_count(sink, (uint64_t)at->column + 1);
    outfile_text(sink, " ");
    content_put(&filling, &content, "");
    outfile_text(sink, "\n");
}

static fescue_status coordinate_put(const struct filling *filling)
{
    const struct cells *cells = &filling->table->cells;
    struct outfile *file = filling->file;
    header_put(filling, "coordinate");
    outfile_format(file, "%u %u ", cells->rows, cells->columns);
    outfile_count(file, (uint64_t)cells->rows * cells->columns - filling->run->blank);
    outfile_text(file, "\n");
    walk_share(file, cells, false, entry_put, filling);
    return outfile_status(file);
}

static void element_put(const void *job, const struct place *at, struct outfile *sink)
{
    const struct filling filling = filling_into(job, sink);
    struct content content = content_at(&filling, at);
    content_put(&filling, &content, "nan");
    outfile_text(sink, "\n");
}

static fescue_status array_put(const struct filling *filling)
{
    const struct cells *cells = &filling->table->cells;
    header_put(filling, "array");
    outfile_format(filling->file, "%u %u\n", cells->rows, cells->columns);
    walk_share(filling->file, cells, true, element_put, filling);
    return outfile_status(filling->file);
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

static void wide_cell_put(const void *job, const struct place *at, struct outfile *sink)
{
    const struct filling filling = filling_into(job, sink);
    struct content content = content_at(&filling, at);
    char buffer[16];
    if (at->column == 0) {
        outfile_text(sink, "\n");
        field_put(&filling, label_text(&filling.table->row_labels, at->row, buffer));
    }
    separator_put(&filling);
    content_put(&filling, &content, "");
}

static fescue_status wide_put(const struct filling *filling)
{
    const fescue_table *table = filling->table;
    char buffer[16];
    if (table->look.corner != NULL)
        field_put(filling, table->look.corner);
    for (uint32_t column = 0; column < table->cells.columns; column++) {
        separator_put(filling);
        field_put(filling, label_text(&table->column_labels, column, buffer));
    }
    walk_share(filling->file, &table->cells, false, wide_cell_put, filling);
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

static void line_put(const void *job, const struct place *at, struct outfile *sink)
{
    const struct filling filling = filling_into(job, sink);
    struct content content = content_at(&filling, at);
    char buffer[16];
    if (content.is_blank)
        return;
    field_put(&filling, label_text(&filling.table->row_labels, at->row, buffer));
    separator_put(&filling);
    field_put(&filling, label_text(&filling.table->column_labels, at->column, buffer));
    separator_put(&filling);
    content_put(&filling, &content, "");
    outfile_text(sink, "\n");
}

static fescue_status long_put(const struct filling *filling)
{
    titles_put(filling);
    walk_share(filling->file, &filling->table->cells, false, line_put, filling);
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
