/* SPDX-License-Identifier: MIT
 *
 * fescue fill: read, fill, write, say how it went.
 *
 * A fit that is stopped on its way still has a result, which the library hands over. Who sends a signal wants the end,
 * not a half-made table under the name of a whole one, so nothing but a checkpoint is written then; who wants what
 * there is after some time says so with --time-limit.
 */
#include "cli.h"

#include <unistd.h>

/* In the place itself, where nothing else of this name lies. */
static const char checkpoint_name[] = "/.fescue-checkpoint";

static void stop_say(const struct request *request)
{
    const char *path = request->options.checkpoint;
    progress_clear(request->progress);
    fescue_failure_clear(request->context);
    if (path != NULL && access(path, F_OK) == 0)
        say_stop("asked to stop; the same command goes on from %s", path);
    else
        say_stop("asked to stop; nothing was written");
}

fescue_status command_fill(struct request *request)
{
    fescue_context *context = request->context;
    char standard[PLACE_SIZE], checkpoint[PLACE_SIZE + sizeof checkpoint_name];
    fescue_hold *hold = NULL;
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
    if (status == FESCUE_OK && request->options.checkpoint == NULL && request->options.checkpoint_every > 0) {
        snprintf(checkpoint, sizeof checkpoint, "%s%s", place, checkpoint_name);
        request->options.checkpoint = checkpoint;
    }
    if (status == FESCUE_OK)
        status = fescue_place_hold(context, place, 0, &hold);
    if (status == FESCUE_OK)
        status = fescue_fill_table(table, &request->options, &fill);
    if (status == FESCUE_OK && is_asked_to_stop())
        status = FESCUE_STOPPED;
    if (status == FESCUE_OK)
        status = fescue_fill_write(fill, place);
    if (status == FESCUE_STOPPED)
        stop_say(request);
    if (status == FESCUE_OK)
        say_summary(request, fescue_fill_text(fill), place);
    fescue_fill_destroy(&fill);
    fescue_table_destroy(&table);
    fescue_place_release(&hold);
    return status;
}
