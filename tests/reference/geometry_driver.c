/* SPDX-License-Identifier: MIT
 *
 * Lends the geometry to tests/reference/geometry.py:
 *
 *     geometry_driver OPERATION ROWS COLUMNS RANK STEP < numbers > numbers
 *
 * Numbers are the machine's doubles, matrices row by row. What goes in and out is in the table at the end.
 * Ends with 1 on anything unexpected.
 */
#include "manifold/manifold.h"

#include <stdio.h>
#include <stdlib.h>
#include <string.h>

struct bench {
    fescue_context *context;
    struct arena arena;
    size_t rows, columns, rank;
    double step;
    struct grassmann_work grassmann;
    struct fixed_rank_work fixed_rank;
};

static void must(bool true_of)
{
    if (!true_of)
        exit(1);
}

static void must_do(fescue_status status)
{
    must(status == FESCUE_OK);
}

static struct matrix take(struct bench *bench, size_t rows, size_t columns)
{
    struct matrix a = matrix_carve(&bench->arena, rows, columns);
    for (size_t i = 0; i < rows; i++)
        must(fread(&MATRIX_AT(a, i, 0), sizeof(double), columns, stdin) == columns);
    return a;
}

static void give(struct matrix a)
{
    for (size_t i = 0; i < a.rows; i++)
        must(fwrite(&MATRIX_AT(a, i, 0), sizeof(double), a.columns, stdout) == a.columns);
}

static struct matrix take_tall(struct bench *bench)
{
    return take(bench, bench->rows, bench->rank);
}

static void do_exp(struct bench *bench)
{
    struct matrix point = take_tall(bench), tangent = take_tall(bench);
    must_do(grassmann_exp(&bench->grassmann, point, tangent, bench->step, tangent));
    give(tangent);
}

static void do_log(struct bench *bench)
{
    struct matrix point = take_tall(bench), target = take_tall(bench);
    must_do(grassmann_log(&bench->grassmann, point, target, target));
    give(target);
}

static void do_angles(struct bench *bench)
{
    struct matrix a = take_tall(bench), b = take_tall(bench), angles = matrix_carve(&bench->arena, 1, bench->rank);
    must_do(grassmann_angles(&bench->grassmann, a, b, angles.data));
    give(angles);
}

static void do_transport(struct bench *bench)
{
    struct matrix point = take_tall(bench), tangent = take_tall(bench), carried = take_tall(bench);
    struct grassmann_geodesic *geodesic = &bench->grassmann.geodesic;
    must_do(geodesic_aim(&bench->grassmann, point, tangent, geodesic));
    geodesic_transport(&bench->grassmann, geodesic, bench->step, carried);
    give(carried);
}

static void do_qr(struct bench *bench)
{
    struct matrix point = take_tall(bench), tangent = take_tall(bench);
    must_do(grassmann_retract_qr(&bench->grassmann, point, tangent, bench->step, tangent));
    give(tangent);
}

static void do_polar(struct bench *bench)
{
    struct matrix point = take_tall(bench), tangent = take_tall(bench);
    must_do(grassmann_retract_polar(&bench->grassmann, point, tangent, bench->step, tangent));
    give(tangent);
}

/* U, s, V */
static struct low_rank take_point(struct bench *bench)
{
    struct low_rank point = {.rows = bench->rows, .columns = bench->columns, .rank = bench->rank};
    point.left = take(bench, bench->rows, bench->rank);
    point.spectrum = take(bench, 1, bench->rank).data;
    point.right = take(bench, bench->columns, bench->rank);
    return point;
}

static void give_point(const struct low_rank *point)
{
    struct matrix spectrum = {.data = point->spectrum, .rows = 1, .columns = point->rank, .stride = point->rank};
    give(point->left);
    give(spectrum);
    give(point->right);
}

/* M, Up, Vp */
static struct fixed_rank_tangent take_tangent(struct bench *bench)
{
    struct fixed_rank_tangent z;
    z.middle = take(bench, bench->rank, bench->rank);
    z.left = take(bench, bench->rows, bench->rank);
    z.right = take(bench, bench->columns, bench->rank);
    return z;
}

static void give_tangent(const struct fixed_rank_tangent *z)
{
    give(z->middle);
    give(z->left);
    give(z->right);
}

/* A point and a step from it by a retraction. */
static void retract(struct bench *bench,
                    fescue_status way(struct fixed_rank_work *, const struct low_rank *,
                                      const struct fixed_rank_tangent *, double, struct low_rank *))
{
    struct low_rank point = take_point(bench);
    struct fixed_rank_tangent z = take_tangent(bench);
    struct low_rank to = point;
    to.left = matrix_carve(&bench->arena, bench->rows, bench->rank);
    to.right = matrix_carve(&bench->arena, bench->columns, bench->rank);
    to.spectrum = arena_carve(&bench->arena, bench->rank, sizeof *to.spectrum);
    must_do(way(&bench->fixed_rank, &point, &z, bench->step, &to));
    give_point(&to);
}

static void do_metric(struct bench *bench)
{
    retract(bench, fixed_rank_retract_metric);
}

static void do_retract(struct bench *bench)
{
    retract(bench, fixed_rank_retract);
}

static void do_project(struct bench *bench)
{
    struct low_rank point = take_point(bench);
    struct fixed_rank_tangent z = take_tangent(bench);
    fixed_rank_project(&bench->fixed_rank, &point, &z);
    give_tangent(&z);
}

static void do_carry(struct bench *bench)
{
    struct low_rank from = take_point(bench), to = take_point(bench);
    struct fixed_rank_tangent z = take_tangent(bench);
    struct fixed_rank_tangent out = fixed_rank_tangent_carve(&bench->arena, bench->rows, bench->columns, bench->rank);
    fixed_rank_transport(&bench->fixed_rank, &from, &z, &to, NULL, &out);
    give_tangent(&out);
}

static const struct operation {
    const char *name;
    void (*run)(struct bench *);
} operations[] = {
    {"exp", do_exp},             /* U D -> Y */
    {"log", do_log},             /* U Y -> D */
    {"angles", do_angles},       /* U Y -> the angles, ascending */
    {"transport", do_transport}, /* U D K -> K at the end */
    {"qr", do_qr},               /* U D -> Y */
    {"polar", do_polar},         /* U D -> Y */
    {"metric", do_metric},       /* X Z -> X */
    {"retract", do_retract},     /* X Z -> X */
    {"project", do_project},     /* X (anything, A V, A'U) -> Z */
    {"carry", do_carry},         /* X Y Z -> Z at Y */
};

static void bench_open(struct bench *bench)
{
    enum { ROOM = 1 << 24 }; /* for the numbers of one call */
    must_do(fescue_context_create(NULL, &bench->context));
    grassmann_reserve(&bench->arena, bench->rows, bench->rank);
    fixed_rank_reserve(&bench->arena, bench->rows, bench->columns, bench->rank);
    arena_reserve(&bench->arena, ROOM, 1);
    must_do(arena_open(bench->context, &bench->arena));
    bench->grassmann = grassmann_carve(bench->context, &bench->arena, bench->rows, bench->rank);
    bench->fixed_rank = fixed_rank_carve(bench->context, &bench->arena, bench->rows, bench->columns, bench->rank);
}

int main(int count, char **words)
{
    struct bench bench = {0};
    must(count == 6);
    bench.rows = strtoul(words[2], NULL, 10);
    bench.columns = strtoul(words[3], NULL, 10);
    bench.rank = strtoul(words[4], NULL, 10);
    bench.step = strtod(words[5], NULL);
    bench_open(&bench);
    bool found = false;
    for (size_t k = 0; k < sizeof operations / sizeof operations[0]; k++)
        if (strcmp(words[1], operations[k].name) == 0) {
            operations[k].run(&bench);
            found = true;
        }
    must(found && fflush(stdout) == 0);
    arena_close(bench.context, &bench.arena);
    fescue_context_destroy(&bench.context);
    return 0;
}
