/* SPDX-License-Identifier: MIT
 *
 * Where the files of a run go, and whether they can. The library finds out for itself when it writes; here the question
 * is asked before hours of work, by looking only.
 */
#include "cli.h"

#include <errno.h>
#include <string.h>
#include <sys/stat.h>
#include <unistd.h>

/* The results by name, of which a table to be filled may be one: filling build/x/filled.csv into build/x must not
   destroy it. */
static const char *const results[] = {"filled.mtx",   "filled.csv", "filled.tsv",      "cells.csv",         "left.mtx",
                                      "spectrum.mtx", "right.mtx",  "row-offsets.mtx", "trace.csv",         "run.json",
                                      "report.html",  "rank.csv",   "time-part.csv",   "column-offsets.mtx"};

static bool suffix_cut(char *text, const char *suffix)
{
    size_t length = strlen(text), size = strlen(suffix);
    if (length <= size || strcmp(text + length - size, suffix) != 0 || text[length - size - 1] == '/')
        return false;
    text[length - size] = '\0';
    return true;
}

fescue_status place_choose(const char *table, char place[PLACE_SIZE])
{
    static const char ending[] = "-filled";
    static const char *const formats[] = {".csv", ".tsv", ".txt", ".mtx", ".mm", ".pack"};
    if (strcmp(table, "-") == 0)
        return say_usage(
            "a table from standard input has no name to derive one from; say where results go with -o DIR");
    if (strlen(table) > PLACE_SIZE - sizeof ending)
        return say_usage("the path of the table is too long to derive a name from; say where results go with -o DIR");
    strcpy(place, table);
    suffix_cut(place, ".gz");
    bool cut = false;
    for (size_t k = 0; k < sizeof formats / sizeof formats[0] && !cut; k++)
        cut = suffix_cut(place, formats[k]);
    strcat(place, ending);
    return FESCUE_OK;
}

/* Cuts the last component off a path without a trailing slash: "a/b" -> "a", "b" -> ".", "/b" -> "/". */
static void path_to_parent(char path[PLACE_SIZE])
{
    char *slash = strrchr(path, '/');
    if (slash == NULL)
        strcpy(path, ".");
    else
        slash[slash == path ? 1 : 0] = '\0';
}

static void slashes_cut(char *path)
{
    for (size_t length = strlen(path); length > 1 && path[length - 1] == '/'; length--)
        path[length - 1] = '\0';
}

static fescue_status complain(const char *path, int error)
{
    fprintf(stderr, "fescue: %s: cannot hold the results: %s\n", path, strerror(error));
    return FESCUE_CANNOT_CREATE;
}

static bool is_result(const char *directory, const char *table)
{
    char parent[PLACE_SIZE];
    struct stat of_table, of_directory;
    if (table == NULL || strlen(table) >= sizeof parent)
        return false;
    const char *slash = strrchr(table, '/'), *name = slash != NULL ? slash + 1 : table;
    bool named = false;
    for (size_t k = 0; k < sizeof results / sizeof results[0]; k++)
        named |= strcmp(name, results[k]) == 0;
    if (!named)
        return false;
    strcpy(parent, table);
    path_to_parent(parent);
    return stat(parent, &of_table) == 0 && stat(directory, &of_directory) == 0 &&
           of_table.st_dev == of_directory.st_dev && of_table.st_ino == of_directory.st_ino;
}

fescue_status place_check(const char *directory, const char *table)
{
    char path[PLACE_SIZE];
    struct stat found;
    if (strlen(directory) >= sizeof path)
        return complain(directory, ENAMETOOLONG);
    if (is_result(directory, table))
        return say_usage("%s: the results would replace the table itself; give another directory with -o", table);
    strcpy(path, directory);
    slashes_cut(path);
    while (stat(path, &found) != 0) {
        if (errno != ENOENT || strcmp(path, ".") == 0 || strcmp(path, "/") == 0)
            return complain(directory, errno);
        path_to_parent(path);
        slashes_cut(path);
    }
    if (!S_ISDIR(found.st_mode))
        return complain(directory, ENOTDIR);
    return access(path, W_OK | X_OK) == 0 ? FESCUE_OK : complain(directory, errno);
}

/* Whether two paths lead to one file. */
static bool is_same(const char *path, const char *table)
{
    struct stat here, there;
    return stat(path, &here) == 0 && stat(table, &there) == 0 && here.st_dev == there.st_dev &&
           here.st_ino == there.st_ino;
}

fescue_status place_check_file(const char *file, const char *table)
{
    char parent[PLACE_SIZE];
    struct stat found;
    if (strlen(file) >= sizeof parent)
        return complain(file, ENAMETOOLONG);
    if (is_same(file, table))
        return say_usage("%s: the pack would replace the table itself; give another name with -o", file);
    if (file[0] == '\0' || file[strlen(file) - 1] == '/' || (stat(file, &found) == 0 && S_ISDIR(found.st_mode)))
        return complain(file, EISDIR);
    strcpy(parent, file);
    path_to_parent(parent);
    return place_check(parent, NULL);
}
