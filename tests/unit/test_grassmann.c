/* SPDX-License-Identifier: MIT
 *
 * Grassmann geometry by its properties, at every shape of the list: tall, square, one dimension, and rank above the
 * codimension. Bounds are a few units of rounding times the root of the size (support_geometry.h) unless said.
 */
#include "support_geometry.h"

static const struct {
    size_t rows, rank;
} shapes[] = {{1, 1}, {2, 1}, {9, 1}, {7, 3}, {6, 6}, {5, 4}, {33, 20}, {60, 9}, {400, 16}};
enum { SHAPES = sizeof shapes / sizeof shapes[0] };
static const double quarter_turn = 1.57079632679489661923; /* pi/2 */

/* A random point with a random unit tangent at one shape, and the work. */
struct scene {
    struct ground *ground;
    struct grassmann_work work;
    struct matrix point, tangent;
};

static struct matrix blank(struct scene *scene)
{
    return zeros(scene->ground, scene->work.rows, scene->work.rank);
}

static struct scene scene_make(struct ground *ground, size_t rows, size_t rank)
{
    struct scene scene = {.ground = ground};
    ground_clear(ground);
    scene.work = grassmann_carve(ground->context, &ground->arena, rows, rank);
    scene.point = blank(&scene);
    scene.tangent = blank(&scene);
    assert_status(ground->context, grassmann_random_point(&scene.work, &ground->stream, scene.point), FESCUE_OK);
    grassmann_random_tangent(&scene.work, &ground->stream, scene.point, scene.tangent);
    return scene;
}

/* Runs a check at every shape. */
static void at_every_shape(void **state, void check(struct scene *))
{
    struct ground ground = ground_open(state);
    for (size_t k = 0; k < SHAPES; k++) {
        struct scene scene = scene_make(&ground, shapes[k].rows, shapes[k].rank);
        check(&scene);
    }
    ground_close(&ground);
}

static struct matrix exp_of(struct scene *scene, struct matrix tangent, double t)
{
    struct matrix to = blank(scene);
    assert_status(scene->work.context, grassmann_exp(&scene->work, scene->point, tangent, t, to), FESCUE_OK);
    return to;
}

static struct matrix log_of(struct scene *scene, struct matrix from, struct matrix target)
{
    struct matrix tangent = blank(scene);
    assert_status(scene->work.context, grassmann_log(&scene->work, from, target, tangent), FESCUE_OK);
    return tangent;
}

static double distance_of(struct scene *scene, struct matrix a, struct matrix b)
{
    double distance = (double)NAN;
    assert_status(scene->work.context, grassmann_distance(&scene->work, a, b, &distance), FESCUE_OK);
    return distance;
}

static bool is_single_point(const struct scene *scene)
{
    return scene->work.rows == scene->work.rank;
}

static void check_random(struct scene *scene)
{
    assert_true(orthonormality(scene->point) <= rounding(scene->point));
    assert_true(overlap(scene->point, scene->tangent) <= rounding(scene->point));
    assert_close(matrix_norm(scene->tangent), is_single_point(scene) ? 0 : 1, 1e-14);
    assert_close(grassmann_inner(scene->tangent, scene->tangent), is_single_point(scene) ? 0 : 1, 1e-14);
}
static void random_points_and_tangents_are_such(void **state)
{
    at_every_shape(state, check_random);
}

static void check_projection(struct scene *scene)
{
    struct ground *ground = scene->ground;
    struct matrix a = normals(ground, scene->work.rows, scene->work.rank), b = copy_of(ground, a);
    struct matrix c = normals(ground, scene->work.rows, scene->work.rank), d = copy_of(ground, c);
    grassmann_project(&scene->work, scene->point, b);
    grassmann_project(&scene->work, scene->point, d);
    assert_close(matrix_dot(b, c), matrix_dot(a, d), 10 * rounding(a) * matrix_norm(a)); /* self-adjoint */
    struct matrix twice = copy_of(ground, b);
    grassmann_project(&scene->work, scene->point, twice);
    assert_true(gap(twice, b) <= rounding(a));
    matrix_copy(scene->tangent, twice);
    grassmann_project(&scene->work, scene->point, twice);
    assert_true(gap(twice, scene->tangent) <= rounding(a));
}
static void projection_is_idempotent_and_self_adjoint(void **state)
{
    at_every_shape(state, check_projection);
}

/* What is left of a large normal vector is a tangent to rounding of its own size. */
static void check_small_remainder(struct scene *scene)
{
    struct matrix z = copy_of(scene->ground, scene->tangent);
    matrix_add(1e9, scene->point, z);
    grassmann_project(&scene->work, scene->point, z);
    assert_true(overlap(scene->point, z) <= 10 * rounding(z) * matrix_norm(z));
    assert_true(gap(z, scene->tangent) <= 1e9 * rounding(z));
}
static void a_small_tangent_part_is_still_tangent(void **state)
{
    at_every_shape(state, check_small_remainder);
}

/* Lengths from rounding's to just inside the injectivity radius. */
static const double lengths[] = {0, 1e-12, 1e-8, 1e-4, 0.1, 1, 1.5, 1.5707};
enum { LENGTHS = sizeof lengths / sizeof lengths[0] };

static void check_exp_log(struct scene *scene)
{
    for (size_t k = 0; k < LENGTHS; k++) {
        struct matrix to = exp_of(scene, scene->tangent, lengths[k]);
        struct matrix wanted = copy_of(scene->ground, scene->tangent);
        matrix_scale(lengths[k], wanted);
        assert_true(orthonormality(to) <= rounding(to));
        struct matrix log = log_of(scene, scene->point, to);
        assert_true(gap(log, wanted) <= 2 * rounding(to));
        if (lengths[k] > 0) /* relative to its own length, however short */
            assert_true(overlap(scene->point, log) <= 10 * rounding(to) * matrix_norm(log));
        assert_close(distance_of(scene, scene->point, to), matrix_norm(wanted), 2 * rounding(to));
        assert_close(distance_of(scene, to, scene->point), matrix_norm(wanted), 2 * rounding(to));
    }
    assert_true(gap(exp_of(scene, scene->tangent, 0), scene->point) <= rounding(scene->point));
}
static void log_undoes_exp_and_distance_is_length(void **state)
{
    at_every_shape(state, check_exp_log);
}

/* Two random points, usually far apart: exp of the log spans the target, whatever its basis. */
static void check_log_exp(struct scene *scene)
{
    struct ground *ground = scene->ground;
    struct matrix target = frame(ground, scene->work.rows, scene->work.rank);
    struct matrix rotation = frame(ground, scene->work.rank, scene->work.rank);
    struct matrix log = log_of(scene, scene->point, target);
    assert_true(overlap(scene->point, log) <= rounding(log));
    assert_close(matrix_norm(log), distance_of(scene, scene->point, target), rounding(log));
    assert_close(distance_of(scene, exp_of(scene, log, 1), target), 0, 4 * rounding(log));
    struct matrix rotated = times(ground, target, false, rotation, false);
    assert_true(gap(log_of(scene, scene->point, rotated), log) <= 20 * rounding(log));
}
static void exp_undoes_log(void **state)
{
    at_every_shape(state, check_log_exp);
}

/* Subspaces of more than half the dimension meet: that many angles are zero, to the bit. */
static void check_meeting(struct scene *scene)
{
    size_t rows = scene->work.rows, rank = scene->work.rank, zero = 2 * rank > rows ? 2 * rank - rows : 0;
    double *angles = arena_carve(&scene->ground->arena, rank, sizeof *angles);
    struct matrix target = frame(scene->ground, rows, rank);
    assert_status(scene->work.context, grassmann_angles(&scene->work, scene->point, target, angles), FESCUE_OK);
    for (size_t k = 0; k < rank; k++)
        assert_true(k < zero ? angles[k] == 0 : angles[k] > 1e-6);
}
static void large_subspaces_meet(void **state)
{
    at_every_shape(state, check_meeting);
}

/* Two points at given angles: U, and (U cos + W sin) O with [U W] orthonormal; the logarithm is W diag(angles). */
static void check_angles(struct ground *ground, const double *angles, size_t rank)
{
    struct scene scene = scene_make(ground, 2 * rank + 3, rank);
    struct matrix both = frame(ground, 2 * rank + 3, 2 * rank), target = blank(&scene), wanted = blank(&scene);
    struct matrix start = matrix_left(both, rank), rotation = frame(ground, rank, rank);
    double *found = arena_carve(&ground->arena, rank, sizeof *found), square = 0;
    for (size_t k = 0; k < rank; k++) {
        for (size_t i = 0; i < both.rows; i++) {
            double u = MATRIX_AT(both, i, k), w = MATRIX_AT(both, i, rank + k);
            MATRIX_AT(target, i, k) = u * cos(angles[k]) + w * sin(angles[k]);
            MATRIX_AT(wanted, i, k) = w * angles[k];
        }
        square += angles[k] * angles[k];
    }
    target = times(ground, target, false, rotation, false);
    assert_status(ground->context, grassmann_angles(&scene.work, start, target, found), FESCUE_OK);
    for (size_t k = 0; k < rank; k++)
        assert_close(found[k], angles[k], rounding(target));
    assert_close(distance_of(&scene, start, target), sqrt(square), rounding(target));
    if (angles[rank - 1] < quarter_turn - 1e-8) /* nearer to the cut locus the direction is lost to rounding */
        assert_true(gap(log_of(&scene, start, target), wanted) <= 100 * rounding(target));
    scene.point = start;
    struct matrix reached = exp_of(&scene, log_of(&scene, start, target), 1);
    assert_close(distance_of(&scene, reached, target), 0, 8 * rounding(target));
}

static void angles_are_accurate_from_end_to_end(void **state)
{
    struct ground ground = ground_open(state);
    const double right_angle[] = {quarter_turn};
    const double tiny[] = {0, 1e-15, 1e-12, 1e-10, 1e-8};
    const double mixed[] = {0, 1e-9, 1e-5, 0.3, 0.7853981, 0.7853981633974483, 0.7853982, 1.2, quarter_turn - 1e-5};
    const double cut[] = {0.2, 0.2, quarter_turn - 1e-9, quarter_turn};
    const double equal[] = {0.5, 0.5, 0.5, 0.5};
    const double all_right[] = {quarter_turn, quarter_turn, quarter_turn};
    check_angles(&ground, right_angle, 1);
    check_angles(&ground, tiny, 5);
    check_angles(&ground, mixed, 9);
    check_angles(&ground, cut, 4);
    check_angles(&ground, equal, 4);
    check_angles(&ground, all_right, 3);
    ground_close(&ground);
}

static void check_transport(struct scene *scene)
{
    struct ground *ground = scene->ground;
    struct grassmann_geodesic geodesic = geodesic_carve(&ground->arena, scene->work.rows, scene->work.rank);
    struct matrix k = blank(scene), l = blank(scene), to = blank(scene), moved_k, moved_l;
    grassmann_random_tangent(&scene->work, &ground->stream, scene->point, k);
    grassmann_random_tangent(&scene->work, &ground->stream, scene->point, l);
    assert_status(ground->context, geodesic_aim(&scene->work, scene->point, scene->tangent, &geodesic), FESCUE_OK);
    for (double t = 0; t < 4; t += 0.7) {
        geodesic_point(&scene->work, &geodesic, t, to);
        geodesic_transport(&scene->work, &geodesic, t, moved_k = copy_of(ground, k));
        geodesic_transport(&scene->work, &geodesic, t, moved_l = copy_of(ground, l));
        assert_true(overlap(to, moved_k) <= 2 * rounding(to));
        assert_close(grassmann_inner(moved_k, moved_l), grassmann_inner(k, l), 2 * rounding(to));
        assert_close(matrix_norm(moved_k), matrix_norm(k), 2 * rounding(to));
    }
    geodesic_transport(&scene->work, &geodesic, 0, moved_k = copy_of(ground, k));
    assert_true(gap(moved_k, k) <= rounding(k));
}
static void transport_is_an_isometry_between_tangent_spaces(void **state)
{
    at_every_shape(state, check_transport);
}

/* The velocity is parallel: carried to the end and turned round it is the logarithm of the start. And a vector carried
   there and back is what it was. */
static void check_return(struct scene *scene)
{
    struct ground *ground = scene->ground;
    struct grassmann_geodesic geodesic = geodesic_carve(&ground->arena, scene->work.rows, scene->work.rank);
    struct matrix velocity = copy_of(ground, scene->tangent), to = blank(scene), k = blank(scene), back;
    grassmann_random_tangent(&scene->work, &ground->stream, scene->point, k);
    assert_status(ground->context, geodesic_aim(&scene->work, scene->point, scene->tangent, &geodesic), FESCUE_OK);
    geodesic_point(&scene->work, &geodesic, 1, to);
    geodesic_transport(&scene->work, &geodesic, 1, velocity);
    matrix_scale(-1, velocity);
    assert_true(gap(log_of(scene, to, scene->point), velocity) <= 4 * rounding(to));
    geodesic_transport(&scene->work, &geodesic, 1, back = copy_of(ground, k));
    assert_status(ground->context, geodesic_aim(&scene->work, to, velocity, &geodesic), FESCUE_OK);
    geodesic_transport(&scene->work, &geodesic, 1, back);
    assert_true(gap(back, k) <= 4 * rounding(to));
}
static void velocity_is_parallel_and_there_and_back_is_nothing(void **state)
{
    at_every_shape(state, check_return);
}

typedef fescue_status retraction(struct grassmann_work *, struct matrix, struct matrix, double, struct matrix);

/* Orthonormal; U + t D up to t^2 as a matrix, which needs the sign of QR fixed; the exponential's subspace up to t^3.
   `to` may be the point or the tangent. */
static void check_retraction(struct scene *scene, retraction *retract)
{
    enum { HALVINGS = 7 };
    double second[HALVINGS], third[HALVINGS], t = 0.25;
    struct ground *ground = scene->ground;
    struct matrix to = blank(scene), straight;
    for (size_t k = 0; k < HALVINGS; k++, t /= 2) {
        assert_status(ground->context, retract(&scene->work, scene->point, scene->tangent, t, to), FESCUE_OK);
        assert_true(orthonormality(to) <= rounding(to));
        matrix_add(t, scene->tangent, straight = copy_of(ground, scene->point));
        second[k] = gap(to, straight);
        third[k] = distance_of(scene, to, exp_of(scene, scene->tangent, t));
    }
    if (is_single_point(scene))
        return;
    assert_order(second, HALVINGS, 2, 1e-12);
    assert_order(third, HALVINGS, 3, 1e-12);
    matrix_copy(scene->point, straight);
    assert_status(ground->context, retract(&scene->work, scene->point, scene->tangent, 0.5, to), FESCUE_OK);
    assert_status(ground->context, retract(&scene->work, straight, scene->tangent, 0.5, straight), FESCUE_OK);
    assert_true(gap(straight, to) == 0);
    matrix_copy(scene->tangent, straight);
    assert_status(ground->context, retract(&scene->work, scene->point, straight, 0.5, straight), FESCUE_OK);
    assert_true(gap(straight, to) == 0);
}
static void check_qr(struct scene *scene)
{
    check_retraction(scene, grassmann_retract_qr);
}
static void check_polar(struct scene *scene)
{
    check_retraction(scene, grassmann_retract_polar);
}
static void retraction_by_qr_agrees_with_exp(void **state)
{
    at_every_shape(state, check_qr);
}
static void retraction_by_polar_factor_agrees_with_exp(void **state)
{
    at_every_shape(state, check_polar);
}

/* Y is the polar factor of U + t D exactly when Y'(U + t D) is symmetric and positive. */
static void check_polar_definition(struct scene *scene)
{
    struct matrix to = blank(scene), sum = copy_of(scene->ground, scene->point);
    matrix_add(3, scene->tangent, sum);
    assert_status(scene->work.context, grassmann_retract_polar(&scene->work, scene->point, scene->tangent, 3, to),
                  FESCUE_OK);
    struct matrix factor = times(scene->ground, to, true, sum, false);
    struct matrix back = times(scene->ground, to, false, factor, false);
    assert_true(gap(back, sum) <= 10 * rounding(sum));
    for (size_t i = 0; i < factor.rows; i++) {
        assert_true(MATRIX_AT(factor, i, i) > 0);
        for (size_t j = 0; j < i; j++)
            assert_close(MATRIX_AT(factor, i, j), MATRIX_AT(factor, j, i), 10 * rounding(sum));
    }
}
static void the_polar_retraction_is_the_polar_factor(void **state)
{
    at_every_shape(state, check_polar_definition);
}

/* At U O with D O: exp and polar give the old basis times O, QR the same subspace. */
static void check_change_of_basis(struct scene *scene)
{
    static retraction *const retractions[] = {grassmann_exp, grassmann_retract_polar, grassmann_retract_qr};
    struct ground *ground = scene->ground;
    struct matrix rotation = frame(ground, scene->work.rank, scene->work.rank), a = blank(scene), b = blank(scene);
    struct matrix point = times(ground, scene->point, false, rotation, false);
    struct matrix tangent = times(ground, scene->tangent, false, rotation, false);
    for (size_t k = 0; k < 3; k++) {
        retraction *retract = retractions[k];
        assert_status(ground->context, retract(&scene->work, scene->point, scene->tangent, 0.8, a), FESCUE_OK);
        assert_status(ground->context, retract(&scene->work, point, tangent, 0.8, b), FESCUE_OK);
        assert_close(distance_of(scene, a, b), 0, 4 * rounding(a));
        if (retract != grassmann_retract_qr)
            assert_true(gap(times(ground, a, false, rotation, false), b) <= 4 * rounding(a));
    }
}
static void the_basis_does_not_matter(void **state)
{
    at_every_shape(state, check_change_of_basis);
}

/* Points come in pairs symmetric about a point along ever other directions: after every pair of a fresh mean, that
   point. And along one geodesic the mean is that of the parameters. */
static void check_mean(struct scene *scene)
{
    static const double places[] = {0.3, -0.5, 0.1, 0.6, -0.2, -0.3}; /* they sum to 0 */
    struct matrix mean = blank(scene), direction = blank(scene);
    for (int pair = 0; pair < 5; pair++) {
        grassmann_random_tangent(&scene->work, &scene->ground->stream, scene->point, direction);
        for (uint64_t t = 1; t <= 2; t++) {
            struct matrix point = exp_of(scene, direction, t == 1 ? 0.7 : -0.7);
            if (t == 1)
                matrix_copy(scene->point, mean);
            assert_status(scene->work.context, grassmann_mean_step(&scene->work, point, average_weight(t), mean),
                          FESCUE_OK);
            assert_close(distance_of(scene, mean, t == 1 ? point : scene->point), 0, 4 * rounding(mean));
        }
    }
    for (uint64_t t = 1; t <= 6; t++)
        assert_status(
            scene->work.context,
            grassmann_mean_step(&scene->work, exp_of(scene, scene->tangent, places[t - 1]), average_weight(t), mean),
            FESCUE_OK);
    assert_close(distance_of(scene, mean, scene->point), 0, 8 * rounding(mean));
    assert_true(orthonormality(mean) <= rounding(mean));
}
static void the_running_mean_meets_the_middle(void **state)
{
    at_every_shape(state, check_mean);
}

/* A basis that has departed from orthonormality by d comes back to d^2, so that rounding does not add up; and it does
   not over a thousand steps. */
static void rounding_does_not_add_up(void **state)
{
    struct ground ground = ground_open(state);
    struct scene scene = scene_make(&ground, 30, 5);
    matrix_scale(1 + 1e-9, scene.point);
    for (int step = 0; step < 1000; step++) {
        assert_status(ground.context, grassmann_exp(&scene.work, scene.point, scene.tangent, 1, scene.point),
                      FESCUE_OK);
        assert_true(orthonormality(scene.point) <= rounding(scene.point));
        grassmann_random_tangent(&scene.work, &ground.stream, scene.point, scene.tangent);
    }
    ground_close(&ground);
}

/* The sectional curvature of span(D, E), orthonormal, from a small triangle:
       |Exp(e D) Exp(e E)|^2 = 2 e^2 - K e^4 / 3 + O(e^6)   (O(e^5) drops out since the manifold is symmetric). */
static double curvature_of(struct scene *scene, struct matrix d, struct matrix e)
{
    const double small = 0.02;
    double side = distance_of(scene, exp_of(scene, d, small), exp_of(scene, e, small));
    return 3 * (2 * small * small - side * side) / pow(small, 4);
}

/* e <- e without its part along d, at norm 1. */
static void make_orthonormal(struct matrix d, struct matrix e)
{
    matrix_add(-grassmann_inner(d, e), d, e);
    matrix_scale(1 / matrix_norm(e), e);
}

/* What the header says of curvature: in [0, 2], in [0, 1] at rank and corank 1; 2 is reached by the plane of a rotation
   in Gr(2, 4), 0 by two separate rotations (Wong 1968). The error of the small triangle is below 0.01. */
static void curvature_lies_where_the_header_says(void **state)
{
    struct ground ground = ground_open(state);
    for (size_t k = 0; k < SHAPES; k++) {
        size_t rows = shapes[k].rows, rank = shapes[k].rank;
        if (rank * (rows - rank) < 2)
            continue;
        struct scene scene = scene_make(&ground, rows, rank);
        struct matrix other = blank(&scene);
        grassmann_random_tangent(&scene.work, &ground.stream, scene.point, other);
        make_orthonormal(scene.tangent, other);
        double curvature = curvature_of(&scene, scene.tangent, other);
        assert_true(curvature > -0.01 && curvature < (rank == 1 || rows - rank == 1 ? 1.01 : 2.01));
    }
    struct scene scene = scene_make(&ground, 4, 2);
    struct matrix all = frame(&ground, 4, 4), d = blank(&scene), e = blank(&scene), f = blank(&scene);
    for (size_t i = 0; i < 4; i++) {
        double first = MATRIX_AT(all, i, 2) * sqrt(0.5), second = MATRIX_AT(all, i, 3) * sqrt(0.5);
        for (size_t j = 0; j < 2; j++)
            MATRIX_AT(scene.point, i, j) = MATRIX_AT(all, i, j);
        MATRIX_AT(d, i, 0) = first, MATRIX_AT(d, i, 1) = second;
        MATRIX_AT(e, i, 0) = -second, MATRIX_AT(e, i, 1) = first;
        MATRIX_AT(f, i, 0) = first, MATRIX_AT(f, i, 1) = -second;
    }
    assert_close(curvature_of(&scene, d, e), 2, 0.01);
    assert_close(curvature_of(&scene, d, f), 0, 0.01);
    ground_close(&ground);
}

int main(void)
{
    const struct CMUnitTest tests[] = {
        BENCH_TEST(random_points_and_tangents_are_such),
        BENCH_TEST(projection_is_idempotent_and_self_adjoint),
        BENCH_TEST(a_small_tangent_part_is_still_tangent),
        BENCH_TEST(log_undoes_exp_and_distance_is_length),
        BENCH_TEST(exp_undoes_log),
        BENCH_TEST(large_subspaces_meet),
        BENCH_TEST(angles_are_accurate_from_end_to_end),
        BENCH_TEST(transport_is_an_isometry_between_tangent_spaces),
        BENCH_TEST(velocity_is_parallel_and_there_and_back_is_nothing),
        BENCH_TEST(retraction_by_qr_agrees_with_exp),
        BENCH_TEST(retraction_by_polar_factor_agrees_with_exp),
        BENCH_TEST(the_polar_retraction_is_the_polar_factor),
        BENCH_TEST(the_basis_does_not_matter),
        BENCH_TEST(the_running_mean_meets_the_middle),
        BENCH_TEST(rounding_does_not_add_up),
        BENCH_TEST(curvature_lies_where_the_header_says),
    };
    return cmocka_run_group_tests(tests, NULL, NULL);
}
