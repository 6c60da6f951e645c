/* SPDX-License-Identifier: MIT
 *
 * The context: what a run needs from its surroundings, and what it tells them.
 */
#include "base/context_internal.h"

#include <assert.h>
#include <inttypes.h>
#include <signal.h>
#include <stdio.h>
#include <stdlib.h>
#include <string.h>

static fescue_context *context_allocate(const struct fescue_hooks *hooks)
{
    const size_t size = sizeof(fescue_context);
    fescue_context *context = hooks->take != NULL ? hooks->take(hooks->data, size) : malloc(size);
    if (context != NULL)
        memset(context, 0, size);
    return context;
}

static void context_release(fescue_context *context)
{
    const struct fescue_hooks hooks = context->hooks;
    if (hooks.give != NULL)
        hooks.give(hooks.data, context);
    else
        free(context);
}

fescue_status fescue_context_create(const struct fescue_hooks *hooks, fescue_context **out)
{
    static const struct fescue_hooks none;
    if (hooks == NULL)
        hooks = &none;
    assert((hooks->take == NULL) == (hooks->give == NULL));
    *out = NULL;

    fescue_context *context = context_allocate(hooks);
    if (context == NULL)
        return FESCUE_NO_MEMORY;
    context->hooks = *hooks;
    context->locale = newlocale(LC_ALL_MASK, "C", (locale_t)0);
    if (context->locale == (locale_t)0) {
        context_release(context);
        return FESCUE_NO_MEMORY;
    }
    context->files = &posix_file_calls;
    failure_open(&context->failure);
    team_open(&context->team);
    openblas_hold();
    *out = context;
    return FESCUE_OK;
}

void fescue_context_destroy(fescue_context **context)
{
    if (*context == NULL)
        return;
    memo_close(*context);
    team_close(&(*context)->team);
    failure_close(&(*context)->failure);
    freelocale((*context)->locale);
    context_release(*context);
    *context = NULL;
}

/* A store to a lock-free atomic is all that a signal handler may do. */
void fescue_context_cancel(fescue_context *context)
{
    atomic_store(&context->cancelled, true);
}

bool is_cancelled(const fescue_context *context)
{
    return atomic_load(&context->cancelled);
}

fescue_status progress_tell(fescue_context *context, const char *stage, double share)
{
    const struct fescue_hooks *hooks = &context->hooks;
    bool go_on = hooks->progress == NULL || hooks->progress(hooks->data, stage, share);
    if (go_on && !is_cancelled(context))
        return FESCUE_OK;
    return FAIL(context, FESCUE_STOPPED, "asked to stop (%s)", stage);
}

fescue_status progress_tell_bytes(fescue_context *context, const char *stage, uint64_t done, uint64_t total,
                                  double seconds)
{
    const struct fescue_hooks *hooks = &context->hooks;
    char text[64];
    if (hooks->progress == NULL || seconds <= 0)
        return progress_tell(context, stage, -1);
    snprintf(text, sizeof text, "%s, %" PRIu64 " MB/s", stage, (uint64_t)(1e-6 * (double)done / seconds));
    if (hooks->progress(hooks->data, text, total > 0 ? (double)done / (double)total : -1) && !is_cancelled(context))
        return FESCUE_OK;
    return FAIL(context, FESCUE_STOPPED, "asked to stop (%s)", stage);
}

void log_tell(fescue_context *context, const char *format, ...)
{
    if (context->hooks.log == NULL)
        return;
    char sentence[1024];
    va_list arguments;
    va_start(arguments, format);
    int length = sentence_format(context, sentence, sizeof sentence, format, arguments);
    va_end(arguments);
    if (length >= 0)
        context->hooks.log(context->hooks.data, sentence);
}

int text_format(const fescue_context *context, char *text, size_t size, const char *format, va_list arguments)
{
    locale_t around = uselocale(context->locale);
    int length = vsnprintf(text, size, format, arguments);
    uselocale(around);
    return length;
}

const char *error_text(const fescue_context *context, int error)
{
    return strerror_l(error, context->locale);
}
