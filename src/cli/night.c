/* SPDX-License-Identifier: MIT
 *
 * fescue night: many jobs unattended. The summary goes to standard error, history and list to standard output.
 */
#include "cli.h"

fescue_status command_night(struct request *request)
{
    const struct fescue_night_options *options = &request->night_options;
    fescue_context *context = request->context;
    fescue_night *night = NULL;
    char *history = NULL;
    bool runs = !options->list && !options->history;
    fescue_status status = fescue_night_read(context, request->table, options, &night);
    if (status == FESCUE_OK && options->list)
        fputs(fescue_night_text(night), stdout);
    if (status == FESCUE_OK && options->history)
        status = fescue_night_history(night, &history);
    if (history != NULL)
        fputs(history, stdout);
    if (status == FESCUE_OK && runs) {
        status = fescue_night_run(night);
        if (status == FESCUE_OK || status == FESCUE_STOPPED || status == FESCUE_SOME_FAILED)
            say_summary(request, fescue_night_text(night), fescue_night_place(night));
    }
    fescue_text_free(context, &history);
    fescue_night_destroy(&night);
    return status;
}
