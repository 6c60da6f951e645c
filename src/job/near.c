/* SPDX-License-Identifier: MIT
 *
 * Near columns in a fill: the file that --near-columns names, and what the summary says of them.
 */
#include "job/job_internal.h"

#include <inttypes.h>

fescue_status near_take(fescue_fill *fill, const char *path, struct choose_request *request)
{
    fescue_context *context = fill->context;
    fescue_status status = FESCUE_OK;
    if (path == NULL)
        return FESCUE_OK;
    if (request->way == CHOOSE_PATH || fill->options.ridge != (double)FESCUE_AUTO)
        TRY(FAIL(context, FESCUE_USAGE,
                 "near columns are taken by the evidence fit alone: leave --solver and --ridge at auto"));
    if (fill->time.along == TIME_COLUMNS)
        TRY(FAIL(context, FESCUE_USAGE,
                 "--near-columns is for columns that are no times; here the columns are, and which are near is known"));
    TRY(nearness_read(fill->table, path, &fill->near));
    request->way = CHOOSE_LEARN;
    request->near = &fill->near;
done:
    return status;
}

bool near_is_felt(const struct near_part *part)
{
    static const double felt = 0.01; /* of a column's own shrinkage; less moves nothing */
    return part->is_there && (part->components >= felt || part->effect >= felt);
}

void near_line(const fescue_fill *fill, struct text *text)
{
    const struct near_part *part = &fill->fit.model.near;
    const struct choice *choice = &fill->choice;
    char components[32], effect[32], with[32], without[32];
    if (fill->near.count == 0)
        return;
    text_add(text, "near       %" PRIu64 " pair%s of columns", fill->near.count, fill->near.count == 1 ? "" : "s");
    if (choice->far_errors.count == 0) {
        text_add(text, ", not taken: there are no components, or no noise, for near columns to share\n");
        return;
    }
    real_to_words(choice->far_errors.rmse, 4, without);
    if (!part->is_there) {
        text_add(text, ", not taken: hidden cells are met no better with them (RMSE %s without)\n", without);
        return;
    }
    text_add(text, ", drawn together %s times their own shrinkage (offsets %s times)\n",
             real_to_words(part->components, 3, components), real_to_words(part->effect, 3, effect));
    text_add(text, "           RMSE %s on hidden cells with near columns, %s without\n",
             real_to_words(choice->errors.rmse, 4, with), without);
}
