/* SPDX-License-Identifier: MIT
 *
 * The manifold of matrices of rank r against the same things done with dense matrices, at every shape of the list:
 * square, wide, tall, full rank, and with 2 r above one or both sides.
 */
#include "support_geometry.h"

static const struct {
    size_t rows, columns, rank;
} shapes[] = {{1, 1, 1},  {1, 4, 1},   {5, 1, 1},   {6, 5, 2},   {5, 9, 3},    {9, 5, 3},
              {4, 4, 4},  {9, 4, 4},   {4, 9, 4},   {12, 12, 6}, {11, 13, 6},  {3, 40, 3},
              {40, 7, 6}, {30, 20, 5}, {20, 30, 5}, {60, 90, 4}, {130, 80, 10}};
enum { SHAPES = sizeof shapes / sizeof shapes[0] };

/* A random point with a random unit tangent at one shape, and the work. */
struct scene {
    struct ground *ground;
    struct fixed_rank_work work;
    struct low_rank point, to; /* views into the ground: nothing to free */
    struct fixed_rank_tangent tangent;
};

static struct low_rank point_blank(struct ground *ground, size_t rows, size_t columns, size_t rank)
{
    struct low_rank point = {.rows = rows, .columns = columns, .rank = rank};
    point.left = zeros(ground, rows, rank);
    point.right = zeros(ground, columns, rank);
    point.spectrum = zeros(ground, 1, rank).data;
    return point;
}

static struct fixed_rank_tangent tangent_blank(struct scene *scene)
{
    return fixed_rank_tangent_carve(&scene->ground->arena, scene->work.rows, scene->work.columns, scene->work.rank);
}

/* Products of a dense A with the frames, then the projection. */
static struct fixed_rank_tangent projected(struct scene *scene, const struct low_rank *point, struct matrix a)
{
    struct fixed_rank_tangent z = tangent_blank(scene);
    matrix_multiply(1, a, false, point->right, false, 0, z.left);
    matrix_multiply(1, a, true, point->left, false, 0, z.right);
    double square = fixed_rank_project(&scene->work, point, &z);
    assert_close(square, matrix_dot(z.left, z.left) + matrix_dot(z.right, z.right), rounding(a) * square);
    return z;
}

static struct fixed_rank_tangent random_tangent(struct scene *scene)
{
    struct matrix a = normals(scene->ground, scene->work.rows, scene->work.columns);
    struct fixed_rank_tangent z = projected(scene, &scene->point, a);
    double size = sqrt(fixed_rank_inner(&scene->work, &z, &z));
    struct fixed_rank_tangent unit = tangent_blank(scene);
    fixed_rank_add(&scene->work, 1 / size, &z, 0, &unit);
    return unit;
}

/* Spectrum 1, 1/2, 1/3, ... */
static struct scene scene_make(struct ground *ground, size_t rows, size_t columns, size_t rank)
{
    struct scene scene = {.ground = ground};
    ground_clear(ground);
    scene.work = fixed_rank_carve(ground->context, &ground->arena, rows, columns, rank);
    scene.to = point_blank(ground, rows, columns, rank);
    scene.point = point_blank(ground, rows, columns, rank);
    scene.point.left = frame(ground, rows, rank);
    scene.point.right = frame(ground, columns, rank);
    for (size_t k = 0; k < rank; k++)
        scene.point.spectrum[k] = 1 / (1 + (double)k);
    scene.tangent = random_tangent(&scene);
    return scene;
}

static void at_every_shape(void **state, void check(struct scene *))
{
    struct ground ground = ground_open(state);
    for (size_t k = 0; k < SHAPES; k++) {
        struct scene scene = scene_make(&ground, shapes[k].rows, shapes[k].columns, shapes[k].rank);
        check(&scene);
    }
    ground_close(&ground);
}

static struct matrix dense_point(struct ground *ground, const struct low_rank *point)
{
    struct matrix left = copy_of(ground, point->left);
    matrix_scale_columns(left, point->spectrum);
    return times(ground, left, false, point->right, true);
}

/* U M V' + Up V' + U Vp', term by term. */
static struct matrix dense_tangent(struct ground *ground, const struct low_rank *point,
                                   const struct fixed_rank_tangent *z)
{
    struct matrix inner = times(ground, point->left, false, z->middle, false);
    struct matrix sum = times(ground, inner, false, point->right, true);
    matrix_multiply(1, z->left, false, point->right, true, 1, sum);
    matrix_multiply(1, point->left, false, z->right, true, 1, sum);
    return sum;
}

/* X + t Z */
static struct matrix dense_sum(struct scene *scene, double t)
{
    struct matrix sum = dense_point(scene->ground, &scene->point);
    matrix_add(t, dense_tangent(scene->ground, &scene->point, &scene->tangent), sum);
    return sum;
}

static void check_form(const struct low_rank *point)
{
    assert_true(orthonormality(point->left) <= rounding(point->left));
    assert_true(orthonormality(point->right) <= rounding(point->right));
    for (size_t k = 0; k < point->rank; k++)
        assert_true(point->spectrum[k] >= 0 && (k == 0 || point->spectrum[k] <= point->spectrum[k - 1]));
}

static void check_projection(struct scene *scene)
{
    struct ground *ground = scene->ground;
    struct matrix a = normals(ground, scene->work.rows, scene->work.columns);
    struct matrix b = normals(ground, scene->work.rows, scene->work.columns);
    struct fixed_rank_tangent pa = projected(scene, &scene->point, a), pb = projected(scene, &scene->point, b);
    struct matrix dense_pa = dense_tangent(ground, &scene->point, &pa);
    struct matrix dense_pb = dense_tangent(ground, &scene->point, &pb);
    double bound = 4 * rounding(a) * matrix_norm(a);
    assert_true(overlap(scene->point.left, pa.left) <= bound && overlap(scene->point.right, pa.right) <= bound);
    assert_close(matrix_dot(dense_pa, b), matrix_dot(a, dense_pb), bound * matrix_norm(b)); /* self-adjoint */
    assert_close(fixed_rank_inner(&scene->work, &pa, &pb), matrix_dot(dense_pa, dense_pb), bound * matrix_norm(b));
    struct fixed_rank_tangent again = projected(scene, &scene->point, dense_pa);
    assert_true(gap(dense_tangent(ground, &scene->point, &again), dense_pa) <= bound);
    matrix_add(-1, dense_pa, a); /* what is left is normal to every tangent */
    assert_close(matrix_dot(a, dense_pb), 0, bound * matrix_norm(b));
}
static void projection_is_idempotent_and_self_adjoint(void **state)
{
    at_every_shape(state, check_projection);
}

/* The projection is (A V) V' + U (U'A) - U U'A V V', computed densely. */
static void check_projection_formula(struct scene *scene)
{
    struct ground *ground = scene->ground;
    const struct low_rank *point = &scene->point;
    struct matrix a = normals(ground, scene->work.rows, scene->work.columns);
    struct fixed_rank_tangent z = projected(scene, point, a);
    struct matrix av = times(ground, a, false, point->right, false), ua = times(ground, point->left, true, a, false);
    struct matrix sum = times(ground, av, false, point->right, true);
    matrix_multiply(1, point->left, false, ua, false, 1, sum);
    struct matrix inner = times(ground, point->left, false, times(ground, point->left, true, av, false), false);
    matrix_multiply(-1, inner, false, point->right, true, 1, sum);
    assert_true(gap(dense_tangent(ground, point, &z), sum) <= 4 * rounding(a) * matrix_norm(a));
}
static void projection_follows_its_formula(void **state)
{
    at_every_shape(state, check_projection_formula);
}

/* Normal parts 1e9 times smaller than the middle stay orthogonal to the frames relative to their own size. */
static void check_small_normal(struct scene *scene)
{
    struct ground *ground = scene->ground;
    struct matrix sum = dense_tangent(ground, &scene->point, &scene->tangent);
    matrix_add(1e9, dense_point(ground, &scene->point), sum);
    struct fixed_rank_tangent z = projected(scene, &scene->point, sum);
    assert_true(overlap(scene->point.left, z.left) <= 10 * rounding(sum) * (matrix_norm(z.left) + 1e-15));
    assert_true(overlap(scene->point.right, z.right) <= 10 * rounding(sum) * (matrix_norm(z.right) + 1e-15));
    assert_true(gap(z.left, scene->tangent.left) <= 1e9 * rounding(sum));
}
static void a_small_normal_part_is_still_normal(void **state)
{
    at_every_shape(state, check_small_normal);
}

static void check_arithmetic(struct scene *scene)
{
    struct ground *ground = scene->ground;
    struct fixed_rank_tangent x = random_tangent(scene), y = random_tangent(scene), sum = tangent_blank(scene);
    struct matrix wanted = dense_tangent(ground, &scene->point, &y);
    struct matrix factor = zeros(ground, scene->work.rows, scene->work.rank);
    matrix_scale(3, wanted);
    matrix_add(-2, dense_tangent(ground, &scene->point, &x), wanted);
    fixed_rank_add(&scene->work, 1, &y, 0, &sum);
    fixed_rank_add(&scene->work, -2, &x, 3, &sum);
    assert_true(gap(dense_tangent(ground, &scene->point, &sum), wanted) <= 10 * rounding(wanted));
    assert_close(fixed_rank_inner(&scene->work, &sum, &sum), pow(matrix_norm(wanted), 2), 50 * rounding(wanted));
    fixed_rank_pairs(&scene->work, &scene->point, &sum, factor);
    struct matrix pairs = times(ground, factor, false, scene->point.right, true);
    matrix_multiply(1, scene->point.left, false, sum.right, true, 1, pairs);
    assert_true(gap(pairs, wanted) <= 10 * rounding(wanted));
}
static void tangents_add_up(void **state)
{
    at_every_shape(state, check_arithmetic);
}

/* The truncated SVD of a dense matrix, by LAPACK on the whole of it. */
static struct matrix truncated(struct ground *ground, struct matrix a, size_t rank, double *spectrum)
{
    bool flip = a.rows < a.columns;
    size_t lines = flip ? a.columns : a.rows, width = flip ? a.rows : a.columns;
    struct matrix u = zeros(ground, lines, width), v = zeros(ground, width, width);
    double *s = zeros(ground, 1, width).data;
    double *work = arena_carve(&ground->arena, dense_work_size(lines, width), sizeof *work);
    for (size_t i = 0; i < lines; i++)
        for (size_t j = 0; j < width; j++)
            MATRIX_AT(u, i, j) = flip ? MATRIX_AT(a, j, i) : MATRIX_AT(a, i, j);
    assert_status(ground->context, dense_svd(ground->context, u, s, v, work), FESCUE_OK);
    for (size_t k = 0; k < rank; k++)
        spectrum[k] = s[k];
    matrix_scale_columns(u, s);
    u = matrix_left(u, rank);
    v = matrix_left(v, rank);
    return flip ? times(ground, v, false, u, true) : times(ground, u, false, v, true);
}

/* Against the dense truncation at short and long steps. */
static void check_metric(struct scene *scene)
{
    static const double steps[] = {0, 1e-12, 1e-6, 0.05, 0.4, 30};
    struct ground *ground = scene->ground;
    size_t rank = scene->work.rank;
    double *spectrum = zeros(ground, 1, rank).data;
    for (size_t k = 0; k < sizeof steps / sizeof steps[0]; k++) {
        struct matrix sum = dense_sum(scene, steps[k]), wanted = truncated(ground, sum, rank, spectrum);
        assert_status(ground->context,
                      fixed_rank_retract_metric(&scene->work, &scene->point, &scene->tangent, steps[k], &scene->to),
                      FESCUE_OK);
        check_form(&scene->to);
        for (size_t i = 0; i < rank; i++)
            assert_close(scene->to.spectrum[i], spectrum[i], rounding(sum) * spectrum[0]);
        /* The truncation itself is as well conditioned as its gap, hence the factor. */
        assert_true(gap(dense_point(ground, &scene->to), wanted) <= 200 * rounding(sum) * spectrum[0]);
    }
}
static void the_metric_retraction_is_the_truncated_svd(void **state)
{
    at_every_shape(state, check_metric);
}

/* Tangents whose normal parts lose rank, nearly or wholly, vanish, or undo the point: the frames stay orthonormal, the
   nearest matrix is met. */
static void check_degenerate(struct scene *scene)
{
    struct ground *ground = scene->ground;
    size_t rank = scene->work.rank;
    double *spectrum = zeros(ground, 1, rank).data;
    for (int kind = 0; kind < 8; kind++) {
        double nearly = kind < 4 ? 1e-14 : pow(10, 1 - kind);
        scene->tangent = random_tangent(scene);
        for (size_t i = 0; i < scene->work.rows && kind >= 4; i++) /* all columns of Up nearly the same */
            for (size_t k = 1; k < rank; k++)
                MATRIX_AT(scene->tangent.left, i, k) =
                    MATRIX_AT(scene->tangent.left, i, 0) + nearly * MATRIX_AT(scene->tangent.left, i, k);
        for (size_t i = 0; i < scene->work.rows && kind == 0; i++) /* one column of Up repeats, one is tiny */
            for (size_t k = 1; k < rank; k++)
                MATRIX_AT(scene->tangent.left, i, k) = MATRIX_AT(scene->tangent.left, i, 0) * (k == 1 ? 1 : nearly);
        if (kind >= 1 && kind < 4)
            matrix_zero(scene->tangent.right);
        if (kind == 2 || kind == 3)
            matrix_zero(scene->tangent.left);
        if (kind == 3) { /* X + Z = 0 */
            matrix_zero(scene->tangent.middle);
            for (size_t k = 0; k < rank; k++)
                MATRIX_AT(scene->tangent.middle, k, k) = -scene->point.spectrum[k];
        }
        struct matrix sum = dense_sum(scene, 1), wanted = truncated(ground, sum, rank, spectrum);
        assert_status(ground->context,
                      fixed_rank_retract_metric(&scene->work, &scene->point, &scene->tangent, 1, &scene->to),
                      FESCUE_OK);
        check_form(&scene->to);
        assert_true(gap(dense_point(ground, &scene->to), wanted) <= 200 * rounding(sum));
        assert_status(ground->context, fixed_rank_retract(&scene->work, &scene->point, &scene->tangent, 1, &scene->to),
                      FESCUE_OK);
        check_form(&scene->to);
    }
}
static void degenerate_tangents_are_survived(void **state)
{
    at_every_shape(state, check_degenerate);
}

/* The steepest column of the graph that the orthographic retraction at t is, over both frames' complements. */
static double slope_at(struct scene *scene, double t)
{
    struct ground *ground = scene->ground;
    size_t rank = scene->work.rank;
    struct matrix core = zeros(ground, rank, rank), other = zeros(ground, rank, rank);
    double *s = zeros(ground, 1, rank).data, most = 0;
    double *work = arena_carve(&ground->arena, dense_work_size(rank, rank), sizeof *work);
    matrix_add(t, scene->tangent.middle, core);
    for (size_t k = 0; k < rank; k++)
        MATRIX_AT(core, k, k) += scene->point.spectrum[k];
    assert_status(ground->context, dense_svd(ground->context, core, s, other, work), FESCUE_OK);
    const struct matrix rise[2] = {times(ground, scene->tangent.left, false, other, false),
                                   times(ground, scene->tangent.right, false, core, false)};
    for (int side = 0; side < 2; side++)
        for (size_t k = 0; k < rank; k++) {
            double square = 0;
            for (size_t i = 0; i < rise[side].rows; i++)
                square += pow(t * MATRIX_AT(rise[side], i, k) / s[k], 2);
            most = fmax(most, sqrt(square));
        }
    return most;
}

/* Y - X - tZ is normal at X, Y has the form of a point, and the retraction of either kind is this one; where the slope
   is above 1/2 there is none, and it is the metric one. */
static void check_orthographic(struct scene *scene)
{
    struct ground *ground = scene->ground;
    struct low_rank either = point_blank(ground, scene->work.rows, scene->work.columns, scene->work.rank);
    for (double t = 0; t < 2; t = 1.9 * t + 1e-3) {
        bool is_near, is_wanted = slope_at(scene, t) <= 0.5;
        assert_status(
            ground->context,
            fixed_rank_retract_orthographic(&scene->work, &scene->point, &scene->tangent, t, &scene->to, &is_near),
            FESCUE_OK);
        assert_true(is_near == is_wanted);
        if (!is_near)
            assert_status(ground->context,
                          fixed_rank_retract_metric(&scene->work, &scene->point, &scene->tangent, t, &scene->to),
                          FESCUE_OK);
        check_form(&scene->to);
        struct matrix difference = dense_point(ground, &scene->to);
        assert_status(ground->context, fixed_rank_retract(&scene->work, &scene->point, &scene->tangent, t, &either),
                      FESCUE_OK);
        assert_true(gap(dense_point(ground, &either), difference) == 0);
        double size = matrix_norm(difference);
        matrix_add(-1, dense_sum(scene, t), difference);
        struct fixed_rank_tangent inside = projected(scene, &scene->point, difference);
        if (is_near)
            assert_close(sqrt(fixed_rank_inner(&scene->work, &inside, &inside)), 0,
                         20 * rounding(difference) * fmax(1, size));
    }
}
static void the_orthographic_retraction_leaves_a_normal_difference(void **state)
{
    at_every_shape(state, check_orthographic);
}

/* With M = -diag(s) there is no such point, and the output is not touched; the retraction of either kind is the metric
   one. */
static void check_undefined(struct scene *scene)
{
    bool is_near = true;
    matrix_zero(scene->tangent.middle);
    for (size_t k = 0; k < scene->work.rank; k++)
        MATRIX_AT(scene->tangent.middle, k, k) = -scene->point.spectrum[k];
    scene->to.spectrum[0] = 17;
    assert_status(
        scene->ground->context,
        fixed_rank_retract_orthographic(&scene->work, &scene->point, &scene->tangent, 1, &scene->to, &is_near),
        FESCUE_OK);
    assert_false(is_near);
    assert_close(scene->to.spectrum[0], 17, 0);
    assert_status(scene->ground->context,
                  fixed_rank_retract(&scene->work, &scene->point, &scene->tangent, 1, &scene->to), FESCUE_OK);
    check_form(&scene->to);
}
static void the_orthographic_retraction_says_where_it_fails(void **state)
{
    at_every_shape(state, check_undefined);
}

/* Transport by projection, against the dense tangent projected at the new point. */
static void check_transport(struct scene *scene)
{
    struct ground *ground = scene->ground;
    struct fixed_rank_tangent k = random_tangent(scene), moved = tangent_blank(scene);
    assert_status(ground->context, fixed_rank_retract(&scene->work, &scene->point, &scene->tangent, 0.3, &scene->to),
                  FESCUE_OK);
    struct matrix dense = dense_tangent(ground, &scene->point, &k);
    struct fixed_rank_tangent wanted = projected(scene, &scene->to, dense);
    fixed_rank_transport(&scene->work, &scene->point, &k, &scene->to, NULL, &moved);
    assert_true(overlap(scene->to.left, moved.left) <= rounding(dense));
    assert_true(overlap(scene->to.right, moved.right) <= rounding(dense));
    fixed_rank_add(&scene->work, -1, &moved, 1, &wanted);
    assert_close(sqrt(fixed_rank_inner(&scene->work, &wanted, &wanted)), 0, 10 * rounding(dense));
    struct fixed_rank_tangent there =
        projected(scene, &scene->to, normals(ground, scene->work.rows, scene->work.columns));
    assert_close(fixed_rank_inner_apart(&scene->work, &scene->point, &k, &scene->to, &there),
                 fixed_rank_inner(&scene->work, &moved, &there),
                 10 * rounding(dense) * sqrt(fixed_rank_inner(&scene->work, &there, &there)));
    struct fixed_rank_tangent sum = tangent_blank(scene);
    struct fixed_rank_blend blend = {.beta = 0.7, .alpha = -2, .y = &there};
    fixed_rank_transport(&scene->work, &scene->point, &k, &scene->to, &blend, &sum);
    assert_true(blend.size == fixed_rank_inner(&scene->work, &sum, &sum));
    assert_true(blend.along == fixed_rank_inner(&scene->work, &there, &sum));
    fixed_rank_add(&scene->work, -2, &there, 0.7, &moved);
    fixed_rank_add(&scene->work, -1, &moved, 1, &sum);
    assert_close(sqrt(fixed_rank_inner(&scene->work, &sum, &sum)), 0,
                 rounding(dense) * sqrt(fixed_rank_inner(&scene->work, &moved, &moved)));
    fixed_rank_transport(&scene->work, &scene->point, &k, &scene->point, NULL, &moved);
    fixed_rank_add(&scene->work, -1, &k, 1, &moved);
    assert_close(sqrt(fixed_rank_inner(&scene->work, &moved, &moved)), 0, 4 * rounding(dense));
}
static void transport_is_the_projection_at_the_new_point(void **state)
{
    at_every_shape(state, check_transport);
}

/* A gradient is what the slope says: f(X) = |X - A|^2 / 2 has the gradient P_X(X - A), so that f along a retraction
   leaves its linear model by at most t^2 (1/2 + |X - A| / s_r) to leading order: a unit tangent bends the manifold by
   no more than 2 |Up| |Vp| / s_r <= 1 / s_r. */
static void check_gradient(struct scene *scene)
{
    struct ground *ground = scene->ground;
    struct matrix a = normals(ground, scene->work.rows, scene->work.columns);
    struct matrix residual = dense_point(ground, &scene->point);
    matrix_add(-1, a, residual);
    struct fixed_rank_tangent gradient = projected(scene, &scene->point, residual);
    double start = 0.5 * matrix_dot(residual, residual),
           slope = fixed_rank_inner(&scene->work, &gradient, &scene->tangent);
    double bend = 0.5 + matrix_norm(residual) / scene->point.spectrum[scene->work.rank - 1];
    for (double t = 0.01; t > 1e-6; t /= 4) {
        assert_status(ground->context, fixed_rank_retract(&scene->work, &scene->point, &scene->tangent, t, &scene->to),
                      FESCUE_OK);
        residual = dense_point(ground, &scene->to);
        matrix_add(-1, a, residual);
        double error = 0.5 * matrix_dot(residual, residual) - start - t * slope;
        assert_close(error, 0, 1.5 * t * t * bend + 1e-12 * start);
    }
}
static void the_projected_gradient_is_the_gradient(void **state)
{
    at_every_shape(state, check_gradient);
}

/* Many steps later the frames are as orthonormal as at first. */
static void rounding_does_not_add_up(void **state)
{
    struct ground ground = ground_open(state);
    struct scene scene = scene_make(&ground, 30, 20, 4);
    size_t carved = ground.arena.carved;
    for (int step = 0; step < 500; step++, ground.arena.carved = carved) {
        struct fixed_rank_tangent z = random_tangent(&scene);
        struct low_rank before = scene.point;
        assert_status(ground.context, fixed_rank_retract(&scene.work, &scene.point, &z, 0.1, &scene.to), FESCUE_OK);
        scene.point = scene.to;
        scene.to = before;
    }
    check_form(&scene.point);
    ground_close(&ground);
}

int main(void)
{
    const struct CMUnitTest tests[] = {
        BENCH_TEST(projection_is_idempotent_and_self_adjoint),
        BENCH_TEST(projection_follows_its_formula),
        BENCH_TEST(a_small_normal_part_is_still_normal),
        BENCH_TEST(tangents_add_up),
        BENCH_TEST(the_metric_retraction_is_the_truncated_svd),
        BENCH_TEST(degenerate_tangents_are_survived),
        BENCH_TEST(the_orthographic_retraction_leaves_a_normal_difference),
        BENCH_TEST(the_orthographic_retraction_says_where_it_fails),
        BENCH_TEST(transport_is_the_projection_at_the_new_point),
        BENCH_TEST(the_projected_gradient_is_the_gradient),
        BENCH_TEST(rounding_does_not_add_up),
    };
    return cmocka_run_group_tests(tests, NULL, NULL);
}
