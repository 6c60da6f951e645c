/* SPDX-License-Identifier: MIT
 *
 * fescue sow: a synthetic table with known truth.
 */
#include "cli.h"

fescue_status command_sow(struct request *request)
{
    const char *place = request->sow_options.output;
    char *text = NULL;
    if (place == NULL)
        return say_usage("sow needs to be told where the table and its truth go: -o DIR");
    fescue_status status = place_check(place, NULL);
    if (status == FESCUE_OK)
        status = fescue_sow(request->context, &request->sow_options, place, &text);
    if (status == FESCUE_OK)
        say_summary(request, text, place);
    fescue_text_free(request->context, &text);
    return status;
}
