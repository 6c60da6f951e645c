/* SPDX-License-Identifier: MIT
 *
 * fescue survey: what the table is like, before any fit. Its text is data and goes to standard output.
 */
#include "cli.h"

fescue_status command_survey(struct request *request)
{
    fescue_table *table = NULL;
    fescue_survey *survey = NULL;
    fescue_status status = fescue_table_read(request->context, request->table, &request->options, &table);
    if (status == FESCUE_OK)
        status = fescue_survey_table(table, &request->options, &survey);
    if (status == FESCUE_OK) {
        progress_clear(request->progress);
        fputs(fescue_survey_text(survey), stdout);
    }
    fescue_survey_destroy(&survey);
    fescue_table_destroy(&table);
    return status;
}
