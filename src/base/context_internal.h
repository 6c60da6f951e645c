/* SPDX-License-Identifier: MIT
 *
 * The inside of a context. Only this folder sees it.
 */
#ifndef FESCUE_BASE_CONTEXT_INTERNAL_H
#define FESCUE_BASE_CONTEXT_INTERNAL_H

#include "base/base.h"

#include <locale.h>
#include <pthread.h>
#include <stdatomic.h>

/* Long enough for a path of ordinary length, a label and a sentence; longer ones are cut. Fixed, so that the message
   about a lack of memory needs none. */
enum { FAILURE_TEXT_SIZE = 1024, FAILURE_WHERE_SIZE = 96 };

struct failure {
    pthread_mutex_t lock;
    fescue_status status; /* FESCUE_OK while nothing is kept */
    char text[FAILURE_TEXT_SIZE];
    char where[FAILURE_WHERE_SIZE];
};

struct memory_counters {
    _Atomic uint64_t blocks, bytes, peak_bytes, calls;
    _Atomic uint64_t limit; /* bytes; 0 for none */
};

enum { TEAM_MOST_WORKERS = 1024 }; /* the upper bound of --threads */

struct team_member {
    _Atomic size_t next_block; /* of its share of this round's work, which ends before last_block */
    size_t last_block;
    char apart[128]; /* no two members' counters in one line of the caches, nor in a pair of lines */
    pthread_t thread;
    struct team *team;
    size_t worker;
};

/* Member 0 is the caller of team_run and has no thread. What `lock` guards: round, open, busy, leaving; the work is
   changed by the caller alone, while no round is open and nobody busy. */
struct team {
    pthread_mutex_t lock;
    pthread_cond_t called, finished;
    _Atomic uint64_t round; /* counts calls to work */
    _Atomic size_t busy;    /* threads that have joined this round and not left it */
    bool open;              /* this round may be joined */
    bool leaving, running;
    size_t workers;
    team_task *task;
    void *job;
    struct team_member member[TEAM_MOST_WORKERS];
};

struct fescue_context {
    struct fescue_hooks hooks;
    const struct file_calls *files;
    locale_t locale; /* "C": no text of ours depends on the locale of the program around us */
    struct failure failure;
    struct memory_counters memory;
    atomic_bool cancelled;
    struct team team;
    struct memo *memo; /* NULL: none is open */
};

/* vsnprintf in the C locale. */
int text_format(const fescue_context *context, char *text, size_t size, const char *format, va_list arguments)
    __attribute__((format(printf, 4, 0)));
/* A sentence for a person: text_format, cut to `size` with "..." and made plain (sentence.c). Returns its length, or a
   negative number, with an empty text, when the format cannot be met. */
int sentence_format(const fescue_context *context, char *text, size_t size, const char *format, va_list arguments)
    __attribute__((format(printf, 4, 0)));
/* The system's sentence for an errno; lives until the thread's next call. */
const char *error_text(const fescue_context *context, int error);

void failure_open(struct failure *failure);
void failure_close(struct failure *failure);
void team_open(struct team *team);
void team_close(struct team *team);

#endif
