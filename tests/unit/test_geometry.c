/* SPDX-License-Identifier: MIT
 *
 * One suite that every geometry passes, with every way of moving on it. Each is looked at through an isometric
 * embedding in dense matrices, where all claims can be stated alike:
 *
 *     Grassmann    U -> U U' / sqrt(2),   D -> (D U' + U D') / sqrt(2)
 *     fixed rank   X,  Z                  as they are
 *
 * A new geometry, retraction or transport is one more line of the table `ways`.
 */
#include "support_geometry.h"

enum { ROWS = 12, COLUMNS = 9, RANK = 3 };
enum place { HERE, THERE, PLACES };              /* the point, and where a retraction led */
enum slot { STEP, FIRST, SECOND, MOVED, SLOTS }; /* tangents: all but MOVED are at HERE */

/* A point, where it is moved to, and some tangents, of one of the two geometries. */
struct world {
    struct ground ground;
    struct grassmann_work grassmann;
    struct fixed_rank_work fixed_rank;
    struct matrix basis[PLACES], lift[SLOTS];
    struct low_rank point[PLACES];
    struct fixed_rank_tangent tangent[SLOTS];
};

struct geometry {
    void (*create)(struct world *);
    struct matrix (*embed)(struct world *, enum place);
    struct matrix (*embed_tangent)(struct world *, enum place, enum slot);
    void (*project)(struct world *, struct matrix dense, enum slot); /* onto the tangents HERE */
    double (*inner)(struct world *, enum slot, enum slot);
    void (*settle)(struct world *); /* HERE is now THERE */
};

/* ---- Grassmann -------------------------------------------------------------------------------------------------- */

static void grassmann_create(struct world *world)
{
    struct ground *ground = &world->ground;
    world->grassmann = grassmann_carve(ground->context, &ground->arena, ROWS, RANK);
    for (int k = 0; k < PLACES; k++)
        world->basis[k] = zeros(ground, ROWS, RANK);
    for (int k = 0; k < SLOTS; k++)
        world->lift[k] = zeros(ground, ROWS, RANK);
    assert_status(ground->context, grassmann_random_point(&world->grassmann, &ground->stream, world->basis[HERE]),
                  FESCUE_OK);
}

static struct matrix grassmann_embed(struct world *world, enum place place)
{
    struct matrix dense = times(&world->ground, world->basis[place], false, world->basis[place], true);
    matrix_scale(sqrt(0.5), dense);
    return dense;
}

static struct matrix grassmann_embed_tangent(struct world *world, enum place place, enum slot slot)
{
    struct matrix dense = times(&world->ground, world->lift[slot], false, world->basis[place], true);
    matrix_multiply(sqrt(0.5), world->basis[place], false, world->lift[slot], true, sqrt(0.5), dense);
    return dense;
}

/* D = (I - U U') (A + A') U / sqrt(2) */
static void grassmann_project_dense(struct world *world, struct matrix dense, enum slot slot)
{
    matrix_multiply(sqrt(0.5), dense, false, world->basis[HERE], false, 0, world->lift[slot]);
    matrix_multiply(sqrt(0.5), dense, true, world->basis[HERE], false, 1, world->lift[slot]);
    grassmann_project(&world->grassmann, world->basis[HERE], world->lift[slot]);
}

static double grassmann_inner_of(struct world *world, enum slot a, enum slot b)
{
    return grassmann_inner(world->lift[a], world->lift[b]);
}

static void move_exp(struct world *world, double t)
{
    assert_status(world->ground.context,
                  grassmann_exp(&world->grassmann, world->basis[HERE], world->lift[STEP], t, world->basis[THERE]),
                  FESCUE_OK);
}

static void move_qr(struct world *world, double t)
{
    assert_status(
        world->ground.context,
        grassmann_retract_qr(&world->grassmann, world->basis[HERE], world->lift[STEP], t, world->basis[THERE]),
        FESCUE_OK);
}

static void move_polar(struct world *world, double t)
{
    assert_status(
        world->ground.context,
        grassmann_retract_polar(&world->grassmann, world->basis[HERE], world->lift[STEP], t, world->basis[THERE]),
        FESCUE_OK);
}

static void carry_parallel(struct world *world, double t, enum slot from)
{
    struct grassmann_geodesic geodesic = geodesic_carve(&world->ground.arena, ROWS, RANK);
    matrix_copy(world->lift[from], world->lift[MOVED]);
    assert_status(world->ground.context,
                  geodesic_aim(&world->grassmann, world->basis[HERE], world->lift[STEP], &geodesic), FESCUE_OK);
    geodesic_transport(&world->grassmann, &geodesic, t, world->lift[MOVED]);
}

static void carry_by_projection(struct world *world, double t, enum slot from)
{
    (void)t;
    matrix_copy(world->lift[from], world->lift[MOVED]);
    grassmann_project(&world->grassmann, world->basis[THERE], world->lift[MOVED]);
}

static void grassmann_settle(struct world *world)
{
    matrix_copy(world->basis[THERE], world->basis[HERE]);
}

static const struct geometry grassmann = {grassmann_create,        grassmann_embed,    grassmann_embed_tangent,
                                          grassmann_project_dense, grassmann_inner_of, grassmann_settle};

/* ---- fixed rank -------------------------------------------------------------------------------------------------- */

static void fixed_rank_create(struct world *world)
{
    struct ground *ground = &world->ground;
    world->fixed_rank = fixed_rank_carve(ground->context, &ground->arena, ROWS, COLUMNS, RANK);
    for (int k = 0; k < PLACES; k++) {
        world->point[k] = (struct low_rank){.rows = ROWS, .columns = COLUMNS, .rank = RANK};
        world->point[k].left = frame(ground, ROWS, RANK);
        world->point[k].right = frame(ground, COLUMNS, RANK);
        world->point[k].spectrum = zeros(ground, 1, RANK).data;
        for (size_t i = 0; i < RANK; i++)
            world->point[k].spectrum[i] = 2 / (1 + (double)i);
    }
    for (int k = 0; k < SLOTS; k++)
        world->tangent[k] = fixed_rank_tangent_carve(&ground->arena, ROWS, COLUMNS, RANK);
}

static struct matrix fixed_rank_embed(struct world *world, enum place place)
{
    struct matrix left = copy_of(&world->ground, world->point[place].left);
    matrix_scale_columns(left, world->point[place].spectrum);
    return times(&world->ground, left, false, world->point[place].right, true);
}

static struct matrix fixed_rank_embed_tangent(struct world *world, enum place place, enum slot slot)
{
    struct matrix a = zeros(&world->ground, ROWS, RANK);
    fixed_rank_pairs(&world->fixed_rank, &world->point[place], &world->tangent[slot], a);
    struct matrix dense = times(&world->ground, a, false, world->point[place].right, true);
    matrix_multiply(1, world->point[place].left, false, world->tangent[slot].right, true, 1, dense);
    return dense;
}

static void fixed_rank_project_dense(struct world *world, struct matrix dense, enum slot slot)
{
    matrix_multiply(1, dense, false, world->point[HERE].right, false, 0, world->tangent[slot].left);
    matrix_multiply(1, dense, true, world->point[HERE].left, false, 0, world->tangent[slot].right);
    fixed_rank_project(&world->fixed_rank, &world->point[HERE], &world->tangent[slot]);
}

static double fixed_rank_inner_of(struct world *world, enum slot a, enum slot b)
{
    return fixed_rank_inner(&world->fixed_rank, &world->tangent[a], &world->tangent[b]);
}

static void move_metric(struct world *world, double t)
{
    assert_status(world->ground.context,
                  fixed_rank_retract_metric(&world->fixed_rank, &world->point[HERE], &world->tangent[STEP], t,
                                            &world->point[THERE]),
                  FESCUE_OK);
}

/* Orthographic where that is near, which it is for all but the first three halvings. */
static void move_orthographic(struct world *world, double t)
{
    assert_status(
        world->ground.context,
        fixed_rank_retract(&world->fixed_rank, &world->point[HERE], &world->tangent[STEP], t, &world->point[THERE]),
        FESCUE_OK);
}

static void carry_fixed_rank(struct world *world, double t, enum slot from)
{
    (void)t;
    fixed_rank_transport(&world->fixed_rank, &world->point[HERE], &world->tangent[from], &world->point[THERE], NULL,
                         &world->tangent[MOVED]);
}

static void fixed_rank_settle(struct world *world)
{
    matrix_copy(world->point[THERE].left, world->point[HERE].left);
    matrix_copy(world->point[THERE].right, world->point[HERE].right);
    for (size_t k = 0; k < RANK; k++)
        world->point[HERE].spectrum[k] = world->point[THERE].spectrum[k];
}

static const struct geometry fixed_rank = {fixed_rank_create,        fixed_rank_embed,    fixed_rank_embed_tangent,
                                           fixed_rank_project_dense, fixed_rank_inner_of, fixed_rank_settle};

/* ---- the suite --------------------------------------------------------------------------------------------------- */

static const struct way {
    const char *name;
    const struct geometry *geometry;
    void (*move)(struct world *, double t);                  /* THERE = the retraction of t STEP */
    void (*carry)(struct world *, double t, enum slot from); /* MOVED = the slot carried there */
} ways[] = {
    {"Grassmann, exponential, parallel transport", &grassmann, move_exp, carry_parallel},
    {"Grassmann, QR, projection", &grassmann, move_qr, carry_by_projection},
    {"Grassmann, polar, projection", &grassmann, move_polar, carry_by_projection},
    {"fixed rank, metric, projection", &fixed_rank, move_metric, carry_fixed_rank},
    {"fixed rank, orthographic, projection", &fixed_rank, move_orthographic, carry_fixed_rank},
};
enum { WAYS = sizeof ways / sizeof ways[0], HALVINGS = 8 };
static const double first_step = 0.2, bound = 1e-13, slope_floor = 1e-12;

static void in_every_way(void **state, void check(struct world *, const struct way *))
{
    for (size_t k = 0; k < WAYS; k++) {
        struct world world = {.ground = ground_open(state)};
        print_message("# %s\n", ways[k].name);
        ways[k].geometry->create(&world);
        for (enum slot slot = STEP; slot <= SECOND; slot++)
            ways[k].geometry->project(
                &world, normals(&world.ground, ROWS, ways[k].geometry == &grassmann ? ROWS : COLUMNS), slot);
        check(&world, &ways[k]);
        ground_close(&world.ground);
    }
}

/* The part of (a - b) that is tangent HERE: its norm. Uses the slot MOVED. */
static double tangent_gap(struct world *world, const struct geometry *geometry, struct matrix a, struct matrix b)
{
    matrix_add(-1, b, a);
    geometry->project(world, a, MOVED);
    return sqrt(geometry->inner(world, MOVED, MOVED));
}

static void check_metric(struct world *world, const struct way *way)
{
    const struct geometry *geometry = way->geometry;
    struct matrix a = geometry->embed_tangent(world, HERE, FIRST), b = geometry->embed_tangent(world, HERE, SECOND);
    double size = matrix_norm(a) * matrix_norm(b);
    assert_close(geometry->inner(world, FIRST, SECOND), matrix_dot(a, b), bound * size);
    assert_close(geometry->inner(world, FIRST, SECOND), geometry->inner(world, SECOND, FIRST), bound * size);
    assert_close(sqrt(geometry->inner(world, FIRST, FIRST)), matrix_norm(a), bound * size);
}
static void the_metric_is_that_of_the_embedding(void **state)
{
    in_every_way(state, check_metric);
}

static void check_projection(struct world *world, const struct way *way)
{
    const struct geometry *geometry = way->geometry;
    struct matrix a = geometry->embed_tangent(world, HERE, FIRST);
    struct matrix other = normals(&world->ground, a.rows, a.columns);
    geometry->project(world, a, MOVED);
    assert_true(gap(geometry->embed_tangent(world, HERE, MOVED), a) <= bound * matrix_norm(a));
    geometry->project(world, other, MOVED);
    assert_close(geometry->inner(world, FIRST, MOVED), matrix_dot(a, other), 10 * bound * matrix_norm(a));
}
static void projection_keeps_tangents_and_is_self_adjoint(void **state)
{
    in_every_way(state, check_projection);
}

/* R(0) = X; R(t) = X + t Z + O(t^2), and the tangent part of the error is O(t^3), or none at all as for the
   orthographic retraction. */
static void check_retraction(struct world *world, const struct way *way)
{
    const struct geometry *geometry = way->geometry;
    struct matrix here = geometry->embed(world, HERE), step = geometry->embed_tangent(world, HERE, STEP);
    double second[HALVINGS], third[HALVINGS], t = first_step;
    way->move(world, 0);
    assert_true(gap(geometry->embed(world, THERE), here) <= bound);
    for (size_t k = 0; k < HALVINGS; k++, t /= 2) {
        struct matrix straight = copy_of(&world->ground, here);
        matrix_add(t, step, straight);
        way->move(world, t);
        second[k] = gap(geometry->embed(world, THERE), straight);
        third[k] = tangent_gap(world, geometry, geometry->embed(world, THERE), straight);
    }
    assert_order(&second[3], HALVINGS - 3, 2, slope_floor);
    if (third[3] > slope_floor)
        assert_order(&third[3], HALVINGS - 3, 3, slope_floor);
}
static void retractions_are_of_second_order(void **state)
{
    in_every_way(state, check_retraction);
}

/* Carried tangents are tangent where they arrive: moved on from there they leave the embedding by O(e^2). And the
   tangent part of what carrying changes is O(t^2). */
static void check_transport(struct world *world, const struct way *way)
{
    const struct geometry *geometry = way->geometry;
    struct matrix first = geometry->embed_tangent(world, HERE, FIRST);
    double error[HALVINGS], t = first_step;
    way->move(world, 0);
    way->carry(world, 0, FIRST);
    assert_true(gap(geometry->embed_tangent(world, THERE, MOVED), first) <= bound * matrix_norm(first));
    for (size_t k = 0; k < HALVINGS; k++, t /= 2) {
        way->move(world, t);
        way->carry(world, t, FIRST);
        error[k] = tangent_gap(world, geometry, geometry->embed_tangent(world, THERE, MOVED), first);
    }
    assert_order(&error[3], HALVINGS - 3, 2, slope_floor);
    way->move(world, first_step);
    way->carry(world, first_step, FIRST);
    struct matrix carried = geometry->embed_tangent(world, THERE, MOVED);
    geometry->settle(world);
    geometry->project(world, carried, MOVED);
    assert_true(gap(geometry->embed_tangent(world, HERE, MOVED), carried) <= bound * matrix_norm(carried));
}
static void transports_agree_to_second_order(void **state)
{
    in_every_way(state, check_transport);
}

/* The bits of a number, for equality. */
static void same_bits(struct matrix a, struct matrix b)
{
    for (size_t i = 0; i < a.rows; i++)
        assert_memory_equal(&MATRIX_AT(a, i, 0), &MATRIX_AT(b, i, 0), a.columns * sizeof(double));
}

/* The same calls give the same bits whatever came between, and nothing is allocated. */
static void check_repetition(struct world *world, const struct way *way)
{
    struct matrix points[2], tangents[2];
    uint64_t calls = fescue_memory_usage(world->ground.context).calls;
    for (size_t k = 0; k < 2; k++) {
        way->move(world, 0.7);
        way->carry(world, 0.7, FIRST);
        points[k] = way->geometry->embed(world, THERE);
        tangents[k] = way->geometry->embed_tangent(world, THERE, MOVED);
        way->move(world, 0.1);
    }
    same_bits(points[0], points[1]);
    same_bits(tangents[0], tangents[1]);
    assert_int_equal(fescue_memory_usage(world->ground.context).calls, calls);
}
static void a_work_keeps_nothing_and_takes_nothing(void **state)
{
    in_every_way(state, check_repetition);
}

/* Tall enough that the dense algebra is cut into pieces for the team. */
enum { TALL_ROWS = 13000, TALL_COLUMNS = 9000 };

/* A step out and back on both geometries, from a fresh start, with so many workers. */
static void tall_walk(void **state, size_t workers, struct matrix basis, struct low_rank *point)
{
    fescue_context *context = bench_of(state)->context;
    struct random_stream stream = random_open(3, RANDOM_TEST, 2);
    struct arena arena = {0};
    assert_status(context, team_resize(context, workers), FESCUE_OK);
    grassmann_reserve(&arena, TALL_ROWS, RANK);
    fixed_rank_reserve(&arena, TALL_ROWS, TALL_COLUMNS, RANK);
    fixed_rank_tangent_reserve(&arena, TALL_ROWS, TALL_COLUMNS, RANK);
    assert_status(context, arena_open(context, &arena), FESCUE_OK);
    struct grassmann_work flat = grassmann_carve(context, &arena, TALL_ROWS, RANK);
    struct fixed_rank_work work = fixed_rank_carve(context, &arena, TALL_ROWS, TALL_COLUMNS, RANK);
    struct fixed_rank_tangent z = fixed_rank_tangent_carve(&arena, TALL_ROWS, TALL_COLUMNS, RANK);
    assert_status(context, grassmann_random_point(&flat, &stream, basis), FESCUE_OK);
    grassmann_random_tangent(&flat, &stream, basis, z.left);
    assert_status(context, grassmann_exp(&flat, basis, z.left, 1, point->left), FESCUE_OK);
    assert_status(context, grassmann_log(&flat, point->left, basis, z.left), FESCUE_OK);
    assert_status(context, grassmann_retract_qr(&flat, point->left, z.left, 0.5, basis), FESCUE_OK);
    for (size_t k = 0; k < RANK; k++) {
        MATRIX_AT(point->right, 17 * k, k) = 1;
        point->spectrum[k] = 1 / (1 + (double)k);
    }
    for (size_t j = 0; j < TALL_COLUMNS; j++)
        MATRIX_AT(z.right, j, j % RANK) = random_normal(&stream);
    fixed_rank_project(&work, point, &z);
    assert_status(context, fixed_rank_retract(&work, point, &z, 0.1, point), FESCUE_OK);
    arena_close(context, &arena);
}

static void threads_do_not_change_the_bits(void **state)
{
    static const size_t workers[] = {1, 2, 4};
    enum { RUNS = sizeof workers / sizeof workers[0] };
    fescue_context *context = bench_of(state)->context;
    struct low_rank basis[RUNS], point[RUNS];
    for (size_t k = 0; k < RUNS; k++) {
        assert_status(context, low_rank_create(context, TALL_ROWS, RANK, RANK, &basis[k]), FESCUE_OK);
        assert_status(context, low_rank_create(context, TALL_ROWS, TALL_COLUMNS, RANK, &point[k]), FESCUE_OK);
        tall_walk(state, workers[k], basis[k].left, &point[k]);
        same_bits(basis[k].left, basis[0].left);
        same_bits(point[k].left, point[0].left);
        same_bits(point[k].right, point[0].right);
        assert_memory_equal(point[k].spectrum, point[0].spectrum, RANK * sizeof(double));
    }
    for (size_t k = 0; k < RUNS; k++) {
        low_rank_free(context, &basis[k]);
        low_rank_free(context, &point[k]);
    }
    assert_status(context, team_resize(context, 1), FESCUE_OK);
}

int main(void)
{
    const struct CMUnitTest tests[] = {
        BENCH_TEST(the_metric_is_that_of_the_embedding),    BENCH_TEST(projection_keeps_tangents_and_is_self_adjoint),
        BENCH_TEST(retractions_are_of_second_order),        BENCH_TEST(transports_agree_to_second_order),
        BENCH_TEST(a_work_keeps_nothing_and_takes_nothing), BENCH_TEST(threads_do_not_change_the_bits),
    };
    return cmocka_run_group_tests(tests, NULL, NULL);
}
