/* SPDX-License-Identifier: MIT
 *
 * Timing, printing and keeping of figures, and what every part of a run takes or loads.
 */
#include "figures.h"

#include "table/table.h"

#include <math.h>
#include <stdio.h>
#include <stdlib.h>
#include <string.h>

enum { RUNS_LEAST = 5, RUNS_MOST = 101 };
/* Seconds in which the runs of one work are to be over: a busy machine needs many for a good median. */
static const double seconds_enough = 0.5;

void bench_check(fescue_context *context, fescue_status status)
{
    if (status == FESCUE_OK)
        return;
    fprintf(stderr, "bench: %s\n", fescue_failure_text(context));
    exit(1);
}

void *bench_take(size_t count, size_t size)
{
    size_t bytes = (count * size + 63) / 64 * 64 + 64;
    void *taken = aligned_alloc(64, bytes);
    if (taken == NULL) {
        fprintf(stderr, "bench: no memory for %zu bytes\n", bytes);
        exit(1);
    }
    memset(taken, 0, bytes);
    return taken;
}

fescue_table *bench_load(const char *path, enum fescue_precision precision, size_t workers, fescue_context **context)
{
    const struct table_reading reading = {.precision = precision};
    fescue_table *table;
    if (fescue_context_create(NULL, context) != FESCUE_OK) {
        fprintf(stderr, "bench: no context\n");
        exit(1);
    }
    bench_check(*context, team_resize(*context, workers));
    bench_check(*context, table_read(*context, path, &reading, &table));
    return table;
}

static int order(const void *a, const void *b)
{
    double x = *(const double *)a, y = *(const double *)b;
    return (x > y) - (x < y);
}

double bench_median(double *values, size_t count)
{
    qsort(values, count, sizeof *values, order);
    return values[count / 2];
}

/* Orders the values. */
static struct bench_time time_of(double *seconds, size_t runs)
{
    struct bench_time time = {.median = bench_median(seconds, runs)};
    time.least = seconds[0];
    return time;
}

/* How many runs of the work last as long as one of the other. */
static size_t runs_beside(bench_work *work, void *argument, bench_work *other)
{
    if (other == NULL)
        return 1;
    double begin = clock_wall();
    other(argument);
    double middle = clock_wall();
    work(argument);
    double ratio = (middle - begin) / (clock_wall() - middle);
    return ratio > 1 ? (size_t)fmin(ratio, 1000) : 1;
}

struct bench_time bench_measure(size_t threads, bench_work *work, void *argument, bench_work *other,
                                struct bench_time *limit)
{
    double (*const clock)(void) = threads == 1 ? clock_cpu : clock_wall;
    double own[RUNS_MOST], others[RUNS_MOST], all = 0;
    size_t rounds = 0;
    work(argument); /* what the first run meets for the first time is not counted */
    size_t runs = runs_beside(work, argument, other);
    for (; rounds < RUNS_MOST && (rounds < RUNS_LEAST || all < seconds_enough); rounds++) {
        double begin = clock_cpu();
        if (other != NULL)
            other(argument);
        others[rounds] = clock_cpu() - begin;
        begin = clock();
        for (size_t run = 0; run < runs; run++)
            work(argument);
        double seconds = clock() - begin;
        own[rounds] = seconds / (double)runs;
        all += seconds;
    }
    if (other != NULL)
        *limit = time_of(others, rounds);
    return time_of(own, rounds);
}

double bench_seconds(size_t threads, bench_work *work, void *argument)
{
    return bench_measure(threads, work, argument, NULL, NULL).median;
}

static void value_print(const char *key, const json_t *value)
{
    if (json_is_string(value))
        printf("  %s", json_string_value(value));
    else if (json_is_integer(value))
        printf("  %s %lld", key, (long long)json_integer_value(value));
    else if (json_is_real(value))
        printf("  %s %.4g", key, json_real_value(value));
}

void figure_add(struct bench *bench, json_t *figure)
{
    const char *key;
    json_t *value;
    json_object_foreach(figure, key, value) value_print(key, value);
    printf("\n");
    fflush(stdout);
    json_array_append_new(bench->figures, figure);
}

/* Lines of the chart, by what was measured: on tables of several sizes, each a point of the line. */
enum { CHART_LINES = 160, CHART_LINE = 16, CHART_MARGINS = 130 }; /* pixels */
struct chart {
    char label[CHART_LINES][96];
    size_t lines;
};

static size_t line_of(struct chart *chart, const char *label)
{
    size_t line = 0;
    while (line < chart->lines && strcmp(chart->label[line], label) != 0)
        line++;
    if (line == chart->lines && line < CHART_LINES)
        snprintf(chart->label[chart->lines++], sizeof chart->label[line], "%s", label);
    return line;
}

/* Cells, line, share of gemm on one thread, and what it is of. */
static void chart_data_write(const struct bench *bench, struct chart *chart, FILE *to)
{
    size_t k;
    const json_t *figure;
    json_array_foreach(bench->figures, k, figure)
    {
        const json_t *share = json_object_get(figure, "share of gemm"), *rank = json_object_get(figure, "rank");
        if (share == NULL || rank == NULL || json_integer_value(json_object_get(figure, "threads")) != 1)
            continue;
        const char *precision = json_string_value(json_object_get(figure, "precision"));
        char label[96];
        snprintf(label, sizeof label, "%s, %s, rank %d", json_string_value(json_object_get(figure, "what")),
                 precision != NULL ? precision : "double", (int)json_integer_value(rank));
        fprintf(to, "%lld %zu %.4f \"%s\"\n", (long long)json_integer_value(json_object_get(figure, "cells")),
                line_of(chart, label), json_real_value(share), label);
    }
}

static void chart_draw(const struct bench *bench)
{
    static struct chart chart;
    char path[1024], command[3200];
    snprintf(path, sizeof path, "%s/bench.dat", bench->build);
    FILE *to = fopen(path, "w");
    if (to == NULL)
        return;
    chart_data_write(bench, &chart, to);
    fclose(to);
    if (chart.lines == 0)
        return;
    snprintf(command, sizeof command,
             "command -v gnuplot >/dev/null && gnuplot -e \"set terminal pngcairo size 1000,%zu; set output "
             "'%s/bench.png'; set title 'Loops over cells, one thread'; set yrange [%zu.5:-0.5]; "
             "set xlabel 'share of the rate of matrix products'; set xrange [0:*]; set grid; set lmargin 42; set "
             "ytics font ',9'; set cblabel 'cells, log10'; set palette defined (0 '#b0c4de', 1 '#10305a'); "
             "plot '%s' using 3:2:(log10(\\$1)):ytic(4) with points pointtype 7 pointsize 1.2 palette notitle\"",
             CHART_MARGINS + CHART_LINE * chart.lines, bench->build, chart.lines - 1, path);
    if (system(command) == 0)
        printf("the chart is %s/bench.png\n", bench->build);
}

void figures_write(const struct bench *bench)
{
    char path[1024];
    snprintf(path, sizeof path, "%s/bench.json", bench->build);
    json_t *all = json_pack("{s:{s:f, s:f, s:f, s:f, s:f, s:f}, s:O}", "limits", "dgemm flops a second",
                            bench->limit[LIMIT_DGEMM], "sgemm flops a second", bench->limit[LIMIT_SGEMM],
                            "copied bytes a second", bench->limit[LIMIT_COPY], "inflated bytes a second",
                            bench->limit[LIMIT_INFLATE], "dgemm of two threads over one", bench->limit[LIMIT_TWO_DGEMM],
                            "copied by two threads over one", bench->limit[LIMIT_TWO_COPY], "figures", bench->figures);
    if (all == NULL || json_dump_file(all, path, JSON_INDENT(2)) != 0)
        fprintf(stderr, "bench: %s could not be written\n", path);
    else
        printf("all figures are in %s\n", path);
    json_decref(all);
    chart_draw(bench);
}
