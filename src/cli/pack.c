/* SPDX-License-Identifier: MIT
 *
 * fescue pack: a table as a file that later runs map instead of parsing a text.
 */
#include "cli.h"

fescue_status command_pack(struct request *request)
{
    const char *place = request->options.output;
    fescue_table *table = NULL;
    char *text = NULL;
    if (place == NULL)
        return say_usage("pack needs to be told where the packed table goes: -o FILE");
    fescue_status status = place_check_file(place, request->table);
    if (status == FESCUE_OK)
        status = fescue_table_read(request->context, request->table, &request->options, &table);
    if (status == FESCUE_OK)
        status = fescue_table_pack(table, place, &text);
    if (status == FESCUE_OK)
        say_summary(request, text, place);
    fescue_text_free(request->context, &text);
    fescue_table_destroy(&table);
    return status;
}
