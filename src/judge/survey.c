/* SPDX-License-Identifier: MIT
 *
 * What is there before any fit, as text for people. The parts are in files of their own: survey_values, survey_lines
 * (empty, thin and constant rows and columns), survey_pattern (blocks, ranks). Labels and the path come from outside
 * and are made safe to show.
 */
#include "judge/survey_internal.h"

#include <string.h>

static const char *separator_word(char separator)
{
    switch (separator) {
    case ',':
        return "comma";
    case ';':
        return "semicolon";
    case '\t':
        return "tab";
    default:
        return "otherwise";
    }
}

static void survey_name(struct page *page, const char *path)
{
    if (path == NULL)
        page_add(page, "A table from memory");
    else if (strcmp(path, "-") == 0)
        page_add(page, "Standard input");
    else
        page_argument(page, path);
}

static void survey_input(struct survey *survey)
{
    struct page *page = survey->page;
    const struct table_look *look = &survey->table->look;
    switch (look->shape) {
    case SHAPE_MM_COORDINATE:
        page_add(page, "Read as Matrix Market, coordinate.");
        break;
    case SHAPE_MM_ARRAY:
        page_add(page, "Read as Matrix Market, array; its nan cells are holes.");
        break;
    case SHAPE_WIDE:
        page_add(page, "Read as text, one line a row, %s separated.", separator_word(look->separator));
        break;
    case SHAPE_LONG:
        page_add(page, "Read as text, one line a cell, %s separated.", separator_word(look->separator));
        break;
    case SHAPE_MEMORY:
        page_add(page, "Handed over in memory.");
        break;
    }
    if (survey->table->duplicates > 0) {
        page_add(page, " ");
        page_count(page, survey->table->duplicates, "cell that came more than once was merged.",
                   "cells that came more than once were merged.");
    }
    page_add(page, "\n");
}

static void survey_head(struct survey *survey)
{
    struct page *page = survey->page;
    const struct cells *cells = survey->cells;
    double all = (double)cells->rows * (double)cells->columns;
    survey_name(page, survey->table->path);
    page_add(page, ": ");
    page_count(page, cells->rows, "row by ", "rows by ");
    page_count(page, cells->columns, "column, ", "columns, ");
    page_add(page, "%llu of %.0f cells observed (%.3g %%).\n", (unsigned long long)cells->count, all,
             all > 0 ? 100 * (double)cells->count / all : 0);
    survey_input(survey);
    if ((double)cells->count == all)
        page_add(page, "There is nothing to fill: every cell is observed.\n");
}

static void survey_time(struct survey *survey)
{
    char words[TIME_TEXT_SIZE];
    if (survey->time->along != TIME_NONE)
        page_add(survey->page, "The %s.\n", time_axis_text(survey->time, words));
    else if (survey->time->note[0] != '\0')
        page_add(survey->page, "The %s.\n", survey->time->note);
}

/* ---- oddities ------------------------------------------------------------------------------------------------------
 */

void survey_notice(struct survey *survey, uint64_t count, const char *one, const char *many)
{
    if (survey->noticed++ == 0)
        page_add(survey->page, "\nNoticed:\n");
    page_add(survey->page, "  ! ");
    if (one != NULL)
        page_count(survey->page, count, one, many);
}

void survey_label(const struct survey *survey, const struct labels *labels, uint32_t line, const char *before)
{
    char buffer[16];
    page_add(survey->page, "%s", before);
    page_label(survey->page, label_text(labels, line, buffer));
}

void survey_more(const struct survey *survey, uint64_t found)
{
    if (found > ODD_MOST)
        page_add(survey->page, " and %llu more", (unsigned long long)(found - ODD_MOST));
    page_add(survey->page, ".\n");
}

static fescue_status survey_oddities(struct survey *survey)
{
    fescue_status status;
    size_t from = survey->page->length;
    TRY(survey_missing(survey));
    if (survey->has_order)
        TRY(survey_series(survey));
    TRY(survey_twins(survey));
    TRY(survey_far(survey));
    page_wrap(survey->page, from);
    if (survey->noticed == 0)
        page_add(survey->page,
                 "\nNothing else is odd: no %scopied lines, no cell far from all others, and being missing does "
                 "not go with the value.\n",
                 survey->has_order ? "late, stuck or " : "");
done:
    return status;
}

/* ---- the order -----------------------------------------------------------------------------------------------------
 */

/* Along time where there is a clock; else along the side whose holes come in runs, else down the rows. A table of one
   line a cell has its rows and columns in the order in which they first came up, which means nothing. */
static fescue_status order_find(struct survey *survey)
{
    fescue_status status = FESCUE_OK;
    const fescue_table *table = survey->table;
    const struct time_axis *time = survey->time;
    bool has_clock = time->along != TIME_NONE;
    struct line_order order = {
        .along_columns = time->along == TIME_COLUMNS, .at = has_clock ? time->at : NULL, .order = time->order};
    TRY(hole_shape_find(table->context, survey->cells, has_clock ? &order : NULL, &survey->shape));
    if (!has_clock)
        order = (struct line_order){.along_columns =
                                        survey->shape.shape == FESCUE_HOLDOUT_GAPS && survey->shape.along_columns};
    TRY(tracks_create(table->context, survey->cells, &order, &survey->tracks));
    survey->has_order = has_clock || table->look.shape != SHAPE_LONG;
    survey->is_ordered = has_clock || (survey->has_order && survey->shape.shape == FESCUE_HOLDOUT_GAPS);
    TRY(TAKE(table->context, survey->tracks.places, &survey->line_of));
    for (uint32_t line = 0; line < survey->tracks.places; line++)
        survey->line_of[survey->tracks.placed[line]] = line;
    survey->place_labels = order.along_columns ? &table->column_labels : &table->row_labels;
    survey->sensor_labels = order.along_columns ? &table->row_labels : &table->column_labels;
    survey->places_word = order.along_columns ? "columns" : "rows";
    survey->sensor_word = order.along_columns ? "row" : "column";
    survey->sensors_word = order.along_columns ? "rows" : "columns";
done:
    return status;
}

/* A command line that can be pasted. */
static void survey_suggest(struct survey *survey)
{
    enum { STANDARD_MOST = 30 }; /* what --rank-most is anyway */
    struct page *page = survey->page;
    const char *path = survey->table->path;
    if (path == NULL || survey->cells->count == 0)
        return;
    page_add(page, "\nA run to begin with:\n    fescue fill ");
    page_argument(page, path);
    if (strcmp(path, "-") == 0)
        page_add(page, " -o filled");
    if (survey->rank_most == 0)
        page_add(page, " --rank 0");
    else if (survey->rank_most < STANDARD_MOST)
        page_add(page, " --rank-most %llu", (unsigned long long)survey->rank_most);
    if (survey->is_scale) {
        char low[32], high[32];
        real_to_text(survey->low, survey->cells->precision, low);
        real_to_text(survey->high, survey->cells->precision, high);
        page_add(page, " --bounds %s:%s", low, high);
    }
    if (survey->table->duplicates > 0)
        page_add(page, " --duplicates mean");
    page_add(page, "\n");
}

fescue_status survey_text(const fescue_table *table, const struct time_axis *time, char **out)
{
    static const struct time_axis no_time = {.along = TIME_NONE};
    fescue_status status = FESCUE_OK;
    fescue_context *context = table->context;
    struct page page = {.context = context};
    struct survey survey = {
        .table = table, .cells = &table->cells, .time = time != NULL ? time : &no_time, .page = &page};
    *out = NULL;
    TRY(TAKE(context, table->cells.rows, &survey.row_core));
    TRY(TAKE(context, table->cells.columns, &survey.column_core));
    TRY(TAKE(context, table->cells.rows, &survey.row_block));
    TRY(TAKE(context, table->cells.columns, &survey.column_block));
    TRY(core_numbers(context, &table->cells, survey.row_core, survey.column_core));
    survey_head(&survey);
    survey_time(&survey);
    if (table->cells.count > 0) {
        TRY(order_find(&survey));
        TRY(survey_values(&survey));
        survey_lines(&survey);
        TRY(survey_blocks(&survey));
        TRY(survey_ranks(&survey));
        TRY(survey_holes(&survey));
        TRY(survey_oddities(&survey));
    }
    survey_suggest(&survey);
    TRY(page_close(&page, out));
done:
    tracks_free(context, &survey.tracks);
    GIVE(context, &survey.line_of);
    GIVE(context, &survey.row_block);
    GIVE(context, &survey.column_block);
    GIVE(context, &survey.row_core);
    GIVE(context, &survey.column_core);
    GIVE(context, &page.bytes);
    return status;
}
