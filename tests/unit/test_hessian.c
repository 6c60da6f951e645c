/* SPDX-License-Identifier: MIT
 *
 * The projected objective and its derivatives: gradient and Hessian by slopes of order two and three along retracted
 * tangents, symmetry, the Gauss-Newton part, and one step of the trust region.
 */
#include "support_solve.h"

struct bed {
    struct plot plot;
    struct field field;
    struct arena arena;
    struct projection projection;
    struct trust trust;
    struct grassmann_work work;
    struct matrix start, a, b, image;
};

/* A projection at a random point, evaluated, with ridges that differ between components when asked. */
static void bed_make(fescue_context *context, const struct sowing *sowing, double ridge, struct bed *bed)
{
    *bed = (struct bed){.plot = plot_sow(context, sowing, ridge)};
    struct low_rank point = random_point(context, sowing->rows, sowing->columns, 3, 10);
    size_t shorter = sowing->rows < sowing->columns ? sowing->rows : sowing->columns;
    struct random_stream stream = random_open(11, RANDOM_TEST, 4);
    bed->field.problem = &bed->plot.problem;
    assert_status(context, sweep_create(context, &bed->plot.problem.target, 3, &bed->field.sweep), FESCUE_OK);
    projection_reserve(&bed->arena, &bed->field, 3);
    trust_reserve(&bed->arena, &bed->field, 3);
    grassmann_reserve(&bed->arena, shorter, 3);
    for (int k = 0; k < 4; k++)
        matrix_reserve(&bed->arena, shorter, 3);
    assert_status(context, arena_open(context, &bed->arena), FESCUE_OK);
    projection_carve(&bed->arena, &bed->field, &point, &bed->projection);
    trust_carve(&bed->arena, &bed->projection, &bed->trust);
    bed->work = grassmann_carve(context, &bed->arena, shorter, 3);
    struct matrix *const parts[] = {&bed->start, &bed->a, &bed->b, &bed->image};
    for (int k = 0; k < 4; k++)
        *parts[k] = matrix_carve(&bed->arena, shorter, 3);
    grassmann_random_tangent(&bed->work, &stream, bed->projection.basis, bed->a);
    grassmann_random_tangent(&bed->work, &stream, bed->projection.basis, bed->b);
    matrix_copy(bed->projection.basis, bed->start);
    low_rank_free(context, &point);
    trust_start(&bed->trust);
}

static void bed_free(struct bed *bed)
{
    arena_close(bed->plot.context, &bed->arena);
    sweep_destroy(&bed->field.sweep);
    plot_free(&bed->plot);
}

static const struct sowing wide = {.rows = 30, .columns = 45, .rank = 4, .share = 0.5, .noise = 0.3, .seed = 3};
static const struct sowing tall = {.rows = 45, .columns = 30, .rank = 4, .share = 0.5, .noise = 0.3, .seed = 3};

/* f at the retraction of t a. */
static double objective_along(struct bed *bed, double t)
{
    assert_status(bed->plot.context, grassmann_retract_qr(&bed->work, bed->start, bed->a, t, bed->projection.basis),
                  FESCUE_OK);
    projection_evaluate(&bed->projection);
    return bed->projection.objective;
}

/* The remainders of the Taylor polynomials fall with t^2 and t^3. The retraction agrees with geodesics to that order.
 */
static void derivatives_are_slopes(void **state)
{
    fescue_context *context = bench_of(state)->context;
    for (int variant = 0; variant < 4; variant++) {
        struct bed bed;
        double first[7], second[7], t = 0.02;
        bed_make(context, variant % 2 == 0 ? &wide : &tall, variant < 2 ? 0 : 0.3, &bed);
        double f = bed.projection.objective, slope = matrix_dot(bed.projection.gradient, bed.a);
        hessian_start(&bed.trust.hessian, true);
        hessian_apply(&bed.trust.hessian, bed.a, bed.image);
        double bend = matrix_dot(bed.a, bed.image);
        for (int k = 0; k < 7; k++, t /= 2) {
            double change = objective_along(&bed, t) - f;
            first[k] = fabs(change - t * slope);
            second[k] = fabs(change - t * slope - 0.5 * t * t * bend);
            if (k > 0) {
                assert_true(log2(first[k - 1] / first[k]) > 1.9);
                assert_true(log2(second[k - 1] / second[k]) > 2.7);
            }
        }
        bed_free(&bed);
    }
}

static void the_hessian_is_symmetric_and_tangent(void **state)
{
    fescue_context *context = bench_of(state)->context;
    for (int variant = 0; variant < 4; variant++) {
        struct bed bed;
        bed_make(context, variant % 2 == 0 ? &wide : &tall, 0.3, &bed);
        bed.projection.ridge[1] *= 3; /* ridges of their own: symmetric all the same */
        projection_evaluate(&bed.projection);
        hessian_start(&bed.trust.hessian, variant < 2);
        hessian_apply(&bed.trust.hessian, bed.a, bed.image);
        double ba = matrix_dot(bed.b, bed.image), aa = matrix_dot(bed.a, bed.image), size = matrix_norm(bed.image);
        hessian_apply(&bed.trust.hessian, bed.b, bed.image);
        double bb = matrix_dot(bed.b, bed.image);
        /* With ridges that differ the frame counts, and only Gauss and Newton's part is symmetric by construction. */
        if (variant >= 2) {
            assert_close(matrix_dot(bed.a, bed.image), ba, 1e-12 * size);
            assert_true(aa > 0 && bb > 0);
        }
        matrix_multiply(1, bed.start, true, bed.image, false, 0, bed.projection.core);
        assert_close(matrix_norm(bed.projection.core), 0, 1e-12 * size);
        bed_free(&bed);
    }
}

static void the_exact_hessian_is_symmetric(void **state)
{
    fescue_context *context = bench_of(state)->context;
    for (int variant = 0; variant < 4; variant++) {
        struct bed bed;
        bed_make(context, variant % 2 == 0 ? &wide : &tall, variant < 2 ? 0 : 0.3, &bed);
        hessian_start(&bed.trust.hessian, true);
        hessian_apply(&bed.trust.hessian, bed.a, bed.image);
        double ba = matrix_dot(bed.b, bed.image), size = matrix_norm(bed.image);
        hessian_apply(&bed.trust.hessian, bed.b, bed.image);
        assert_close(matrix_dot(bed.a, bed.image), ba, 1e-12 * size);
        bed_free(&bed);
    }
}

/* Symmetric, positive, and on tangents. */
static void the_blocks_precondition(void **state)
{
    fescue_context *context = bench_of(state)->context;
    for (int variant = 0; variant < 4; variant++) {
        struct bed bed;
        bed_make(context, variant % 2 == 0 ? &wide : &tall, variant < 2 ? 0 : 0.3, &bed);
        hessian_start(&bed.trust.hessian, false);
        hessian_blocks_start(&bed.trust.blocks, bed.trust.hessian.damping);
        hessian_blocks_precondition(&bed.trust.blocks, bed.a, bed.image);
        double ba = matrix_dot(bed.b, bed.image), size = matrix_norm(bed.image);
        assert_true(matrix_dot(bed.a, bed.image) > 0);
        matrix_multiply(1, bed.start, true, bed.image, false, 0, bed.projection.core);
        assert_close(matrix_norm(bed.projection.core), 0, 1e-12 * size);
        hessian_blocks_precondition(&bed.trust.blocks, bed.b, bed.image);
        assert_close(matrix_dot(bed.a, bed.image), ba, 1e-12 * size);
        bed_free(&bed);
    }
}

/* Where all cells are seen the leverage of each is |u_i|^2, and the block of line i (1 - |u_i|^2) W'W, lifted by a
   hundredth of W'W. */
static void the_blocks_of_a_full_table(void **state)
{
    fescue_context *context = bench_of(state)->context;
    struct sowing sowing = wide;
    struct bed bed;
    sowing.share = 1;
    bed_make(context, &sowing, 0, &bed);
    hessian_start(&bed.trust.hessian, false);
    hessian_blocks_start(&bed.trust.blocks, bed.trust.hessian.damping);
    hessian_blocks_precondition(&bed.trust.blocks, bed.a, bed.image);
    assert_true(projection_metric(&bed.projection, bed.trust.metric));
    tall_solve(bed.field.problem->context, bed.trust.metric, bed.a, bed.b);
    for (size_t i = 0; i < bed.b.rows; i++) {
        double leverage = 0;
        for (size_t k = 0; k < 3; k++)
            leverage += MATRIX_AT(bed.start, i, k) * MATRIX_AT(bed.start, i, k);
        for (size_t k = 0; k < 3; k++)
            MATRIX_AT(bed.b, i, k) /= 1.01 - leverage;
    }
    grassmann_project(&bed.work, bed.start, bed.b);
    matrix_add(-1, bed.image, bed.b);
    assert_close(matrix_norm(bed.b), 0, 1e-12 * matrix_norm(bed.image));
    bed_free(&bed);
}

/* Where the residual is zero, both are the same: a table of rank 3 without noise, at its own column space. */
static void without_residual_gauss_newton_is_exact(void **state)
{
    fescue_context *context = bench_of(state)->context;
    struct sowing sowing = wide;
    struct bed bed;
    sowing.rank = 3;
    sowing.noise = 0;
    bed_make(context, &sowing, 0, &bed);
    struct solve_result result = {0};
    struct low_rank point;
    assert_status(context, start_spectral(&bed.plot.problem, 3, 1, &point), FESCUE_OK);
    assert_status(context,
                  solve_run(&bed.plot.problem, solver_find("grassmann-trust-region"), &usual_limits, &point, &result),
                  FESCUE_OK);
    assert_int_equal(result.stop, STOP_EXACT);
    matrix_copy(point.left, bed.projection.basis);
    grassmann_project(&bed.work, point.left, bed.a);
    projection_evaluate(&bed.projection);
    hessian_start(&bed.trust.hessian, true);
    hessian_apply(&bed.trust.hessian, bed.a, bed.image);
    hessian_start(&bed.trust.hessian, false);
    hessian_apply(&bed.trust.hessian, bed.a, bed.b);
    double size = matrix_norm(bed.b);
    matrix_add(-1, bed.image, bed.b);
    assert_close(matrix_norm(bed.b), 0, 1e-12 * size);
    solve_result_free(context, &result);
    low_rank_free(context, &point);
    bed_free(&bed);
}

/* Steps stay within the radius, in the metric |D W'|, and the radius follows what was seen. */
static void a_step_keeps_to_its_region(void **state)
{
    fescue_context *context = bench_of(state)->context;
    const struct trust_rules rules = {.accuracy = 0.1, .inner_most = 200, .exact = true};
    struct bed bed;
    bed_make(context, &wide, 0, &bed);
    struct projection *p = &bed.projection;
    assert_close(bed.trust.radius, 0.1 * matrix_norm(p->weights), 1e-12);
    bool moved = true;
    for (int k = 0; k < 30 && moved; k++) {
        double radius = bed.trust.radius, before = p->objective, gram[9];
        struct matrix metric = {.data = gram, .rows = 3, .columns = 3, .stride = 3};
        matrix_multiply(1, p->weights, true, p->weights, false, 0, metric);
        assert_status(context, trust_step(&bed.trust, &rules, &moved), FESCUE_OK);
        matrix_multiply(1, bed.trust.step, false, metric, false, 0, bed.image);
        double length = sqrt(matrix_dot(bed.trust.step, bed.image));
        assert_true(length <= radius * (1 + 1e-9));
        assert_true(!moved || p->objective <= before * (1 + 1e-12));
    }
    assert_true(bed.trust.measure.gradient < 1e-9 * bed.plot.problem.norm);
    bed_free(&bed);
}

int main(void)
{
    const struct CMUnitTest tests[] = {
        BENCH_TEST(derivatives_are_slopes),         BENCH_TEST(the_hessian_is_symmetric_and_tangent),
        BENCH_TEST(the_exact_hessian_is_symmetric), BENCH_TEST(the_blocks_precondition),
        BENCH_TEST(the_blocks_of_a_full_table),     BENCH_TEST(without_residual_gauss_newton_is_exact),
        BENCH_TEST(a_step_keeps_to_its_region),
    };
    return cmocka_run_group_tests(tests, NULL, NULL);
}
