/* SPDX-License-Identifier: MIT
 *
 * fescue rank: which rank a table supports. Its text is data and goes to standard output; with -o the curve also goes
 * into a file.
 */
#include "cli.h"

fescue_status command_rank(struct request *request)
{
    const char *place = request->options.output;
    fescue_table *table = NULL;
    fescue_ranking *ranking = NULL;
    fescue_status status = FESCUE_OK;
    if (place != NULL)
        status = place_check(place, request->table);
    if (status == FESCUE_OK)
        status = fescue_table_read(request->context, request->table, &request->options, &table);
    if (status == FESCUE_OK)
        status = fescue_rank_table(table, &request->options, &ranking);
    if (status == FESCUE_OK && place != NULL)
        status = fescue_ranking_write(ranking, place);
    if (status == FESCUE_OK) {
        progress_clear(request->progress);
        fputs(fescue_ranking_text(ranking), stdout);
    }
    fescue_ranking_destroy(&ranking);
    fescue_table_destroy(&table);
    return status;
}
