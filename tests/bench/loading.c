/* SPDX-License-Identifier: MIT
 *
 * How fast a table is loaded, beside what the machine allows in the same run.
 *
 * The table is one of ratings, 100000 x 20000 at 1e7 cells, sides growing with the square root of the cells: 0.5 .. 5
 * by halves, rows of 20 to 180 % of the mean number of cells, the columns' popularity such that the first hundredth
 * holds a fifth of them. It is written as Matrix Market text, the same gzipped, as long text with labels, and packed.
 *
 * Limits, all on one thread but the sorting:
 *     inflate   zlib over the gzipped file, from the page cache into one buffer
 *     read      read(2) of a file, from the page cache into one buffer
 *     copy      memcpy of memory that no cache holds
 *     scan      a pack mapped anew and its words added up: what using it where it lies costs at least
 *     sort      both compressed orders from rows, columns and values in memory
 * Then each form is loaded with 1 and with 2 workers, both orders built. Everything is run once a round, several
 * rounds; what is compared stands side by side in a round, a ratio is that of one round, and medians count, so that a
 * machine that slows down for a while does not decide. On a machine with other work seconds on the wall say little:
 * processor seconds are beside them.
 *
 * A virtual machine gives memory that is free back to its host, and then its next use costs several times as much,
 * whoever comes first; so before anything that takes memory is measured, as much is used and given back.
 */
#include "figures.h"

#include "table/table.h"

#include <fcntl.h>
#include <stdio.h>
#include <stdlib.h>
#include <string.h>
#include <sys/mman.h>
#include <sys/stat.h>
#include <unistd.h>
#include <zlib.h>

enum { ROUNDS = 5, PATH_SIZE = 512, FORMS = 4, MOST_LINES = 24, BUFFER = 1 << 18 };
enum form { FORM_GZIP, FORM_TEXT, FORM_PACK, FORM_LONG };
static const char *const form_files[FORMS] = {"ratings.mtx.gz", "ratings.mtx", "ratings.pack", "ratings.csv"};

struct measure {
    char name[64];
    double wall[ROUNDS], cpu[ROUNDS];
    int rounds;
};

struct loading {
    char folder[PATH_SIZE];
    uint32_t rows, columns;
    uint64_t cells;
    uint32_t *row, *column;
    float *value;
    struct measure line[MOST_LINES];
    int lines;
};

static void fail(const char *what)
{
    fprintf(stderr, "bench: %s\n", what);
    exit(1);
}

static const char *path_of(const struct loading *loading, enum form form, char path[PATH_SIZE])
{
    if (snprintf(path, PATH_SIZE, "%s/%s", loading->folder, form_files[form]) >= PATH_SIZE)
        fail("the name of the folder is too long");
    return path;
}

/* ---- the table ----------------------------------------------------------------------------------------------------
 */

static int positions_compare(const void *a, const void *b)
{
    uint32_t left = *(const uint32_t *)a, right = *(const uint32_t *)b;
    return (left > right) - (left < right);
}

/* u^2.86 puts the fifth of all draws into the first hundredth: 0.01^(1/2.86) = 0.2. Taken by cubes, since u^3 is near
   enough and needs no library. */
static void row_draw(struct loading *loading, uint32_t i, uint64_t wanted, uint32_t *last_row)
{
    struct random_stream stream = random_open(1, RANDOM_TEST, i);
    uint64_t first = loading->cells;
    for (uint64_t c = 0; c < wanted; c++) {
        double u = random_uniform(&stream);
        uint32_t j = (uint32_t)(u * u * u * loading->columns);
        if (last_row[j] == i + 1)
            continue;
        last_row[j] = i + 1;
        loading->row[loading->cells] = i;
        loading->column[loading->cells] = j;
        loading->value[loading->cells++] = 0.5f * (float)(1 + random_below(&stream, 10));
    }
    qsort(loading->column + first, loading->cells - first, sizeof *loading->column, positions_compare);
}

static void table_draw(struct loading *loading, uint64_t cells)
{
    uint32_t *last_row;
    double side = 1;
    while (side * side * 1e7 < (double)cells)
        side *= 1.01;
    loading->rows = (uint32_t)(100000 * side);
    loading->columns = (uint32_t)(20000 * side);
    if (cells < 10000000) {
        loading->rows = (uint32_t)(cells / 100 + 1);
        loading->columns = loading->rows / 5 + 100;
    }
    size_t room = (size_t)(2.2 * (double)cells) + 1000;
    loading->row = bench_take(room, sizeof *loading->row);
    loading->column = bench_take(room, sizeof *loading->column);
    loading->value = bench_take(room, sizeof *loading->value);
    last_row = bench_take(loading->columns, sizeof *last_row);
    for (uint32_t i = 0; i < loading->rows; i++) {
        double share = 0.2 + 1.6 * random_uniform_at(1, RANDOM_TEST, 0, i);
        row_draw(loading, i, (uint64_t)(1.12 * share * (double)cells / loading->rows),
                 last_row); /* a tenth comes twice */
    }
    free(last_row);
}

/* ---- the files ------------------------------------------------------------------------------------------------------
 */

static void text_write(const struct loading *loading, const char *path)
{
    FILE *out = fopen(path, "w");
    if (out == NULL)
        fail(path);
    fprintf(out, "%%%%MatrixMarket matrix coordinate real general\n%u %u %llu\n", loading->rows, loading->columns,
            (unsigned long long)loading->cells);
    for (uint64_t k = 0; k < loading->cells; k++)
        fprintf(out, "%u %u %g\n", loading->row[k] + 1, loading->column[k] + 1, (double)loading->value[k]);
    if (fclose(out) != 0)
        fail(path);
}

static void long_write(const struct loading *loading, const char *path)
{
    FILE *out = fopen(path, "w");
    if (out == NULL)
        fail(path);
    fputs("rater,item,value\n", out);
    for (uint64_t k = 0; k < loading->cells; k++)
        fprintf(out, "rater-%06u,item-%05u,%g\n", loading->row[k], loading->column[k], (double)loading->value[k]);
    if (fclose(out) != 0)
        fail(path);
}

static void gzip_write(const char *from, const char *to)
{
    static char buffer[BUFFER];
    FILE *in = fopen(from, "r");
    gzFile out = gzopen(to, "wb");
    if (in == NULL || out == NULL)
        fail(to);
    for (size_t got; (got = fread(buffer, 1, sizeof buffer, in)) > 0;)
        if (gzwrite(out, buffer, (unsigned)got) != (int)got)
            fail(to);
    fclose(in);
    if (gzclose(out) != Z_OK)
        fail(to);
}

static void pack_write(const char *from, const char *to)
{
    fescue_context *context;
    fescue_table *table = bench_load(from, FESCUE_DOUBLE, 2, &context);
    bench_check(context, table_pack(table, to));
    table_destroy(&table);
    fescue_context_destroy(&context);
}

static void files_make(const struct loading *loading)
{
    char text[PATH_SIZE], path[PATH_SIZE];
    text_write(loading, path_of(loading, FORM_TEXT, text));
    gzip_write(text, path_of(loading, FORM_GZIP, path));
    long_write(loading, path_of(loading, FORM_LONG, path));
    pack_write(text, path_of(loading, FORM_PACK, path));
}

/* ---- memory -------------------------------------------------------------------------------------------------------
 */

/* Uses as much memory as any load takes, in pages as large as there are, like the library (base/memory.c). */
static void memory_warm(const struct loading *loading)
{
    enum { BYTES_A_CELL = 40 };
    size_t size = (loading->cells * BYTES_A_CELL / MEMORY_LARGE_PAGE + 1) * MEMORY_LARGE_PAGE;
    void *block = aligned_alloc(MEMORY_LARGE_PAGE, size);
    if (block == NULL)
        fail("no memory");
    madvise(block, size, MADV_HUGEPAGE);
    void *(*volatile set)(void *, int, size_t) = memset; /* not to be left out by the compiler */
    set(block, 1, size);
    free(block);
}

/* ---- what is measured ---------------------------------------------------------------------------------------------
 */

struct clocks {
    double wall, cpu;
};

static struct clocks clocks_start(void)
{
    return (struct clocks){clock_wall(), clock_cpu()};
}

/* Adds what went by since the start to the line of this name. */
static void clocks_stop(struct loading *loading, struct clocks start, const char *name)
{
    double wall = clock_wall() - start.wall, cpu = clock_cpu() - start.cpu;
    int k = 0;
    while (k < loading->lines && strcmp(loading->line[k].name, name) != 0)
        k++;
    if (k == loading->lines) {
        if (loading->lines == MOST_LINES)
            fail("too many lines");
        snprintf(loading->line[loading->lines++].name, sizeof loading->line[k].name, "%s", name);
    }
    struct measure *measure = &loading->line[k];
    measure->wall[measure->rounds] = wall;
    measure->cpu[measure->rounds++] = cpu;
}

static void inflate_measure(struct loading *loading)
{
    static unsigned char in[BUFFER], out[BUFFER];
    enum { GZIP = 15 + 16 };
    char path[PATH_SIZE];
    z_stream stream = {0};
    int file = open(path_of(loading, FORM_GZIP, path), O_RDONLY);
    struct clocks start = clocks_start();
    if (file < 0 || inflateInit2(&stream, GZIP) != Z_OK)
        fail(path);
    for (ssize_t got; (got = read(file, in, sizeof in)) > 0;) {
        stream.next_in = in;
        stream.avail_in = (unsigned)got;
        do {
            stream.next_out = out;
            stream.avail_out = sizeof out;
            inflate(&stream, Z_NO_FLUSH);
        } while (stream.avail_out == 0);
    }
    clocks_stop(loading, start, "inflate");
    inflateEnd(&stream);
    close(file);
}

static void read_measure(struct loading *loading, enum form form, const char *name)
{
    static char buffer[BUFFER];
    char path[PATH_SIZE];
    int file = open(path_of(loading, form, path), O_RDONLY);
    if (file < 0)
        fail(path);
    while (read(file, buffer, sizeof buffer) >
           0) /* not the first to touch it in a round: those after it are not either */
        ;
    lseek(file, 0, SEEK_SET);
    struct clocks start = clocks_start();
    while (read(file, buffer, sizeof buffer) > 0)
        ;
    clocks_stop(loading, start, name);
    close(file);
}

/* What mapping costs at least: a pack's words added up, out of pages that are looked at for the first time. */
static void scan_measure(struct loading *loading)
{
    char path[PATH_SIZE];
    int file = open(path_of(loading, FORM_PACK, path), O_RDONLY);
    if (file < 0)
        fail(path);
    struct clocks start = clocks_start();
    size_t size = (size_t)posix_file_calls.size(file);
    uint64_t *words = posix_file_calls.map(file, size);
    if (words == NULL)
        fail(path);
    uint64_t sum = 0;
    for (size_t k = 0; k < size / sizeof *words; k++)
        sum += words[k];
    volatile uint64_t kept = sum; /* so that the compiler has to */
    (void)kept;
    clocks_stop(loading, start, "map and scan pack");
    posix_file_calls.unmap(words, size);
    close(file);
}

static void copy_measure(struct loading *loading)
{
    enum { SIZE = 1 << 28 };
    char *from = bench_take(SIZE, 1), *to = bench_take(SIZE, 1);
    memset(from, 1, SIZE);
    memset(to, 2, SIZE);
    void *(*volatile copy)(void *, const void *, size_t) = memcpy; /* not to be foreseen by the compiler */
    struct clocks start = clocks_start();
    copy(to, from, SIZE);
    clocks_stop(loading, start, "copy of 268 MB");
    if (to[SIZE / 2] != 1)
        fail("memcpy");
    free(from), free(to);
}

static void sort_measure(struct loading *loading, size_t workers)
{
    fescue_context *context;
    struct cells cells;
    struct triplet_list list = {.row = loading->row, .column = loading->column, .count = loading->cells};
    char name[64];
    double *value = bench_take(loading->cells, sizeof *value);
    for (uint64_t k = 0; k < loading->cells; k++)
        value[k] = (double)loading->value[k];
    list.value = value;
    if (fescue_context_create(NULL, &context) != FESCUE_OK || team_resize(context, workers) != FESCUE_OK)
        fail("no context");
    memory_warm(loading);
    struct clocks start = clocks_start();
    bench_check(context, cells_build(context, loading->rows, loading->columns, &list, &cells));
    snprintf(name, sizeof name, "sort, %zu", workers);
    clocks_stop(loading, start, name);
    cells_free(context, &cells);
    fescue_context_destroy(&context);
    free(value);
}

static void load_measure(struct loading *loading, enum form form, size_t workers)
{
    static const char *const names[FORMS] = {"load .mtx.gz", "load .mtx", "load pack", "load long text"};
    char path[PATH_SIZE], name[64];
    fescue_context *context;
    memory_warm(loading);
    struct clocks start = clocks_start();
    fescue_table *table = bench_load(path_of(loading, form, path), FESCUE_DOUBLE, workers, &context);
    snprintf(name, sizeof name, "%s, %zu", names[form], workers);
    clocks_stop(loading, start, name);
    if (table->cells.count != loading->cells)
        fail("cells are missing");
    table_destroy(&table);
    fescue_context_destroy(&context);
}

/* SciPy's reader, where there is one, once; zeros where there is none. */
static struct clocks mmread_clocks(const struct loading *loading)
{
    const char *python = getenv("PYTHON");
    char path[PATH_SIZE], command[2 * PATH_SIZE];
    struct clocks clocks = {0, 0};
    snprintf(command, sizeof command,
             "%s -c 'import time, scipy.io; w = time.perf_counter(); c = time.process_time(); scipy.io.mmread(\"%s\"); "
             "print(time.perf_counter() - w, time.process_time() - c)' 2>/dev/null",
             python != NULL ? python : "/usr/bin/python3", path_of(loading, FORM_TEXT, path));
    FILE *pipe = popen(command, "r");
    if (pipe != NULL && fscanf(pipe, "%lf %lf", &clocks.wall, &clocks.cpu) != 2)
        clocks = (struct clocks){0, 0};
    if (pipe != NULL)
        pclose(pipe);
    return clocks;
}

/* ---- what is told -------------------------------------------------------------------------------------------------
 */

static double median(const double *numbers, int count)
{
    double sorted[ROUNDS];
    memcpy(sorted, numbers, (size_t)count * sizeof *numbers);
    return bench_median(sorted, (size_t)count);
}

static const struct measure *line_of(const struct loading *loading, const char *name)
{
    int k = 0;
    while (k < loading->lines && strcmp(loading->line[k].name, name) != 0)
        k++;
    if (k == loading->lines)
        fail(name);
    return &loading->line[k];
}

/* What stands over what, on the wall or in processors; the second measure below may be NULL. */
struct ratio {
    const char *what;
    bool in_processors;
    const char *above, *below, *and_below;
    double asked;
    bool at_least;
};
static const struct ratio ratios[] = {
    {".mtx.gz, 2 workers, over inflate", false, "load .mtx.gz, 2", "inflate", NULL, 1.3, false},
    {".mtx.gz, processors, over inflate", true, "load .mtx.gz, 2", "inflate", NULL, 2.5, false},
    {".mtx, 2 workers, over read + sort", false, "load .mtx, 2", "read .mtx", "sort, 2", 2, false},
    {"pack, 2 workers, over read", false, "load pack, 2", "read pack", NULL, 1.5, false},
    {"pack, processors of 1 worker, over read", true, "load pack, 1", "read pack", NULL, 1.5, false},
    {"pack, 1 worker over 2", false, "load pack, 1", "load pack, 2", NULL, 1.8, true},
};

static double ratio_of(const struct loading *loading, const struct ratio *ratio)
{
    const struct measure *above = line_of(loading, ratio->above), *below = line_of(loading, ratio->below);
    const struct measure *more = ratio->and_below != NULL ? line_of(loading, ratio->and_below) : NULL;
    double found[ROUNDS];
    for (int round = 0; round < ROUNDS; round++) {
        double limit = ratio->in_processors ? below->cpu[round] : below->wall[round];
        if (more != NULL)
            limit += ratio->in_processors ? more->cpu[round] : more->wall[round];
        found[round] = (ratio->in_processors ? above->cpu[round] : above->wall[round]) / limit;
    }
    return median(found, ROUNDS);
}

static void ratio_add(struct bench *bench, const char *what, double found, double asked, bool at_least)
{
    json_t *figure = json_pack("{s:s, s:s, s:f, s:f}", "what", "loading", "ratio", what, "times", found,
                               at_least ? "asked at least" : "asked at most", asked);
    if (strstr(what, "1 worker over 2") != NULL)
        figure_times_add(figure, found);
    figure_add(bench, figure);
}

static void ratios_add(struct bench *bench, const struct loading *loading)
{
    const struct measure *text = line_of(loading, "load .mtx, 2");
    const struct clocks mmread = mmread_clocks(loading);
    for (size_t k = 0; k < sizeof ratios / sizeof ratios[0]; k++)
        ratio_add(bench, ratios[k].what, ratio_of(loading, &ratios[k]), ratios[k].asked, ratios[k].at_least);
    if (mmread.cpu > 0)
        ratio_add(bench, "SciPy mmread over .mtx, 2 workers", mmread.wall / median(text->wall, ROUNDS), 20, true);
}

static void lines_add(struct bench *bench, const struct loading *loading)
{
    double cells = (double)loading->cells;
    for (int k = 0; k < loading->lines; k++) {
        const struct measure *measure = &loading->line[k];
        double wall = median(measure->wall, measure->rounds), cpu = median(measure->cpu, measure->rounds);
        figure_add(bench, json_pack("{s:s, s:s, s:I, s:f, s:f, s:f, s:f}", "what", "loading", "of", measure->name,
                                    "cells", (json_int_t)loading->cells, "wall seconds", wall, "processor seconds", cpu,
                                    "wall ns a cell", 1e9 * wall / cells, "processor ns a cell", 1e9 * cpu / cells));
    }
}

static void round_run(struct loading *loading)
{
    copy_measure(loading);
    load_measure(loading, FORM_GZIP, 1);
    inflate_measure(loading);
    load_measure(loading, FORM_GZIP, 2);
    sort_measure(loading, 1);
    load_measure(loading, FORM_TEXT, 1);
    read_measure(loading, FORM_TEXT, "read .mtx");
    sort_measure(loading, 2);
    load_measure(loading, FORM_TEXT, 2);
    read_measure(loading, FORM_PACK, "read pack");
    scan_measure(loading);
    load_measure(loading, FORM_PACK, 1);
    load_measure(loading, FORM_PACK, 2);
    load_measure(loading, FORM_LONG, 1);
    load_measure(loading, FORM_LONG, 2);
}

void loading_measure(struct bench *bench, uint64_t cells)
{
    struct loading loading = {0};
    const char *parent = getenv("TMPDIR");
    char path[PATH_SIZE];
    snprintf(loading.folder, sizeof loading.folder, "%s/fescue-bench-XXXXXX", parent != NULL ? parent : "/tmp");
    if (mkdtemp(loading.folder) == NULL)
        fail("no folder");
    table_draw(&loading, cells);
    files_make(&loading);
    for (int round = 0; round < ROUNDS; round++)
        round_run(&loading);
    lines_add(bench, &loading);
    ratios_add(bench, &loading);
    for (int form = 0; form < FORMS; form++)
        unlink(path_of(&loading, (enum form)form, path));
    rmdir(loading.folder);
    free(loading.row), free(loading.column), free(loading.value);
}
