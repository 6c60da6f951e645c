/* SPDX-License-Identifier: MIT
 *
 * The bench: contexts that count, faults on demand. Counters are atomic, since workers may take memory and files may be
 * read beside the main thread.
 */
#include "support.h"

#include <dirent.h>
#include <errno.h>
#include <fcntl.h>
#include <math.h>
#include <stdatomic.h>
#include <stdio.h>
#include <stdlib.h>
#include <string.h>
#include <sys/mman.h>
#include <sys/stat.h>
#include <unistd.h>

/* ---- faults ----------------------------------------------------------------------------------------------------- */

static struct {
    enum fault_kind kind;
    uint64_t nth;
    bool lasting;
    int error;
    atomic_bool met;
    _Atomic uint64_t calls[FAULT_KINDS];
} plan;
static _Atomic uint64_t blocks_alive;

static const char *const fault_names[FAULT_KINDS] = {
    [FAULT_NONE] = "nothing",
    [FAULT_TAKE] = "allocation",
    [FAULT_OPEN] = "open",
    [FAULT_READ] = "read",
    [FAULT_WRITE] = "write",
    [FAULT_SYNC] = "flush",
    [FAULT_CLOSE] = "close",
    [FAULT_RENAME] = "rename",
    [FAULT_UNLINK] = "unlink",
    [FAULT_MAKE_DIRECTORY] = "make directory",
    [FAULT_SIZE] = "size",
    [FAULT_MAP] = "map",
    [FAULT_SHORT_READ] = "short read",
    [FAULT_SHORT_WRITE] = "short write",
    [FAULT_MALLOC] = "malloc",
};

const char *fault_name(enum fault_kind kind)
{
    return fault_names[kind];
}

void fault_plan(enum fault_kind kind, uint64_t nth, bool lasting, int error)
{
    plan.kind = kind;
    plan.nth = nth;
    plan.lasting = lasting;
    plan.error = error;
    atomic_store(&plan.met, false);
    for (int k = 0; k < FAULT_KINDS; k++)
        atomic_store(&plan.calls[k], 0);
}

void fault_clear(void)
{
    fault_plan(FAULT_NONE, 0, false, 0);
}

bool fault_met(void)
{
    return atomic_load(&plan.met);
}

uint64_t fault_calls(enum fault_kind kind)
{
    return atomic_load(&plan.calls[kind]);
}

bool fault_due(enum fault_kind kind)
{
    uint64_t call = atomic_fetch_add(&plan.calls[kind], 1) + 1;
    bool due = kind == plan.kind && (call == plan.nth || (plan.lasting && call > plan.nth));
    if (due) {
        atomic_store(&plan.met, true);
        errno = plan.error;
    }
    return due;
}

/* A sanitizer's malloc ends the process where the system's would refuse, so what no machine has is refused here. */
static const size_t take_most = (size_t)1 << 40;

static void *counted_take(void *data, size_t size)
{
    (void)data;
    if (fault_due(FAULT_TAKE))
        return NULL;
    void *block = size <= take_most ? malloc(size) : NULL;
    if (block != NULL)
        atomic_fetch_add(&blocks_alive, 1);
    return block;
}

static void counted_give(void *data, void *block)
{
    (void)data;
    if (block != NULL)
        atomic_fetch_sub(&blocks_alive, 1);
    free(block);
}

static int faulty_open(const char *path, int flags, unsigned mode)
{
    return fault_due(FAULT_OPEN) ? -1 : open(path, flags, mode);
}

static ptrdiff_t faulty_read(int descriptor, void *bytes, size_t count)
{
    if (fault_due(FAULT_READ))
        return -1;
    if (fault_due(FAULT_SHORT_READ) && count > 1)
        count /= 2;
    return read(descriptor, bytes, count);
}

static ptrdiff_t faulty_write(int descriptor, const void *bytes, size_t count)
{
    if (fault_due(FAULT_WRITE))
        return -1;
    if (fault_due(FAULT_SHORT_WRITE) && count > 1)
        count /= 2;
    return write(descriptor, bytes, count);
}

/* No test needs the disk itself: a sweep makes thousands of these. */
static int faulty_sync(int descriptor)
{
    (void)descriptor;
    return fault_due(FAULT_SYNC) ? -1 : 0;
}

static int faulty_close(int descriptor)
{
    int result = close(descriptor);
    return fault_due(FAULT_CLOSE) ? -1 : result;
}

static int faulty_rename(const char *from, const char *to)
{
    return fault_due(FAULT_RENAME) ? -1 : rename(from, to);
}

static int faulty_unlink(const char *path)
{
    return fault_due(FAULT_UNLINK) ? -1 : unlink(path);
}

static int faulty_make_directory(const char *path, unsigned mode)
{
    return fault_due(FAULT_MAKE_DIRECTORY) ? -1 : mkdir(path, mode);
}

static int64_t faulty_size(int descriptor)
{
    return fault_due(FAULT_SIZE) ? -1 : posix_file_calls.size(descriptor);
}

static void *faulty_map(int descriptor, size_t size)
{
    return fault_due(FAULT_MAP) ? NULL : posix_file_calls.map(descriptor, size);
}

static int faulty_rest(void *bytes, size_t size)
{
    return posix_file_calls.rest(bytes, size);
}

static const struct file_calls faulty_calls = {
    .open = faulty_open,
    .read = faulty_read,
    .write = faulty_write,
    .sync = faulty_sync,
    .close = faulty_close,
    .rename = faulty_rename,
    .unlink = faulty_unlink,
    .make_directory = faulty_make_directory,
    .size = faulty_size,
    .map = faulty_map,
    .unmap = munmap,
    .rest = faulty_rest,
};

/* ---- the bench -------------------------------------------------------------------------------------------------- */

fescue_status test_context_try(fescue_context **out)
{
    static const struct fescue_hooks hooks = {.take = counted_take, .give = counted_give};
    fescue_status status = fescue_context_create(&hooks, out);
    if (status == FESCUE_OK)
        file_calls_set(*out, &faulty_calls);
    return status;
}

fescue_context *test_context_create(void)
{
    fescue_context *context = NULL;
    assert_int_equal(test_context_try(&context), FESCUE_OK);
    return context;
}

uint64_t test_blocks_alive(void)
{
    return atomic_load(&blocks_alive);
}

size_t descriptors_count(void)
{
    return folder_count("/proc/self/fd");
}

int bench_setup(void **state)
{
    struct bench *bench = calloc(1, sizeof *bench);
    assert_non_null(bench);
    fault_clear();
    bench->descriptors = descriptors_count();
    bench->context = test_context_create();
    folder_create(bench->folder);
    *state = bench;
    return 0;
}

int bench_teardown(void **state)
{
    struct bench *bench = *state;
    fault_clear();
    folder_remove(bench->folder);
    assert_no_leak(bench->context);
    fescue_context_destroy(&bench->context);
    assert_int_equal(test_blocks_alive(), 0);
    assert_int_equal(descriptors_count(), bench->descriptors);
    free(bench);
    return 0;
}

struct bench *bench_of(void **state)
{
    return *state;
}

/* ---- checks ----------------------------------------------------------------------------------------------------- */

void close_check(double a, double b, double tolerance, const char *file, int line)
{
    if (fabs(a - b) <= tolerance)
        return;
    print_error("%.17g and %.17g differ by %.3g, more than %.3g\n", a, b, fabs(a - b), tolerance);
    _fail(file, line);
}

void status_check(const fescue_context *context, fescue_status got, fescue_status expected, const char *file, int line)
{
    if (got == expected)
        return;
    print_error("status \"%s\" where \"%s\" was expected; the context says: %s (%s)\n", fescue_status_text(got),
                fescue_status_text(expected), fescue_failure_text(context), fescue_failure_where(context));
    _fail(file, line);
}

void leak_check(const fescue_context *context, const char *file, int line)
{
    struct fescue_memory memory = fescue_memory_usage(context);
    if (memory.blocks == 0 && memory.bytes == 0)
        return;
    print_error("%llu blocks with %llu bytes are still alive\n", (unsigned long long)memory.blocks,
                (unsigned long long)memory.bytes);
    _fail(file, line);
}
