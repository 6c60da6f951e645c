/* SPDX-License-Identifier: MIT
 *
 * The private folder of a test, and small files in it.
 */
#include "support.h"

#include <dirent.h>
#include <ftw.h>
#include <stdio.h>
#include <stdlib.h>
#include <string.h>
#include <sys/stat.h>
#include <unistd.h>

void folder_create(char folder[PATH_SIZE])
{
    const char *parent = getenv("TMPDIR");
    int length = snprintf(folder, PATH_SIZE, "%s/fescue-test-XXXXXX", parent != NULL ? parent : "/tmp");
    assert_in_range(length, 1, PATH_SIZE - 1);
    assert_non_null(mkdtemp(folder));
}

static int entry_remove(const char *path, const struct stat *about, int kind, struct FTW *place)
{
    (void)about, (void)kind, (void)place;
    return remove(path);
}

void folder_remove(const char *folder)
{
    enum { DESCRIPTORS = 16 };
    assert_int_equal(nftw(folder, entry_remove, DESCRIPTORS, FTW_DEPTH | FTW_PHYS), 0);
}

static bool has_suffix(const char *name, const char *suffix)
{
    size_t length = strlen(name), tail = strlen(suffix);
    return length >= tail && strcmp(name + length - tail, suffix) == 0;
}

size_t folder_count_suffix(const char *folder, const char *suffix)
{
    DIR *directory = opendir(folder);
    size_t count = 0;
    if (directory == NULL)
        return 0;
    for (const struct dirent *entry; (entry = readdir(directory)) != NULL;)
        if (strcmp(entry->d_name, ".") != 0 && strcmp(entry->d_name, "..") != 0 && has_suffix(entry->d_name, suffix))
            count++;
    closedir(directory);
    return count;
}

size_t folder_count(const char *folder)
{
    return folder_count_suffix(folder, "");
}

const char *path_in(const char *folder, const char *name, char path[PATH_SIZE])
{
    int length = snprintf(path, PATH_SIZE, "%s/%s", folder, name);
    assert_in_range(length, 1, PATH_SIZE - 1);
    return path;
}

void file_put(const char *path, const void *bytes, size_t count)
{
    FILE *file = fopen(path, "wb");
    assert_non_null(file);
    assert_int_equal(fwrite(bytes, 1, count, file), count);
    assert_int_equal(fclose(file), 0);
}

void file_put_text(const char *path, const char *text)
{
    file_put(path, text, strlen(text));
}

char *file_get(const char *path, size_t *count)
{
    FILE *file = fopen(path, "rb");
    *count = 0;
    if (file == NULL)
        return NULL;
    assert_int_equal(fseek(file, 0, SEEK_END), 0);
    long size = ftell(file);
    assert_true(size >= 0);
    rewind(file);
    char *bytes = malloc((size_t)size + 1);
    assert_non_null(bytes);
    *count = fread(bytes, 1, (size_t)size, file);
    assert_int_equal(*count, size);
    bytes[*count] = '\0';
    fclose(file);
    return bytes;
}

bool file_exists(const char *path)
{
    struct stat about;
    return lstat(path, &about) == 0;
}

void file_check(const char *path, const char *text)
{
    size_t count;
    char *bytes = file_get(path, &count);
    if (bytes == NULL)
        fail_msg("%s does not exist", path);
    if (count != strlen(text) || memcmp(bytes, text, count) != 0)
        fail_msg("%s holds \"%s\" (%zu bytes), not \"%s\"", path, bytes, count, text);
    free(bytes);
}
