/* SPDX-License-Identifier: MIT
 *
 * How fast a table is loaded, beside what the machine allows in the same run.
 *
 *     bench_load [folder [cells]]          default: a folder of its own, 10000000
 *
 * The table is one of ratings, 100000 x 20000 at 1e7 cells, sides growing with the square root of the cells: 0.5 .. 5
 * by halves, rows of 20 to 180 % of the mean number of cells, the columns' popularity such that the first hundredth
 * holds a fifth of them. It is written as Matrix Market text, the same gzipped, as long text with labels, and packed;
 * files that the folder has already are used again.
 *
 * Limits, all on one thread but the sorting:
 *     inflate   zlib over the gzipped file, from the page cache into one buffer
 *     read      read(2) of a file, from the page cache into one buffer
 *     copy      memcpy of memory that no cache holds
 *     sort      both compressed orders from rows, columns and values in memory
 * Then each form is loaded with 1 and with 2 workers, both orders built. Everything is run once a round, several
 * rounds; what is compared stands side by side in a round, a ratio is that of one round, and medians count, so that a
 * machine that slows down for a while does not decide. On a machine with other work seconds on the wall say little:
 * processor seconds are beside them.
 *
 * A virtual machine gives memory that is free back to its host, and then its next use costs several times as much,
 * whoever comes first; so before anything that takes memory is measured, as much is used and given back.
 */
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

struct bench {
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
    fprintf(stderr, "bench_load: %s\n", what);
    exit(1);
}

static void *taken(size_t size)
{
    void *block = malloc(size);
    if (block == NULL)
        fail("no memory");
    return block;
}

static const char *path_of(const struct bench *bench, enum form form, char path[PATH_SIZE])
{
    if (snprintf(path, PATH_SIZE, "%s/%s", bench->folder, form_files[form]) >= PATH_SIZE)
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
static void row_draw(struct bench *bench, uint32_t i, uint64_t wanted, uint32_t *last_row)
{
    struct random_stream stream = random_open(1, RANDOM_TEST, i);
    uint64_t first = bench->cells;
    for (uint64_t c = 0; c < wanted; c++) {
        double u = random_uniform(&stream);
        uint32_t j = (uint32_t)(u * u * u * bench->columns);
        if (last_row[j] == i + 1)
            continue;
        last_row[j] = i + 1;
        bench->row[bench->cells] = i;
        bench->column[bench->cells] = j;
        bench->value[bench->cells++] = 0.5f * (float)(1 + random_below(&stream, 10));
    }
    qsort(bench->column + first, bench->cells - first, sizeof *bench->column, positions_compare);
}

static void table_draw(struct bench *bench, uint64_t cells)
{
    uint32_t *last_row;
    double side = 1;
    while (side * side * 1e7 < (double)cells)
        side *= 1.01;
    bench->rows = (uint32_t)(100000 * side);
    bench->columns = (uint32_t)(20000 * side);
    if (cells < 10000000) {
        bench->rows = (uint32_t)(cells / 100 + 1);
        bench->columns = bench->rows / 5 + 100;
    }
    size_t room = (size_t)(2.2 * (double)cells) + 1000;
    bench->row = taken(room * sizeof *bench->row);
    bench->column = taken(room * sizeof *bench->column);
    bench->value = taken(room * sizeof *bench->value);
    last_row = calloc(bench->columns, sizeof *last_row);
    if (last_row == NULL)
        fail("no memory");
    for (uint32_t i = 0; i < bench->rows; i++) {
        double share = 0.2 + 1.6 * random_uniform_at(1, RANDOM_TEST, 0, i);
        row_draw(bench, i, (uint64_t)(1.12 * share * (double)cells / bench->rows), last_row); /* a tenth comes twice */
    }
    free(last_row);
}

/* ---- the files ------------------------------------------------------------------------------------------------------
 */

static void text_write(const struct bench *bench, const char *path)
{
    FILE *out = fopen(path, "w");
    if (out == NULL)
        fail(path);
    fprintf(out, "%%%%MatrixMarket matrix coordinate real general\n%u %u %llu\n", bench->rows, bench->columns,
            (unsigned long long)bench->cells);
    for (uint64_t k = 0; k < bench->cells; k++)
        fprintf(out, "%u %u %g\n", bench->row[k] + 1, bench->column[k] + 1, (double)bench->value[k]);
    if (fclose(out) != 0)
        fail(path);
}

static void long_write(const struct bench *bench, const char *path)
{
    FILE *out = fopen(path, "w");
    if (out == NULL)
        fail(path);
    fputs("rater,item,value\n", out);
    for (uint64_t k = 0; k < bench->cells; k++)
        fprintf(out, "rater-%06u,item-%05u,%g\n", bench->row[k], bench->column[k], (double)bench->value[k]);
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

static fescue_table *load(const char *path, size_t workers, fescue_context **context)
{
    const struct table_reading reading = {.precision = FESCUE_DOUBLE};
    fescue_table *table;
    if (fescue_context_create(NULL, context) != FESCUE_OK || team_resize(*context, workers) != FESCUE_OK)
        fail("no context");
    if (table_read(*context, path, &reading, &table) != FESCUE_OK)
        fail(fescue_failure_text(*context));
    return table;
}

static void pack_write(const char *from, const char *to)
{
    fescue_context *context;
    fescue_table *table = load(from, 2, &context);
    if (table_pack(table, to) != FESCUE_OK)
        fail(fescue_failure_text(context));
    table_destroy(&table);
    fescue_context_destroy(&context);
}

static void files_make(const struct bench *bench)
{
    char text[PATH_SIZE], path[PATH_SIZE];
    if (access(path_of(bench, FORM_TEXT, text), R_OK) != 0)
        text_write(bench, text);
    if (access(path_of(bench, FORM_GZIP, path), R_OK) != 0)
        gzip_write(text, path);
    if (access(path_of(bench, FORM_LONG, path), R_OK) != 0)
        long_write(bench, path);
    if (access(path_of(bench, FORM_PACK, path), R_OK) != 0)
        pack_write(text, path);
}

/* ---- memory -------------------------------------------------------------------------------------------------------
 */

/* Uses as much memory as any load takes, in pages as large as there are, like the library (base/memory.c). */
static void memory_warm(const struct bench *bench)
{
    enum { LARGE_PAGE = 1 << 21, BYTES_A_CELL = 40 };
    size_t size = (bench->cells * BYTES_A_CELL / LARGE_PAGE + 1) * LARGE_PAGE;
    void *block = aligned_alloc(LARGE_PAGE, size);
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
static void clocks_stop(struct bench *bench, struct clocks start, const char *name)
{
    double wall = clock_wall() - start.wall, cpu = clock_cpu() - start.cpu;
    int k = 0;
    while (k < bench->lines && strcmp(bench->line[k].name, name) != 0)
        k++;
    if (k == bench->lines) {
        if (bench->lines == MOST_LINES)
            fail("too many lines");
        snprintf(bench->line[bench->lines++].name, sizeof bench->line[k].name, "%s", name);
    }
    struct measure *measure = &bench->line[k];
    measure->wall[measure->rounds] = wall;
    measure->cpu[measure->rounds++] = cpu;
}

static void inflate_measure(struct bench *bench)
{
    static unsigned char in[BUFFER], out[BUFFER];
    enum { GZIP = 15 + 16 };
    char path[PATH_SIZE];
    z_stream stream = {0};
    int file = open(path_of(bench, FORM_GZIP, path), O_RDONLY);
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
    clocks_stop(bench, start, "inflate");
    inflateEnd(&stream);
    close(file);
}

static void read_measure(struct bench *bench, enum form form, const char *name)
{
    static char buffer[BUFFER];
    char path[PATH_SIZE];
    int file = open(path_of(bench, form, path), O_RDONLY);
    if (file < 0)
        fail(path);
    while (read(file, buffer, sizeof buffer) >
           0) /* not the first to touch it in a round: those after it are not either */
        ;
    lseek(file, 0, SEEK_SET);
    struct clocks start = clocks_start();
    while (read(file, buffer, sizeof buffer) > 0)
        ;
    clocks_stop(bench, start, name);
    close(file);
}

static void copy_measure(struct bench *bench)
{
    enum { SIZE = 1 << 28 };
    char *from = taken(SIZE), *to = taken(SIZE);
    memset(from, 1, SIZE);
    memset(to, 2, SIZE);
    void *(*volatile copy)(void *, const void *, size_t) = memcpy; /* not to be foreseen by the compiler */
    struct clocks start = clocks_start();
    copy(to, from, SIZE);
    clocks_stop(bench, start, "copy of 268 MB");
    if (to[SIZE / 2] != 1)
        fail("memcpy");
    free(from), free(to);
}

static void sort_measure(struct bench *bench, size_t workers)
{
    fescue_context *context;
    struct cells cells;
    struct triplet_list list = {.row = bench->row, .column = bench->column, .count = bench->cells};
    char name[64];
    double *value = taken(bench->cells * sizeof *value);
    for (uint64_t k = 0; k < bench->cells; k++)
        value[k] = (double)bench->value[k];
    list.value = value;
    if (fescue_context_create(NULL, &context) != FESCUE_OK || team_resize(context, workers) != FESCUE_OK)
        fail("no context");
    memory_warm(bench);
    struct clocks start = clocks_start();
    if (cells_build(context, bench->rows, bench->columns, &list, &cells) != FESCUE_OK)
        fail(fescue_failure_text(context));
    snprintf(name, sizeof name, "sort, %zu", workers);
    clocks_stop(bench, start, name);
    cells_free(context, &cells);
    fescue_context_destroy(&context);
    free(value);
}

static void load_measure(struct bench *bench, enum form form, size_t workers)
{
    static const char *const names[FORMS] = {"load .mtx.gz", "load .mtx", "load pack", "load long text"};
    char path[PATH_SIZE], name[64];
    fescue_context *context;
    memory_warm(bench);
    struct clocks start = clocks_start();
    fescue_table *table = load(path_of(bench, form, path), workers, &context);
    snprintf(name, sizeof name, "%s, %zu", names[form], workers);
    clocks_stop(bench, start, name);
    if (table->cells.count != bench->cells)
        fail("cells are missing");
    table_destroy(&table);
    fescue_context_destroy(&context);
}

/* SciPy's reader, where there is one, once; zeros where there is none. */
static struct clocks mmread_clocks(const struct bench *bench)
{
    const char *python = getenv("PYTHON");
    char path[PATH_SIZE], command[2 * PATH_SIZE];
    struct clocks clocks = {0, 0};
    snprintf(command, sizeof command,
             "%s -c 'import time, scipy.io; w = time.perf_counter(); c = time.process_time(); scipy.io.mmread(\"%s\"); "
             "print(time.perf_counter() - w, time.process_time() - c)' 2>/dev/null",
             python != NULL ? python : "/usr/bin/python3", path_of(bench, FORM_TEXT, path));
    FILE *pipe = popen(command, "r");
    if (pipe != NULL && fscanf(pipe, "%lf %lf", &clocks.wall, &clocks.cpu) != 2)
        clocks = (struct clocks){0, 0};
    if (pipe != NULL)
        pclose(pipe);
    return clocks;
}

/* ---- what is told -------------------------------------------------------------------------------------------------
 */

static int numbers_compare(const void *a, const void *b)
{
    double left = *(const double *)a, right = *(const double *)b;
    return (left > right) - (left < right);
}

static double median(const double *numbers, int count)
{
    double sorted[ROUNDS];
    memcpy(sorted, numbers, (size_t)count * sizeof *numbers);
    qsort(sorted, (size_t)count, sizeof *sorted, numbers_compare);
    return sorted[count / 2];
}

static const struct measure *line_of(const struct bench *bench, const char *name)
{
    int k = 0;
    while (k < bench->lines && strcmp(bench->line[k].name, name) != 0)
        k++;
    if (k == bench->lines)
        fail(name);
    return &bench->line[k];
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

static double ratio_of(const struct bench *bench, const struct ratio *ratio)
{
    const struct measure *above = line_of(bench, ratio->above), *below = line_of(bench, ratio->below);
    const struct measure *more = ratio->and_below != NULL ? line_of(bench, ratio->and_below) : NULL;
    double found[ROUNDS];
    for (int round = 0; round < ROUNDS; round++) {
        double limit = ratio->in_processors ? below->cpu[round] : below->wall[round];
        if (more != NULL)
            limit += ratio->in_processors ? more->cpu[round] : more->wall[round];
        found[round] = (ratio->in_processors ? above->cpu[round] : above->wall[round]) / limit;
    }
    return median(found, ROUNDS);
}

static void ratio_print(const char *what, double found, double asked, bool at_least)
{
    printf("%-66s %6.2f  (asked: at %s %.2f)\n", what, found, at_least ? "least" : "most", asked);
}

static void ratios_print(const struct bench *bench)
{
    const struct measure *text = line_of(bench, "load .mtx, 2"), *alone = line_of(bench, "load .mtx, 1");
    const struct clocks mmread = mmread_clocks(bench);
    printf("\n");
    for (size_t k = 0; k < sizeof ratios / sizeof ratios[0]; k++)
        ratio_print(ratios[k].what, ratio_of(bench, &ratios[k]), ratios[k].asked, ratios[k].at_least);
    if (mmread.cpu > 0) {
        ratio_print("SciPy mmread, wall, over .mtx on 2 workers", mmread.wall / median(text->wall, ROUNDS), 20, true);
        printf("%-66s %6.2f\n", "    the same in processors, over 1 worker", mmread.cpu / median(alone->cpu, ROUNDS));
    }
}

static void lines_print(const struct bench *bench)
{
    printf("%u x %u, %llu cells; medians of %d\n", bench->rows, bench->columns, (unsigned long long)bench->cells,
           ROUNDS);
    printf("%-24s %10s %10s %12s %12s\n", "", "wall s", "cpu s", "wall ns/cell", "cpu ns/cell");
    for (int k = 0; k < bench->lines; k++) {
        const struct measure *measure = &bench->line[k];
        struct clocks line = {median(measure->wall, measure->rounds), median(measure->cpu, measure->rounds)};
        printf("%-24s %10.3f %10.3f %12.1f %12.1f\n", bench->line[k].name, line.wall, line.cpu,
               1e9 * line.wall / (double)bench->cells, 1e9 * line.cpu / (double)bench->cells);
    }
}

static void round_run(struct bench *bench)
{
    copy_measure(bench);
    load_measure(bench, FORM_GZIP, 1);
    inflate_measure(bench);
    load_measure(bench, FORM_GZIP, 2);
    sort_measure(bench, 1);
    load_measure(bench, FORM_TEXT, 1);
    read_measure(bench, FORM_TEXT, "read .mtx");
    sort_measure(bench, 2);
    load_measure(bench, FORM_TEXT, 2);
    read_measure(bench, FORM_PACK, "read pack");
    load_measure(bench, FORM_PACK, 1);
    load_measure(bench, FORM_PACK, 2);
    load_measure(bench, FORM_LONG, 1);
    load_measure(bench, FORM_LONG, 2);
}

int main(int count, char **argument)
{
    static struct bench bench;
    const char *parent = getenv("TMPDIR");
    bool is_ours = count < 2;
    snprintf(bench.folder, sizeof bench.folder, "%s", is_ours ? "" : argument[1]);
    if (is_ours) {
        snprintf(bench.folder, sizeof bench.folder, "%s/fescue-bench-XXXXXX", parent != NULL ? parent : "/tmp");
        if (mkdtemp(bench.folder) == NULL)
            fail("no folder");
    } else {
        mkdir(bench.folder, 0777);
    }
    table_draw(&bench, count > 2 ? strtoull(argument[2], NULL, 10) : 10000000);
    files_make(&bench);
    for (int round = 0; round < ROUNDS; round++)
        round_run(&bench);
    lines_print(&bench);
    ratios_print(&bench);
    for (int form = 0; is_ours && form < FORMS; form++) {
        char path[PATH_SIZE];
        unlink(path_of(&bench, (enum form)form, path));
    }
    if (is_ours)
        rmdir(bench.folder);
    return 0;
}
