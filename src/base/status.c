/* SPDX-License-Identifier: MIT
 *
 * Status codes and the record of the first failure.
 *
 * A failure deep down makes others further up ("cannot read" makes "cannot fit"); the first is the one a person can act
 * on, so it is kept and the rest are dropped. The one exception: being asked to stop is no fault of anything, so a real
 * failure replaces it.
 */
#include "base/context_internal.h"

#include <assert.h>
#include <stdio.h>

static const struct {
    const char *text;
    int exit_code;
} statuses[] = {
#define STATUS_ENTRY(name, code, words) [name] = {words, code},
    FESCUE_STATUS_LIST(STATUS_ENTRY)
#undef STATUS_ENTRY
};

static bool is_status(fescue_status status)
{
    return (size_t)status < sizeof statuses / sizeof statuses[0];
}

const char *fescue_status_text(fescue_status status)
{
    return is_status(status) ? statuses[status].text : "an unknown status";
}

int fescue_status_exit_code(fescue_status status)
{
    return statuses[is_status(status) ? status : FESCUE_DEFECT].exit_code;
}

void failure_open(struct failure *failure)
{
    pthread_mutex_init(&failure->lock, NULL);
}

void failure_close(struct failure *failure)
{
    pthread_mutex_destroy(&failure->lock);
}

fescue_status failure_record(fescue_context *context, fescue_status status, const char *where, const char *format, ...)
{
    assert(status != FESCUE_OK);
    struct failure *failure = &context->failure;
    pthread_mutex_lock(&failure->lock);
    if (failure->status == FESCUE_OK || (failure->status == FESCUE_STOPPED && status != FESCUE_STOPPED)) {
        failure->status = status;
        va_list arguments;
        va_start(arguments, format);
        int length = sentence_format(context, failure->text, sizeof failure->text, format, arguments);
        va_end(arguments);
        if (length < 0)
            snprintf(failure->text, sizeof failure->text, "%s", fescue_status_text(status));
        snprintf(failure->where, sizeof failure->where, "%s", where);
    }
    pthread_mutex_unlock(&failure->lock);
    return status;
}

/* Without a context there is one way to fail: there was no memory for it. */
const char *fescue_failure_text(const fescue_context *context)
{
    return context == NULL ? fescue_status_text(FESCUE_NO_MEMORY) : context->failure.text;
}

const char *fescue_failure_where(const fescue_context *context)
{
    return context == NULL ? "" : context->failure.where;
}

void fescue_failure_clear(fescue_context *context)
{
    struct failure *failure = &context->failure;
    pthread_mutex_lock(&failure->lock);
    failure->status = FESCUE_OK;
    failure->text[0] = '\0';
    failure->where[0] = '\0';
    pthread_mutex_unlock(&failure->lock);
    atomic_store(&context->cancelled, false);
}
