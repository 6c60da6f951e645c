/* SPDX-License-Identifier: MIT
 *
 * What the unit tests and the fault sweeps share. None of it is part of the library.
 *
 *   the bench    a context that counts, and a private folder: bench_setup and bench_teardown are made for
 *                cmocka_unit_test_setup_teardown; teardown checks that nothing leaked
 *   faults       the n-th allocation, or the n-th file call of a kind, fails
 *   files        small texts in, bytes out
 *   checks       assert_close, assert_status, assert_no_leak
 *
 * Helpers that need the folder `table` are in support_table.h.
 */
#ifndef FESCUE_TESTS_SUPPORT_H
#define FESCUE_TESTS_SUPPORT_H

#include "base/base.h"

/* cmocka.h includes none of these itself. */
#include <setjmp.h>
#include <stdarg.h>
#include <stddef.h>
#include <stdint.h>

#include <cmocka.h>

/* ---- the bench -------------------------------------------------------------------------------------------------- */

enum { PATH_SIZE = 512 };

/* The state of a test between bench_setup and bench_teardown. */
struct bench {
    fescue_context *context;
    char folder[PATH_SIZE]; /* private and empty at first; removed with all it holds at the end */
    size_t descriptors;     /* open when the test began */
};
int bench_setup(void **state);
int bench_teardown(void **state);
struct bench *bench_of(void **state);

/* cmocka_unit_test, between bench_setup and bench_teardown. */
#define BENCH_TEST(function) cmocka_unit_test_setup_teardown(function, bench_setup, bench_teardown)

/* New context whose memory and files go through the counters and faults below; the caller destroys it. */
fescue_context *test_context_create(void);
/* The same that may fail: for sweeps over the very first allocation. */
fescue_status test_context_try(fescue_context **out);
/* Blocks that contexts of test_context_create hold now, the contexts themselves among them. */
uint64_t test_blocks_alive(void);
/* Entries of this process's table of descriptors. */
size_t descriptors_count(void);

/* ---- faults ----------------------------------------------------------------------------------------------------- */

enum fault_kind {
    FAULT_NONE,
    FAULT_TAKE, /* an allocation */
    FAULT_OPEN,
    FAULT_READ,
    FAULT_WRITE,
    FAULT_SYNC,
    FAULT_CLOSE, /* closes, and then says that it failed */
    FAULT_RENAME,
    FAULT_UNLINK,
    FAULT_MAKE_DIRECTORY,
    FAULT_SIZE, /* says that it is no regular file */
    FAULT_MAP,
    FAULT_SHORT_READ,  /* half of the bytes, at least one: not an error */
    FAULT_SHORT_WRITE, /* the same */
    FAULT_MALLOC,      /* malloc itself, whoever calls it: for a test that puts its own malloc in place */
    FAULT_KINDS
};
const char *fault_name(enum fault_kind kind);

/* From now on the nth call of the kind fails, n = 1, 2, ...; with `lasting`, all later ones fail too. File calls set
   errno to `error`. Counting starts anew. The plan is one for the whole process. */
void fault_plan(enum fault_kind kind, uint64_t nth, bool lasting, int error);
void fault_clear(void); /* nothing fails, counting starts anew */
bool fault_met(void);   /* whether the planned call came */
uint64_t fault_calls(enum fault_kind kind);
bool fault_due(enum fault_kind kind); /* counts a call of the kind; whether it is to fail */

/* ---- files ------------------------------------------------------------------------------------------------------ */

void folder_create(char folder[PATH_SIZE]);
void folder_remove(const char *folder);
/* Files and directories in it, the hidden ones too, not counted through. 0 when it does not exist. */
size_t folder_count(const char *folder);
/* Those whose name ends in `suffix`. */
size_t folder_count_suffix(const char *folder, const char *suffix);
/* "folder/name" into path, which it returns. */
const char *path_in(const char *folder, const char *name, char path[PATH_SIZE]);
void file_put(const char *path, const void *bytes, size_t count);
void file_put_text(const char *path, const char *text);
/* The whole file, a NUL behind it, from malloc; NULL when there is none. */
char *file_get(const char *path, size_t *count);
bool file_exists(const char *path);
/* Fails the test unless the file holds just this text. */
void file_check(const char *path, const char *text);

/* ---- checks ----------------------------------------------------------------------------------------------------- */

/* |a - b| <= tolerance; a NaN on either side fails. */
#define assert_close(a, b, tolerance) close_check((a), (b), (tolerance), __FILE__, __LINE__)
void close_check(double a, double b, double tolerance, const char *file, int line);

/* On a surprise, prints the sentence the context keeps. */
#define assert_status(context, call, expected) status_check((context), (call), (expected), __FILE__, __LINE__)
void status_check(const fescue_context *context, fescue_status got, fescue_status expected, const char *file, int line);

/* No block is alive in the context. */
#define assert_no_leak(context) leak_check((context), __FILE__, __LINE__)
void leak_check(const fescue_context *context, const char *file, int line);

#endif
