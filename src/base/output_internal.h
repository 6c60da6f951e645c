/* SPDX-License-Identifier: MIT
 *
 * One file of an output set. Only output.c and outfile.c see it.
 */
#ifndef FESCUE_BASE_OUTPUT_INTERNAL_H
#define FESCUE_BASE_OUTPUT_INTERNAL_H

#include "base/context_internal.h"

enum outfile_state { OUTFILE_ABSENT, OUTFILE_TEMPORARY, OUTFILE_RENAMED, OUTFILE_KEPT };

struct outfile {
    struct outfile *next;
    fescue_context *context;
    char *final, *temporary; /* paths */
    enum outfile_state state;
    int descriptor; /* -1 once closed */
    fescue_status status;
    size_t used, size;
    char *buffer;
    bool grows; /* a sink: all that is appended stays in the buffer */
};

/* New text: the four pieces one after the other. The caller owns it. */
fescue_status path_join(fescue_context *context, const char *directory, const char *prefix, const char *name,
                        const char *suffix, char **out);
/* fsync, again after a signal. */
int descriptor_sync(fescue_context *context, int descriptor);

/* New file under its temporary name; `directory` ends in a slash. FESCUE_CANNOT_CREATE. */
fescue_status outfile_create(fescue_context *context, const char *directory, const char *name, struct outfile **out);
/* Writes what is buffered, flushes to disk, closes. */
fescue_status outfile_finish(struct outfile *file);
fescue_status outfile_rename(struct outfile *file);
/* Makes room for so many bytes more in the buffer of a sink. */
bool sink_grow(struct outfile *sink, size_t count);
/* Removes it from the disk, under the name it has now. */
void outfile_remove(struct outfile *file);
/* Closes; removes it from the disk unless it is kept. */
void outfile_destroy(struct outfile *file);

#endif
