/* SPDX-License-Identifier: MIT
 *
 * fescue fill: read, fill, write, say how it went.
 *
 * A fit that is stopped on its way still has a result, which the library hands over. Who sends a signal wants the end,
 * not a half-made table under the name of a whole one, so nothing is written then; who wants what there is after some
 * time says so with --time-limit.
 */
#include "cli.h"

fescue_status command_fill(struct request *request)
{
    fescue_context *context = request->context;
    char standard[PLACE_SIZE];
    const char *place = request->options.output;
    fescue_table *table = NULL;
    fescue_fill *fill = NULL;
    fescue_status status = FESCUE_OK;
    if (place == NULL) {
        status = place_choose(request->table, standard);
        place = standard;
    }
    if (status == FESCUE_OK)
        status = place_check(place, request->table);
    if (status == FESCUE_OK)
        status = fescue_table_read(context, request->table, &request->options, &table);
    if (status == FESCUE_OK)
        status = fescue_fill_table(table, &request->options, &fill);
    if (status == FESCUE_OK && is_asked_to_stop()) {
        progress_clear(request->progress);
        say_failure("asked to stop; nothing was written");
        status = FESCUE_STOPPED;
    }
    if (status == FESCUE_OK)
        status = fescue_fill_write(fill, place);
    if (status == FESCUE_OK)
        say_summary(request, fescue_fill_text(fill), place);
    fescue_fill_destroy(&fill);
    fescue_table_destroy(&table);
    return status;
}
