/* SPDX-License-Identifier: MIT
 *
 * Sets of files that appear whole or not at all: contents, places, the order of the system calls, and every fault.
 */
#include "support.h"

#include <errno.h>
#include <fcntl.h>
#include <stdio.h>
#include <stdlib.h>
#include <string.h>
#include <sys/stat.h>
#include <unistd.h>

/* ---- contents --------------------------------------------------------------------------------------------------- */

static struct output *open_set(const struct bench *bench, const char *name, const char *seal)
{
    char path[PATH_SIZE];
    struct output *output;
    assert_status(bench->context, output_open(bench->context, path_in(bench->folder, name, path), seal, &output),
                  FESCUE_OK);
    return output;
}

static struct outfile *add_file(const struct bench *bench, struct output *output, const char *name)
{
    struct outfile *file;
    assert_status(bench->context, output_add(output, name, &file), FESCUE_OK);
    return file;
}

static void texts_and_numbers_are_appended(void **state)
{
    const struct bench *bench = bench_of(state);
    char path[PATH_SIZE];
    struct output *output = open_set(bench, "run", NULL);
    struct outfile *file = add_file(bench, output, "all");
    outfile_text(file, "a,");
    outfile_write(file, "b\0c", 3);
    outfile_write(file, NULL, 0);
    outfile_format(file, ",%d,%s,%.1f", -5, "text", 2.5);
    outfile_text(file, ",");
    outfile_real(file, 0.1, FESCUE_DOUBLE);
    outfile_text(file, ",");
    outfile_real(file, 0.1, FESCUE_SINGLE);
    outfile_text(file, ",");
    outfile_count(file, 0);
    outfile_text(file, ",");
    outfile_count(file, UINT64_MAX);
    assert_status(bench->context, outfile_status(file), FESCUE_OK);
    assert_status(bench->context, output_publish(&output), FESCUE_OK);
    assert_null(output);
    size_t count;
    char *bytes = file_get(path_in(bench->folder, "run/all", path), &count);
    static const char expected[] = "a,b\0c,-5,text,2.5,0.1,0.1,0,18446744073709551615";
    assert_int_equal(count, sizeof expected - 1);
    assert_memory_equal(bytes, expected, count);
    free(bytes);
}

/* Pieces that end before, at and behind the end of the buffer, larger than it, and formatted ones that need memory. */
static void large_files_are_written_whole(void **state)
{
    static const size_t pieces[] = {1, 131071, 1, 131072, 131073, 400000, 5, 131067, 70000, 70000};
    const struct bench *bench = bench_of(state);
    char path[PATH_SIZE];
    char *expected = malloc(3000000), *end = expected;
    struct output *output = open_set(bench, "run", NULL);
    struct outfile *file = add_file(bench, output, "large");
    for (size_t k = 0; k < sizeof pieces / sizeof pieces[0]; k++) {
        memset(end, 'a' + (int)k, pieces[k]);
        outfile_write(file, end, pieces[k]);
        end += pieces[k];
    }
    for (int width = 510; width < 515; width++) { /* around the room for short texts */
        end += sprintf(end, "%*d", width, width);
        outfile_format(file, "%*d", width, width);
    }
    end += sprintf(end, "%200000d", 7);
    outfile_format(file, "%200000d", 7);
    assert_status(bench->context, output_publish(&output), FESCUE_OK);
    size_t count;
    char *bytes = file_get(path_in(bench->folder, "run/large", path), &count);
    assert_int_equal(count, end - expected);
    assert_memory_equal(bytes, expected, count);
    free(bytes);
    free(expected);
}

enum { SHARED_PIECES = 100, LONG_PIECE = 57 };

static void piece_append(void *job, size_t piece, struct outfile *sink)
{
    static const char stars[200000] = {0};
    (void)job;
    if (piece == LONG_PIECE) /* longer than any buffer */
        outfile_write(sink, stars, sizeof stars);
    for (size_t k = 0; k < piece; k++)
        outfile_format(sink, "%zu.%zu ", piece, k);
}

/* What the team makes is what one makes, in the order of the pieces. */
static void shared_text_follows_in_order(void **state)
{
    static const size_t workers[] = {1, 3};
    const struct bench *bench = bench_of(state);
    char path[PATH_SIZE], *bytes[2];
    size_t count[2];
    for (int k = 0; k < 2; k++) {
        struct output *output = open_set(bench, "run", NULL);
        struct outfile *file = add_file(bench, output, "shared");
        assert_status(bench->context, team_resize(bench->context, workers[k]), FESCUE_OK);
        outfile_text(file, "first ");
        outfile_share(file, 0, piece_append, NULL);
        outfile_share(file, SHARED_PIECES, piece_append, NULL);
        outfile_text(file, "last");
        assert_status(bench->context, output_publish(&output), FESCUE_OK);
        bytes[k] = file_get(path_in(bench->folder, "run/shared", path), &count[k]);
    }
    assert_status(bench->context, team_resize(bench->context, 1), FESCUE_OK);
    assert_int_equal(count[0], count[1]);
    assert_memory_equal(bytes[0], bytes[1], count[0]);
    assert_memory_equal(bytes[0], "first 1.0 2.0 2.1 3.0 ", 22);
    assert_memory_equal(bytes[0] + count[0] - 11, " 99.98 last", 11);
    free(bytes[0]);
    free(bytes[1]);
}

static void a_failure_sticks_and_nothing_appears(void **state)
{
    const struct bench *bench = bench_of(state);
    char path[PATH_SIZE], sentence[2 * PATH_SIZE], large[200000] = {0};
    struct output *output = open_set(bench, "run", "seal");
    struct outfile *file = add_file(bench, output, "data"), *seal = add_file(bench, output, "seal");
    fault_plan(FAULT_WRITE, 1, false, ENOSPC);
    outfile_write(file, large, sizeof large);
    assert_status(bench->context, outfile_status(file), FESCUE_CANNOT_WRITE);
    uint64_t calls = fault_calls(FAULT_WRITE);
    outfile_write(file, large, sizeof large);
    outfile_format(file, "%d", 1);
    assert_int_equal(fault_calls(FAULT_WRITE), calls);
    outfile_text(seal, "sealed");
    assert_status(bench->context, outfile_status(seal), FESCUE_OK);
    assert_status(bench->context, output_publish(&output), FESCUE_CANNOT_WRITE);
    assert_null(output);
    snprintf(sentence, sizeof sentence, "%s: cannot be written: No space left on device",
             path_in(bench->folder, "run/data", path));
    assert_string_equal(fescue_failure_text(bench->context), sentence);
    assert_int_equal(folder_count(path_in(bench->folder, "run", path)), 0);
}

static void without_memory_for_a_long_text_the_file_fails(void **state)
{
    const struct bench *bench = bench_of(state);
    struct output *output = open_set(bench, "run", NULL);
    struct outfile *file = add_file(bench, output, "data");
    fault_plan(FAULT_TAKE, 1, false, 0);
    outfile_format(file, "%1000d", 1);
    assert_status(bench->context, outfile_status(file), FESCUE_NO_MEMORY);
    fault_clear();
    assert_status(bench->context, output_publish(&output), FESCUE_NO_MEMORY);
}

static void an_abandoned_set_leaves_nothing(void **state)
{
    const struct bench *bench = bench_of(state);
    char path[PATH_SIZE];
    struct output *output = open_set(bench, "run", "seal");
    outfile_text(add_file(bench, output, "data"), "data");
    path_in(bench->folder, "run", path);
    assert_int_equal(folder_count_suffix(path, ".part"), 1);
    assert_int_equal(folder_count(path), 1);
    output_abandon(&output);
    assert_null(output);
    output_abandon(&output);
    assert_int_equal(folder_count(path), 0);
}

/* ---- places ----------------------------------------------------------------------------------------------------- */

static void write_one(const struct bench *bench, const char *directory, const char *text, fescue_status expected)
{
    struct output *output;
    fescue_failure_clear(bench->context);
    fescue_status status = output_open(bench->context, directory, "seal", &output);
    if (status == FESCUE_OK) {
        outfile_text(add_file(bench, output, "data"), text);
        outfile_text(add_file(bench, output, "seal"), "sealed");
        status = output_publish(&output);
    }
    assert_null(output);
    assert_status(bench->context, status, expected);
}

static void missing_parents_are_made(void **state)
{
    static const char *const names[] = {"a/b/c", "d//e/", "f/./g///"};
    const struct bench *bench = bench_of(state);
    char path[PATH_SIZE], inside[PATH_SIZE];
    for (size_t k = 0; k < sizeof names / sizeof names[0]; k++) {
        write_one(bench, path_in(bench->folder, names[k], path), "x", FESCUE_OK);
        file_check(path_in(path, "data", inside), "x");
    }
    struct stat about;
    assert_int_equal(stat(inside, &about), 0);
    mode_t mask = umask(0);
    umask(mask);
    assert_int_equal(about.st_mode & 0777, 0666 & ~mask);
}

static void relative_directories_work(void **state)
{
    static const char *const names[] = {"out", "./deep/out", ".", "../up"};
    const struct bench *bench = bench_of(state);
    char before[PATH_SIZE], path[PATH_SIZE];
    assert_non_null(getcwd(before, sizeof before));
    mkdir(path_in(bench->folder, "here", path), 0700);
    assert_int_equal(chdir(path), 0);
    for (size_t k = 0; k < sizeof names / sizeof names[0]; k++)
        write_one(bench, names[k], "x", FESCUE_OK);
    assert_int_equal(chdir(before), 0);
    file_check(path_in(bench->folder, "here/out/data", path), "x");
    file_check(path_in(bench->folder, "here/deep/out/data", path), "x");
    file_check(path_in(bench->folder, "here/data", path), "x");
    file_check(path_in(bench->folder, "up/data", path), "x");
}

static void other_files_of_the_directory_stay(void **state)
{
    const struct bench *bench = bench_of(state);
    char path[PATH_SIZE];
    write_one(bench, bench->folder, "old", FESCUE_OK);
    file_put_text(path_in(bench->folder, "notes", path), "mine");
    file_put_text(path_in(bench->folder, ".hidden.part", path), "mine too");
    write_one(bench, bench->folder, "new", FESCUE_OK);
    file_check(path_in(bench->folder, "data", path), "new");
    file_check(path_in(bench->folder, "notes", path), "mine");
    file_check(path_in(bench->folder, ".hidden.part", path), "mine too");
    assert_int_equal(folder_count(bench->folder), 4);
}

/* A link to a directory is followed; one under a file's name is replaced, and what it pointed at stays. */
static void links_are_followed_to_directories_only(void **state)
{
    const struct bench *bench = bench_of(state);
    char real[PATH_SIZE], link[PATH_SIZE], path[PATH_SIZE], target[PATH_SIZE];
    mkdir(path_in(bench->folder, "real", real), 0700);
    assert_int_equal(symlink(real, path_in(bench->folder, "link", link)), 0);
    file_put_text(path_in(bench->folder, "target", target), "precious");
    assert_int_equal(symlink(target, path_in(real, "data", path)), 0);
    write_one(bench, link, "new", FESCUE_OK);
    file_check(path, "new");
    file_check(target, "precious");
    struct stat about;
    assert_int_equal(lstat(path, &about), 0);
    assert_true(S_ISREG(about.st_mode));
}

/* What lies under our temporary name, the rest of a process that died or a trap, is removed and not written through. */
static void a_link_under_the_temporary_name_is_no_trap(void **state)
{
    const struct bench *bench = bench_of(state);
    char name[64], path[PATH_SIZE], target[PATH_SIZE];
    file_put_text(path_in(bench->folder, "target", target), "precious");
    snprintf(name, sizeof name, ".data.%ld.part", (long)getpid());
    assert_int_equal(symlink(target, path_in(bench->folder, name, path)), 0);
    write_one(bench, bench->folder, "new", FESCUE_OK);
    file_check(path_in(bench->folder, "data", path), "new");
    file_check(target, "precious");
}

static void impossible_directories_are_refused(void **state)
{
    const struct bench *bench = bench_of(state);
    char path[PATH_SIZE], below[PATH_SIZE];
    file_put_text(path_in(bench->folder, "file", path), "no directory");
    write_one(bench, path, "x", FESCUE_CANNOT_CREATE);
    assert_non_null(strstr(fescue_failure_text(bench->context), "Not a directory"));
    write_one(bench, path_in(path, "below", below), "x", FESCUE_CANNOT_CREATE);
    write_one(bench, "", "x", FESCUE_CANNOT_CREATE);
    assert_string_equal(fescue_failure_text(bench->context), "the name of the output directory is empty");
    assert_int_equal(symlink("nowhere", path_in(bench->folder, "dangling", path)), 0);
    write_one(bench, path, "x", FESCUE_CANNOT_CREATE);
    assert_int_equal(folder_count(bench->folder), 2);
}

static void a_directory_under_a_files_name_is_not_removed(void **state)
{
    const struct bench *bench = bench_of(state);
    char path[PATH_SIZE], inside[PATH_SIZE];
    mkdir(path_in(bench->folder, "data", path), 0700);
    file_put_text(path_in(path, "inside", inside), "precious");
    write_one(bench, bench->folder, "x", FESCUE_CANNOT_WRITE);
    file_check(inside, "precious");
    assert_int_equal(folder_count(bench->folder), 1);
}

static void retired_names_go_with_the_old_seal(void **state)
{
    static const char *const retired[] = {"data", "old", "never-there"};
    const struct bench *bench = bench_of(state);
    char path[PATH_SIZE];
    file_put_text(path_in(bench->folder, "old", path), "of the last run");
    for (int publishes = 0; publishes <= 1; publishes++) {
        struct output *output = open_set(bench, "", "seal");
        for (size_t k = 0; k < sizeof retired / sizeof retired[0]; k++)
            assert_status(bench->context, output_retire(output, retired[k]), FESCUE_OK);
        outfile_text(add_file(bench, output, "data"), "new");
        if (publishes)
            assert_status(bench->context, output_publish(&output), FESCUE_OK);
        else
            output_abandon(&output);
        assert_int_equal(file_exists(path), !publishes);
    }
    file_check(path_in(bench->folder, "data", path), "new"); /* the set's own files are not retired */
    assert_int_equal(folder_count(bench->folder), 1);
}

/* ---- the order of the calls ------------------------------------------------------------------------------------- */

/* One letter a call, and what it was about: the durability that output.c's header promises rests on this order. */
static char log_text[4096];
static char names_open[1024][32];

static void log_call(const char *what, const char *path)
{
    const char *slash = strrchr(path, '/');
    const char *name = slash == NULL ? path : slash[1] == '\0' ? "DIR" : slash + 1;
    char plain[32];
    snprintf(plain, sizeof plain, "%.*s", (int)strcspn(name[0] == '.' ? name + 1 : name, "."),
             name[0] == '.' ? name + 1 : name);
    strcat(strcat(strcat(strcat(log_text, what), " "), plain), "\n");
}

static int logged_open(const char *path, int flags, unsigned mode)
{
    int descriptor = posix_file_calls.open(path, flags, mode);
    const char *slash = strrchr(path, '/');
    snprintf(names_open[descriptor], sizeof names_open[0], "%.31s", slash[1] == '\0' ? "/" : slash + 1);
    return descriptor;
}

static ptrdiff_t logged_write(int descriptor, const void *bytes, size_t count)
{
    log_call("write", names_open[descriptor]);
    return posix_file_calls.write(descriptor, bytes, count);
}

static int logged_sync(int descriptor)
{
    log_call("sync", names_open[descriptor]);
    return 0;
}

static int logged_close(int descriptor)
{
    log_call("close", names_open[descriptor]);
    return posix_file_calls.close(descriptor);
}

static int logged_rename(const char *from, const char *to)
{
    log_call("rename", to);
    return posix_file_calls.rename(from, to);
}

static int logged_unlink(const char *path)
{
    log_call("unlink", path);
    return posix_file_calls.unlink(path);
}

static void files_are_flushed_before_they_are_renamed_and_the_seal_is_last(void **state)
{
    const struct file_calls logged = {.open = logged_open,
                                      .read = posix_file_calls.read,
                                      .write = logged_write,
                                      .sync = logged_sync,
                                      .close = logged_close,
                                      .rename = logged_rename,
                                      .unlink = logged_unlink,
                                      .make_directory = posix_file_calls.make_directory};
    const struct bench *bench = bench_of(state);
    write_one(bench, bench->folder, "old", FESCUE_OK);

    file_calls_set(bench->context, &logged);
    struct output *output = open_set(bench, "", "seal");
    outfile_text(add_file(bench, output, "seal"), "sealed");
    outfile_text(add_file(bench, output, "data"), "new");
    outfile_text(add_file(bench, output, "more"), "new");
    assert_status(bench->context, output_retire(output, "old"), FESCUE_OK);
    log_text[0] = '\0';
    assert_status(bench->context, output_publish(&output), FESCUE_OK);
    assert_string_equal(log_text, "write seal\nsync seal\nclose seal\n"
                                  "write data\nsync data\nclose data\n"
                                  "write more\nsync more\nclose more\n"
                                  "unlink seal\nsync DIR\n"
                                  "unlink old\nrename data\nrename more\nsync DIR\n"
                                  "rename seal\nsync DIR\nclose DIR\n");
}

/* ---- every fault ------------------------------------------------------------------------------------------------ */

static const char *const set_names[] = {"left", "right", "seal"};
enum { SET_SIZE = 3 };

/* A set of three files that all hold `text`, in folder/run. */
static fescue_status write_set(const struct bench *bench, const char *text)
{
    char path[PATH_SIZE];
    struct output *output;
    struct outfile *file;
    fescue_status status;
    TRY(output_open(bench->context, path_in(bench->folder, "new/run", path), "seal", &output));
    TRY(output_retire(output, "stale"));
    for (int k = 0; k < SET_SIZE; k++) {
        TRY(output_add(output, set_names[k], &file));
        outfile_text(file, text);
    }
    status = output_publish(&output);
    assert_null(output);
done:
    output_abandon(&output);
    return status;
}

/* How many files of the set hold just this text. */
static int holding(const struct bench *bench, const char *text)
{
    int count = 0;
    for (int k = 0; k < SET_SIZE; k++) {
        char name[32], path[PATH_SIZE];
        size_t length;
        snprintf(name, sizeof name, "new/run/%s", set_names[k]);
        char *bytes = file_get(path_in(bench->folder, name, path), &length);
        count += bytes != NULL && strcmp(bytes, text) == 0;
        free(bytes);
    }
    return count;
}

struct sweep {
    enum fault_kind kind;
    int error;
    bool lasting, over_older;
};

static void outcome_check(const struct bench *bench, const struct sweep *sweep, fescue_status status)
{
    char run[PATH_SIZE], seal[PATH_SIZE], stale[PATH_SIZE];
    path_in(bench->folder, "new/run", run);
    bool is_sealed = file_exists(path_in(run, "seal", seal));
    int new_files = holding(bench, "new"), old_files = holding(bench, "old");
    bool cannot_tidy = sweep->kind == FAULT_UNLINK && sweep->lasting;
    assert_no_leak(bench->context);
    if (status == FESCUE_OK) {
        assert_int_equal(new_files, SET_SIZE);
        assert_int_equal(folder_count(run), SET_SIZE);
        return;
    }
    fescue_status expected = sweep->kind == FAULT_TAKE ? FESCUE_NO_MEMORY : FESCUE_CANNOT_WRITE;
    if (sweep->kind == FAULT_OPEN || sweep->kind == FAULT_MAKE_DIRECTORY ||
        (sweep->kind == FAULT_SYNC && status == FESCUE_CANNOT_CREATE)) /* a new directory, flushed into its parent */
        expected = FESCUE_CANNOT_CREATE;
    assert_status(bench->context, status, expected);
    assert_true(fescue_failure_text(bench->context)[0] != '\0');
    if (is_sealed) { /* then it is the old run, whole */
        assert_int_equal(old_files, SET_SIZE);
        assert_true(file_exists(path_in(run, "stale", stale)));
    }
    if (!sweep->over_older)
        assert_int_equal(new_files + old_files, 0);
    if (!cannot_tidy)
        assert_int_equal(folder_count_suffix(run, ".part"), 0);
}

/* Fails the first call of the kind, then the second, and so on, until a run meets no fault. */
static void sweep_run(const struct bench *bench, const struct sweep *sweep)
{
    char folder[PATH_SIZE], path[PATH_SIZE];
    bool met = true;
    for (uint64_t nth = 1; met; nth++) {
        if (file_exists(path_in(bench->folder, "new", folder)))
            folder_remove(folder);
        fault_clear();
        fescue_failure_clear(bench->context);
        if (sweep->over_older) {
            assert_status(bench->context, write_set(bench, "old"), FESCUE_OK);
            file_put_text(path_in(bench->folder, "new/run/stale", path), "stale");
        }
        fault_plan(sweep->kind, nth, sweep->lasting, sweep->error);
        fescue_status status = write_set(bench, "new");
        met = fault_met();
        if (!met)
            assert_status(bench->context, status, FESCUE_OK);
        outcome_check(bench, sweep, status);
        assert_int_equal(descriptors_count(), bench->descriptors);
        fault_clear();
        assert_status(bench->context, write_set(bench, "new"), FESCUE_OK);
        assert_int_equal(holding(bench, "new"), SET_SIZE);
        assert_in_range(nth, 1, 100);
    }
}

static void every_fault_leaves_the_old_set_or_none(void **state)
{
    static const struct {
        enum fault_kind kind;
        int error;
    } faults[] = {{FAULT_TAKE, 0},       {FAULT_OPEN, EACCES},  {FAULT_WRITE, ENOSPC},
                  {FAULT_WRITE, EIO},    {FAULT_SYNC, EIO},     {FAULT_CLOSE, EIO},
                  {FAULT_RENAME, EXDEV}, {FAULT_UNLINK, EROFS}, {FAULT_MAKE_DIRECTORY, EROFS}};
    const struct bench *bench = bench_of(state);
    for (size_t k = 0; k < sizeof faults / sizeof faults[0]; k++)
        for (int variant = 0; variant < 4; variant++) {
            const struct sweep sweep = {faults[k].kind, faults[k].error, variant & 1, variant & 2};
            sweep_run(bench, &sweep);
        }
}

/* Interruptions, half-done writes and directories that cannot be flushed are no faults. */
static void harmless_events_are_borne(void **state)
{
    static const struct {
        enum fault_kind kind;
        int error;
    } events[] = {
        {FAULT_OPEN, EINTR}, {FAULT_WRITE, EINTR}, {FAULT_SHORT_WRITE, 0}, {FAULT_SYNC, EINTR}, {FAULT_CLOSE, EINTR}};
    const struct bench *bench = bench_of(state);
    for (size_t k = 0; k < sizeof events / sizeof events[0]; k++)
        for (uint64_t nth = 1;; nth++) {
            fault_plan(events[k].kind, nth, false, events[k].error);
            assert_status(bench->context, write_set(bench, "new"), FESCUE_OK);
            assert_int_equal(holding(bench, "new"), SET_SIZE);
            if (!fault_met())
                break;
        }
    fault_plan(FAULT_SHORT_WRITE, 1, true, 0);
    assert_status(bench->context, write_set(bench, "a longer text, written in smaller and smaller pieces"), FESCUE_OK);
    assert_int_equal(holding(bench, "a longer text, written in smaller and smaller pieces"), SET_SIZE);
}

int main(void)
{
    const struct CMUnitTest tests[] = {
        BENCH_TEST(texts_and_numbers_are_appended),
        BENCH_TEST(large_files_are_written_whole),
        BENCH_TEST(shared_text_follows_in_order),
        BENCH_TEST(a_failure_sticks_and_nothing_appears),
        BENCH_TEST(without_memory_for_a_long_text_the_file_fails),
        BENCH_TEST(an_abandoned_set_leaves_nothing),
        BENCH_TEST(missing_parents_are_made),
        BENCH_TEST(relative_directories_work),
        BENCH_TEST(other_files_of_the_directory_stay),
        BENCH_TEST(links_are_followed_to_directories_only),
        BENCH_TEST(a_link_under_the_temporary_name_is_no_trap),
        BENCH_TEST(impossible_directories_are_refused),
        BENCH_TEST(a_directory_under_a_files_name_is_not_removed),
        BENCH_TEST(retired_names_go_with_the_old_seal),
        BENCH_TEST(files_are_flushed_before_they_are_renamed_and_the_seal_is_last),
        BENCH_TEST(every_fault_leaves_the_old_set_or_none),
        BENCH_TEST(harmless_events_are_borne),
    };
    return cmocka_run_group_tests(tests, NULL, NULL);
}
