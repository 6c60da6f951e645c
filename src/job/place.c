/* SPDX-License-Identifier: MIT
 *
 * A hold on a directory for results: a lock in it, under a name that no result has. Whoever holds it also removes what
 * runs that died left there under temporary names.
 */
#include "job/job_internal.h"

#include <string.h>
#include <unistd.h>

struct fescue_hold {
    fescue_context *context;
    struct lock lock;
    char *directory;
    bool is_made;
};

fescue_status fescue_place_hold(fescue_context *context, const char *directory, double patience, fescue_hold **out)
{
    static const char lock_name[] = "/.fescue-lock";
    char *name = NULL;
    fescue_status status;
    *out = NULL;
    TRY(TAKE(context, strlen(directory) + sizeof lock_name, &name));
    stpcpy(stpcpy(name, directory), lock_name);
    TRY(TAKE(context, 1, out));
    fescue_hold *hold = *out;
    hold->context = context;
    hold->is_made = access(directory, F_OK) != 0;
    TRY(memory_copy_text(context, directory, strlen(directory), &hold->directory));
    TRY(directory_make(context, directory));
    TRY(lock_take(context, name, directory, patience, &hold->lock));
    TRY(output_sweep(context, directory));
done:
    GIVE(context, &name);
    if (status != FESCUE_OK)
        fescue_place_release(out);
    return status;
}

/* A directory that is not empty refuses to go, and stays. */
void fescue_place_release(fescue_hold **pointer)
{
    fescue_hold *hold = *pointer;
    if (hold == NULL)
        return;
    fescue_context *context = hold->context;
    lock_give(context, &hold->lock);
    if (hold->is_made && hold->directory != NULL)
        rmdir(hold->directory);
    GIVE(context, &hold->directory);
    GIVE(context, pointer);
}
