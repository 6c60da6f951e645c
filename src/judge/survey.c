/* SPDX-License-Identifier: MIT
 *
 * What is there before any fit, as text for people. The parts are in files of their own: survey_values, survey_lines
 * (empty, thin and constant rows and columns), survey_pattern (blocks, ranks). Labels and the path come from outside
 * and are made safe to show.
 */
#include "judge/judge_internal.h"

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

static void survey_time(struct survey *survey, const struct time_axis *time)
{
    char words[TIME_TEXT_SIZE];
    if (time != NULL && time->along != TIME_NONE)
        page_add(survey->page, "The %s.\n", time_axis_text(time, words));
    else if (time != NULL && time->note[0] != '\0')
        page_add(survey->page, "The %s.\n", time->note);
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
    fescue_status status = FESCUE_OK;
    fescue_context *context = table->context;
    struct page page = {.context = context};
    struct survey survey = {.table = table, .cells = &table->cells, .page = &page};
    *out = NULL;
    TRY(TAKE(context, table->cells.rows, &survey.row_core));
    TRY(TAKE(context, table->cells.columns, &survey.column_core));
    TRY(core_numbers(context, &table->cells, survey.row_core, survey.column_core));
    survey_head(&survey);
    survey_time(&survey, time);
    if (table->cells.count > 0) {
        survey_values(&survey);
        survey_lines(&survey);
        TRY(survey_blocks(&survey));
        TRY(survey_ranks(&survey));
    }
    survey_suggest(&survey);
    TRY(page_close(&page, out));
done:
    GIVE(context, &survey.row_core);
    GIVE(context, &survey.column_core);
    GIVE(context, &page.bytes);
    return status;
}
