/* SPDX-License-Identifier: MIT
 *
 * Text of one file that the team makes: the numbers of a table are dear to find and to write as decimals, their bytes
 * are cheap to move. Pieces are made some at a time, each into a sink of its own that stays in memory, and then follow
 * in the file one after the other. So the file does not depend on who made what.
 */
#include "base/output_internal.h"

#include <string.h>

enum {
    SINKS_A_WORKER = 8, /* pieces differ in length */
    SINK_LEAST = 64 * 1024,
};

struct sharing {
    outfile_task *task;
    void *job;
    size_t first; /* the piece that goes to the first sink */
    struct outfile *sink;
};

bool sink_grow(struct outfile *sink, size_t count)
{
    size_t size = sink->size < SINK_LEAST ? SINK_LEAST : 2 * sink->size;
    if (size - sink->used < count)
        size = sink->used + count;
    sink->status = RESIZE(sink->context, size, &sink->buffer);
    if (sink->status == FESCUE_OK)
        sink->size = size;
    return sink->status == FESCUE_OK;
}

static void piece_make(void *job, size_t which, size_t worker)
{
    const struct sharing *sharing = job;
    (void)worker;
    sharing->task(sharing->job, sharing->first + which, &sharing->sink[which]);
}

static void sink_empty(struct outfile *sink, struct outfile *file)
{
    if (file->status == FESCUE_OK)
        file->status = sink->status;
    outfile_write(file, sink->buffer, sink->used);
    sink->used = 0;
}

void outfile_share(struct outfile *file, size_t pieces, outfile_task *task, void *job)
{
    fescue_context *context = file->context;
    size_t sinks = SINKS_A_WORKER * team_workers(context);
    struct sharing sharing = {.task = task, .job = job};
    if (sinks > pieces)
        sinks = pieces;
    if (file->status == FESCUE_OK)
        file->status = TAKE(context, sinks, &sharing.sink);
    for (size_t k = 0; k < sinks && sharing.sink != NULL; k++)
        sharing.sink[k] = (struct outfile){.context = context, .final = file->final, .descriptor = -1, .grows = true};
    for (; sharing.first < pieces && file->status == FESCUE_OK; sharing.first += sinks) {
        size_t left = pieces - sharing.first, count = left < sinks ? left : sinks;
        team_run(context, count, piece_make, &sharing);
        for (size_t k = 0; k < count; k++)
            sink_empty(&sharing.sink[k], file);
    }
    for (size_t k = 0; k < sinks && sharing.sink != NULL; k++)
        GIVE(context, &sharing.sink[k].buffer);
    GIVE(context, &sharing.sink);
}
