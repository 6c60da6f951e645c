/* SPDX-License-Identifier: MIT
 *
 * The conformance suite: what every solver of the list must do. Each test goes through the whole list; what holds for
 * the square loss alone, such as where its minimum is, is asked of the solvers that have it.
 */
#include "support_solve.h"

#include <float.h>

/* 60 x 40, rank 3, half of the cells. */
static const struct sowing plain = {.rows = 60, .columns = 40, .rank = 3, .share = 0.5, .seed = 21};
static const struct sowing noisy = {.rows = 60, .columns = 40, .rank = 3, .share = 0.5, .noise = 0.3, .seed = 21};

static struct sowing turned(struct sowing sowing)
{
    uint32_t rows = sowing.rows;
    sowing.rows = sowing.columns;
    sowing.columns = rows;
    return sowing;
}

static bool is_square(size_t k)
{
    return solver_at(k)->loss == LOSS_SQUARE;
}

/* The objective of the k-th solver, by its definition. */
static double objective_of(size_t k, const struct problem *problem, const struct low_rank *point)
{
    const struct half *half = &problem->target.by_row;
    double sum = 0;
    if (is_square(k))
        return objective_plain(problem, point);
    for (uint32_t i = 0; i < half->lines; i++)
        for (uint64_t c = half->start[i]; c < half->start[i + 1]; c++)
            sum += fabs(low_rank_entry(point, i, half->across[c]) - cells_value(&problem->target, half, c));
    for (size_t l = 0; l < point->rank; l++)
        sum += 0.5 * problem->lambda * point->spectrum[l] * point->spectrum[l];
    return sum;
}

/* The spectral start, solved. */
static struct low_rank solved(struct plot *plot, const struct solver *solver, size_t rank, struct solve_result *result)
{
    struct low_rank point;
    assert_status(plot->context, start_spectral(&plot->problem, rank, 1, &point), FESCUE_OK);
    assert_status(plot->context, solve_run(&plot->problem, solver, &usual_limits, &point, result), FESCUE_OK);
    return point;
}

static void a_table_without_noise_is_recovered(void **state)
{
    fescue_context *context = bench_of(state)->context;
    for (size_t s = 0; solver_at(s) != NULL; s++)
        for (int turn = 0; turn < 2; turn++) {
            struct sowing sowing = turn == 0 ? plain : turned(plain);
            struct plot plot = plot_sow(context, &sowing, 0);
            struct solve_result result = {0};
            struct low_rank point = solved(&plot, solver_at(s), 3, &result);
            print_message("# %s: %d iterations, %s\n", result.solver, (int)result.iterations,
                          solve_stop_word(result.stop));
            assert_close(truth_distance(&plot, &point), 0, 1e-9);
            assert_close(form_error(&point), 0, 1e-13);
            assert_int_equal(result.stop, STOP_EXACT);
            assert_string_equal(result.solver, solver_name(solver_at(s)));
            low_rank_free(context, &point);
            solve_result_free(context, &result);
            plot_free(&plot);
        }
}

/* What the result says about the point it gives back, against the definition. */
static void the_result_describes_the_point(void **state)
{
    fescue_context *context = bench_of(state)->context;
    for (size_t s = 0; solver_at(s) != NULL; s++)
        for (int ridge = 0; ridge < 2; ridge++) {
            struct plot plot = plot_sow(context, &noisy, 0.2 * ridge);
            struct solve_result result = {0};
            struct low_rank point = solved(&plot, solver_at(s), 3, &result);
            double size = 0;
            assert_close(result.objective / objective_of(s, &plot.problem, &point), 1, 1e-12);
            for (size_t k = 0; k < 3; k++)
                size += point.spectrum[k] * point.spectrum[k];
            double square = 2 * objective_plain(&plot.problem, &point) - plot.problem.lambda * size;
            assert_close(result.rmse, sqrt(square / (double)plot.cells.count), 1e-12);
            assert_int_equal(result.stop, is_square(s) ? STOP_GRADIENT : STOP_CHANGE);
            assert_true(!is_square(s) || result.gradient <= 1e-9);
            const struct solve_step *last = &result.trace[result.trace_count - 1];
            assert_true(last->objective == result.objective && last->gradient == result.gradient);
            low_rank_free(context, &point);
            solve_result_free(context, &result);
            plot_free(&plot);
        }
}

static void the_objective_never_rises(void **state)
{
    fescue_context *context = bench_of(state)->context;
    const struct sowing *const tables[] = {&plain, &noisy};
    for (size_t s = 0; solver_at(s) != NULL; s++)
        for (int t = 0; t < 2; t++) {
            struct plot plot = plot_sow(context, tables[t], 0.01 * t);
            struct solve_result result = {0};
            struct low_rank point = random_point(context, 60, 40, 3, 10);
            assert_status(context, solve_run(&plot.problem, solver_at(s), &usual_limits, &point, &result), FESCUE_OK);
            assert_true(result.trace_count > 4);
            for (uint64_t k = 1; k < result.trace_count; k++) {
                double before = result.trace[k - 1].objective, rmse = result.trace[k - 1].rmse;
                /* rounding of the residual, as long as the residual: eps |R| |T|, |T|^2 = count */
                double slack = 2 * DBL_EPSILON * rmse * (1 + rmse) * (double)plot.cells.count;
                assert_true(result.trace[k].objective <= before + slack);
            }
            low_rank_free(context, &point);
            solve_result_free(context, &result);
            plot_free(&plot);
        }
}

/* ---- the gradient --------------------------------------------------------------------------------------------------
 */

/* The gradient on the manifold from the dense residual, and the objective's slope along `direction`. */
struct reference {
    struct arena arena;
    struct fixed_rank_work work;
    struct fixed_rank_tangent gradient, direction;
    struct low_rank moved;
};

static void reference_open(fescue_context *context, const struct low_rank *x, struct reference *reference)
{
    struct random_stream stream = random_open(3, RANDOM_TEST, 5);
    *reference = (struct reference){0};
    for (int k = 0; k < 2; k++)
        fixed_rank_tangent_reserve(&reference->arena, x->rows, x->columns, x->rank);
    fixed_rank_reserve(&reference->arena, x->rows, x->columns, x->rank);
    assert_status(context, arena_open(context, &reference->arena), FESCUE_OK);
    reference->gradient = fixed_rank_tangent_carve(&reference->arena, x->rows, x->columns, x->rank);
    reference->direction = fixed_rank_tangent_carve(&reference->arena, x->rows, x->columns, x->rank);
    reference->work = fixed_rank_carve(context, &reference->arena, x->rows, x->columns, x->rank);
    assert_status(context, low_rank_create(context, x->rows, x->columns, x->rank, &reference->moved), FESCUE_OK);
    struct matrix sides[] = {reference->direction.left, reference->direction.right};
    for (int s = 0; s < 2; s++)
        for (size_t i = 0; i < sides[s].rows; i++)
            for (size_t k = 0; k < x->rank; k++)
                MATRIX_AT(sides[s], i, k) = random_normal(&stream);
    fixed_rank_project(&reference->work, x, &reference->direction);
}

static void reference_close(fescue_context *context, struct reference *reference)
{
    low_rank_free(context, &reference->moved);
    arena_close(context, &reference->arena);
}

/* P(X - T) + lambda X, projected. */
static void gradient_plain(struct plot *plot, const struct low_rank *x, struct reference *reference)
{
    double *dense = dense_targets(plot, NAN);
    struct fixed_rank_tangent *g = &reference->gradient;
    matrix_zero(g->left);
    matrix_zero(g->right);
    for (size_t i = 0; i < x->rows; i++)
        for (size_t j = 0; j < x->columns; j++) {
            double entry = low_rank_entry(x, i, j), t = dense[i * x->columns + j];
            double a = (isnan(t) ? 0 : entry - t) + plot->problem.lambda * entry;
            for (size_t k = 0; k < x->rank; k++) {
                MATRIX_AT(g->left, i, k) += a * MATRIX_AT(x->right, j, k);
                MATRIX_AT(g->right, j, k) += a * MATRIX_AT(x->left, i, k);
            }
        }
    fixed_rank_project(&reference->work, x, g);
    free(dense);
}

/* f(X moved by t Z) - f(X) - t <g, Z> falls with t^2. */
static void slopes_check(struct plot *plot, const struct low_rank *x, struct reference *reference)
{
    double f = objective_plain(&plot->problem, x), error[8], t = 1e-2;
    double slope = fixed_rank_inner(&reference->work, &reference->gradient, &reference->direction);
    for (int k = 0; k < 8; k++, t /= 2) {
        assert_status(plot->context,
                      fixed_rank_retract(&reference->work, x, &reference->direction, t, &reference->moved), FESCUE_OK);
        error[k] = fabs(objective_plain(&plot->problem, &reference->moved) - f - t * slope);
        assert_true(k == 0 || log2(error[k - 1] / error[k]) > 1.8);
    }
}

static void the_gradient_is_the_slope(void **state)
{
    fescue_context *context = bench_of(state)->context;
    for (size_t s = 0; solver_at(s) != NULL; s++)
        for (int variant = 0; variant < 4 && is_square(s); variant++) {
            struct sowing sowing = variant % 2 == 0 ? noisy : turned(noisy);
            struct plot plot = plot_sow(context, &sowing, variant < 2 ? 0 : 0.3);
            struct low_rank point = random_point(context, sowing.rows, sowing.columns, 3, 10);
            struct solve_result result = {0};
            struct reference reference;
            struct solve_limits limits = usual_limits;
            for (limits.iterations = 0; limits.iterations <= 3; limits.iterations += 3) {
                assert_status(context, solve_run(&plot.problem, solver_at(s), &limits, &point, &result), FESCUE_OK);
                reference_open(context, &point, &reference);
                gradient_plain(&plot, &point, &reference);
                slopes_check(&plot, &point, &reference);
                double norm = sqrt(fixed_rank_inner(&reference.work, &reference.gradient, &reference.gradient));
                assert_close(result.gradient * plot.problem.norm / norm, 1, 1e-9);
                reference_close(context, &reference);
            }
            solve_result_free(context, &result);
            low_rank_free(context, &point);
            plot_free(&plot);
        }
}

/* ---- known minima --------------------------------------------------------------------------------------------------
 */

/* With every cell seen, 1/2 |X - T|^2 + lambda/2 |X|^2 = (1 + lambda)/2 |X - T/(1 + lambda)|^2 + a constant: the
   minimum is the truncated singular value decomposition of T, over 1 + lambda (Eckart, Young 1936). From a random
   point. */
static void a_full_table_gives_its_truncation(void **state)
{
    fescue_context *context = bench_of(state)->context;
    const double ridges[] = {0, 0.5};
    for (size_t s = 0; solver_at(s) != NULL; s++)
        for (int variant = 0; variant < 4 && is_square(s); variant++) {
            struct sowing sowing = variant % 2 == 0 ? noisy : turned(noisy);
            sowing.share = 1;
            double ridge = ridges[variant / 2], spectrum[60];
            struct plot plot = plot_sow(context, &sowing, ridge);
            struct low_rank reference, point = random_point(context, sowing.rows, sowing.columns, 3, 10);
            struct solve_result result = {0};
            double *dense = dense_targets(&plot, NAN);
            dense_truncate(context, dense, sowing.rows, sowing.columns, 3, &reference, spectrum);
            assert_status(context, solve_run(&plot.problem, solver_at(s), &usual_limits, &point, &result), FESCUE_OK);
            assert_true(solve_converged(result.stop));
            assert_close(point_distance(&point, 1 + ridge, &reference), 0, 1e-8);
            for (int k = 0; k < 3; k++)
                assert_close(point.spectrum[k] * (1 + ridge), spectrum[k], 1e-8 * spectrum[0]);
            free(dense);
            low_rank_free(context, &point);
            low_rank_free(context, &reference);
            solve_result_free(context, &result);
            plot_free(&plot);
        }
}

/* All solvers end in the same minimum. The first is one for the square loss. */
static void the_minimum_does_not_depend_on_the_solver(void **state)
{
    fescue_context *context = bench_of(state)->context;
    for (int ridge = 0; ridge < 2; ridge++) {
        struct plot plot = plot_sow(context, &noisy, 0.1 * ridge);
        struct solve_result result = {0};
        struct low_rank first = solved(&plot, solver_at(0), 3, &result);
        for (size_t s = 1; solver_at(s) != NULL; s++) {
            if (!is_square(s))
                continue;
            struct low_rank point = solved(&plot, solver_at(s), 3, &result);
            assert_close(point_distance(&point, 1, &first), 0, 1e-6);
            low_rank_free(context, &point);
        }
        low_rank_free(context, &first);
        solve_result_free(context, &result);
        plot_free(&plot);
    }
}

/* Rank min(m, n) is no restriction: with lambda and every cell seen, T / (1 + lambda). */
static void full_rank_is_no_restriction(void **state)
{
    fescue_context *context = bench_of(state)->context;
    const struct sowing sowing = {.rows = 7, .columns = 5, .rank = 5, .share = 1, .noise = 0.3, .seed = 2};
    for (size_t s = 0; solver_at(s) != NULL; s++) {
        if (!is_square(s))
            continue;
        struct plot plot = plot_sow(context, &sowing, 0.5);
        struct low_rank point = random_point(context, 7, 5, 5, 3);
        struct solve_result result = {0};
        assert_status(context, solve_run(&plot.problem, solver_at(s), &usual_limits, &point, &result), FESCUE_OK);
        for (uint32_t i = 0; i < 7; i++)
            for (uint32_t j = 0; j < 5; j++)
                assert_close(1.5 * low_rank_entry(&point, i, j),
                             cells_value(&plot.problem.target, &plot.problem.target.by_row, i * 5 + j), 1e-7);
        solve_result_free(context, &result);
        low_rank_free(context, &point);
        plot_free(&plot);
    }
}

/* ---- the same table told differently -------------------------------------------------------------------------------
 */

/* The table turned, from the turned start: the turned answer. */
static void turning_the_table_turns_the_answer(void **state)
{
    fescue_context *context = bench_of(state)->context;
    double *dense[2];
    struct plot plots[2];
    plots[0] = plot_sow(context, &noisy, 0.05);
    dense[0] = dense_targets(&plots[0], NAN);
    dense[1] = malloc(60 * 40 * sizeof(double));
    for (size_t k = 0; k < 60 * 40; k++)
        dense[1][k % 40 * 60 + k / 40] = dense[0][k];
    plots[1] = plot_dense(context, 40, 60, dense[1], 0.05);
    for (size_t s = 0; solver_at(s) != NULL; s++) {
        struct solve_result result = {0};
        struct low_rank first = solved(&plots[0], solver_at(s), 3, &result);
        struct low_rank second = solved(&plots[1], solver_at(s), 3, &result);
        double difference = 0;
        for (size_t i = 0; i < 60; i++)
            for (size_t j = 0; j < 40; j++)
                difference = fmax(difference, fabs(low_rank_entry(&first, i, j) - low_rank_entry(&second, j, i)));
        assert_close(difference, 0, 1e-6);
        low_rank_free(context, &first);
        low_rank_free(context, &second);
        solve_result_free(context, &result);
    }
    free(dense[0]);
    free(dense[1]);
    plot_free(&plots[0]);
    plot_free(&plots[1]);
}

/* Values a power of two apart are the same problem, bit by bit, down to where squares vanish and up to where they
   overflow. */
static void units_do_not_matter(void **state)
{
    fescue_context *context = bench_of(state)->context;
    const double units[] = {0x1p-500, 0x1p500};
    struct plot plot = plot_sow(context, &noisy, 0.05);
    double *dense = dense_targets(&plot, NAN), scaled[60 * 40];
    for (size_t s = 0; solver_at(s) != NULL; s++) {
        struct solve_result result = {0};
        struct low_rank first = solved(&plot, solver_at(s), 3, &result);
        for (int u = 0; u < 2; u++) {
            for (size_t k = 0; k < 60 * 40; k++)
                scaled[k] = dense[k] * plot.problem.scale * units[u];
            struct plot other = plot_dense(context, 60, 40, scaled, 0.05);
            struct low_rank second = solved(&other, solver_at(s), 3, &result);
            assert_close(other.problem.scale / units[u] / plot.problem.scale, 1, 1e-14);
            assert_close(point_distance(&second, 1, &first), 0, 1e-7);
            low_rank_free(context, &second);
            plot_free(&other);
        }
        low_rank_free(context, &first);
        solve_result_free(context, &result);
    }
    free(dense);
    plot_free(&plot);
}

static void the_bits_do_not_depend_on_the_workers(void **state)
{
    fescue_context *context = bench_of(state)->context;
    const struct sowing sowing = {.rows = 300, .columns = 200, .rank = 3, .share = 0.15, .noise = 0.3, .seed = 9};
    const size_t workers[] = {1, 2, 7};
    for (size_t s = 0; solver_at(s) != NULL; s++)
        for (int precision = 0; precision < 2; precision++) {
            struct low_rank points[3];
            struct solve_result results[3] = {{0}, {0}, {0}};
            for (int w = 0; w < 3; w++) {
                assert_status(context, team_resize(context, workers[w]), FESCUE_OK);
                struct sowing sown = sowing;
                sown.precision = precision == 0 ? FESCUE_DOUBLE : FESCUE_SINGLE;
                struct plot plot = plot_sow(context, &sown, 0.01);
                points[w] = solved(&plot, solver_at(s), 3, &results[w]);
                plot_free(&plot);
            }
            for (int w = 1; w < 3; w++) {
                assert_true(points_same(&points[0], &points[w]));
                assert_int_equal(results[0].trace_count, results[w].trace_count);
                for (uint64_t k = 0; k < results[0].trace_count; k++)
                    assert_true(results[0].trace[k].objective == results[w].trace[k].objective &&
                                results[0].trace[k].gradient == results[w].trace[k].gradient &&
                                results[0].trace[k].step == results[w].trace[k].step);
            }
            for (int w = 0; w < 3; w++) {
                low_rank_free(context, &points[w]);
                solve_result_free(context, &results[w]);
            }
        }
}

/* ---- limits --------------------------------------------------------------------------------------------------------
 */

static void iterations_take_no_memory(void **state)
{
    fescue_context *context = bench_of(state)->context;
    const uint64_t counts[] = {3, 50};
    for (size_t s = 0; solver_at(s) != NULL; s++) {
        uint64_t calls[2];
        for (int c = 0; c < 2; c++) {
            struct plot plot = plot_sow(context, &noisy, 0);
            struct low_rank point = random_point(context, 60, 40, 3, 10);
            struct solve_result result = {0};
            struct solve_limits limits = {.iterations = counts[c]};
            uint64_t before = fescue_memory_usage(context).calls;
            assert_status(context, solve_run(&plot.problem, solver_at(s), &limits, &point, &result), FESCUE_OK);
            calls[c] = fescue_memory_usage(context).calls - before;
            assert_true(c == 0 ? result.iterations == 3 : result.iterations > 5);
            solve_result_free(context, &result);
            low_rank_free(context, &point);
            plot_free(&plot);
        }
        assert_in_range(calls[0], 1, 30);
        assert_int_equal(calls[1], calls[0]);
    }
}

static void limits_are_kept(void **state)
{
    fescue_context *context = bench_of(state)->context;
    for (size_t s = 0; solver_at(s) != NULL; s++) {
        struct plot plot = plot_sow(context, &noisy, 0);
        struct low_rank point = random_point(context, 60, 40, 3, 10);
        struct solve_result result = {0};
        struct solve_limits limits = {.iterations = 3, .gradient = 1e-9};
        double before = objective_of(s, &plot.problem, &point);
        assert_status(context, solve_run(&plot.problem, solver_at(s), &limits, &point, &result), FESCUE_OK);
        assert_int_equal(result.stop, STOP_ITERATIONS);
        assert_int_equal(result.iterations, 3);
        assert_true(objective_of(s, &plot.problem, &point) < before);
        limits.deadline = clock_wall() - 1;
        assert_status(context, solve_run(&plot.problem, solver_at(s), &limits, &point, &result), FESCUE_OK);
        assert_int_equal(result.stop, STOP_TIME);
        limits = (struct solve_limits){.iterations = 1000, .change = 1e-3};
        assert_status(context, solve_run(&plot.problem, solver_at(s), &limits, &point, &result), FESCUE_OK);
        assert_true(result.stop == STOP_CHANGE || (result.iterations < 10 && result.stop == STOP_GRADIENT));
        solve_result_free(context, &result);
        low_rank_free(context, &point);
        plot_free(&plot);
    }
}

static void cancelled_it_gives_back_a_valid_point(void **state)
{
    (void)state;
    for (size_t s = 0; solver_at(s) != NULL; s++) {
        fescue_context *context;
        assert_int_equal(fescue_context_create(NULL, &context), FESCUE_OK);
        struct plot plot = plot_sow(context, &noisy, 0);
        struct low_rank point = random_point(context, 60, 40, 3, 10);
        struct solve_result result = {0};
        double before = objective_of(s, &plot.problem, &point);
        fescue_context_cancel(context);
        assert_int_equal(solve_run(&plot.problem, solver_at(s), &usual_limits, &point, &result), FESCUE_STOPPED);
        assert_int_equal(result.stop, STOP_CANCELLED);
        assert_close(form_error(&point), 0, 1e-13);
        assert_true(objective_of(s, &plot.problem, &point) <= before * (1 + 1e-14));
        solve_result_free(context, &result);
        low_rank_free(context, &point);
        plot_free(&plot);
        assert_no_leak(context);
        fescue_context_destroy(&context);
    }
}

/* From where it ended there is nothing to gain, and nothing is lost. */
static void never_worse_than_it_came(void **state)
{
    fescue_context *context = bench_of(state)->context;
    for (size_t s = 0; solver_at(s) != NULL; s++)
        for (size_t t = 0; solver_at(t) != NULL; t++) {
            struct plot plot = plot_sow(context, &noisy, 0);
            struct solve_result result = {0};
            struct low_rank point = solved(&plot, solver_at(s), 3, &result);
            double before = objective_of(t, &plot.problem, &point);
            assert_status(context, solve_run(&plot.problem, solver_at(t), &usual_limits, &point, &result), FESCUE_OK);
            assert_true(result.objective <= before * (1 + 1e-14));
            assert_true(solve_converged(result.stop));
            assert_true(result.iterations <= 3 || !is_square(s) || !is_square(t));
            low_rank_free(context, &point);
            solve_result_free(context, &result);
            plot_free(&plot);
        }
}

/* ---- odd tables ----------------------------------------------------------------------------------------------------
 */

static void rank_zero_is_the_zero_matrix(void **state)
{
    fescue_context *context = bench_of(state)->context;
    for (size_t s = 0; solver_at(s) != NULL; s++) {
        struct plot plot = plot_sow(context, &noisy, 0);
        struct low_rank point;
        struct solve_result result = {0};
        assert_status(context, low_rank_create(context, 60, 40, 0, &point), FESCUE_OK);
        assert_status(context, solve_run(&plot.problem, solver_at(s), &usual_limits, &point, &result), FESCUE_OK);
        assert_close(result.rmse, 1, 1e-12);
        assert_close(result.objective, objective_of(s, &plot.problem, &point), 1e-9);
        assert_true(solve_converged(result.stop));
        assert_string_equal(result.solver, solver_name(solver_at(s)));
        solve_result_free(context, &result);
        low_rank_free(context, &point);
        plot_free(&plot);
    }
}

/* Rows and columns of which nothing was seen, and some with fewer cells than the rank. */
static void thin_lines_do_no_harm(void **state)
{
    fescue_context *context = bench_of(state)->context;
    for (size_t s = 0; solver_at(s) != NULL; s++)
        for (int variant = 0; variant < 4; variant++) {
            struct sowing sowing = variant % 2 == 0 ? plain : turned(plain);
            struct plot full = plot_sow(context, &sowing, 0);
            double *dense = dense_targets(&full, NAN);
            for (uint32_t j = 0; j < sowing.columns; j++)
                dense[5 * sowing.columns + j] = NAN; /* row 5: nothing */
            for (uint32_t j = 2; j < sowing.columns; j++)
                dense[7 * sowing.columns + j] = NAN; /* row 7: at most two */
            for (uint32_t i = 0; i < sowing.rows; i++)
                dense[i * sowing.columns + 11] = NAN; /* column 11: nothing */
            struct plot plot = plot_dense(context, sowing.rows, sowing.columns, dense, variant < 2 ? 0 : 0.01);
            struct solve_result result = {0};
            struct low_rank point = solved(&plot, solver_at(s), 3, &result);
            double worst = 0;
            for (uint32_t i = 0; i < sowing.rows; i++)
                for (uint32_t j = 0; j < sowing.columns; j++) {
                    double x = plot.problem.scale * low_rank_entry(&point, i, j);
                    assert_true(isfinite(x) && fabs(x) < 1e3);
                    if (variant < 2 && i != 5 && i != 7 && j != 11)
                        worst = fmax(worst, fabs(x - sowing_truth(&sowing, i, j) / full.problem.scale));
                }
            assert_close(worst, 0, 1e-8);
            free(dense);
            solve_result_free(context, &result);
            low_rank_free(context, &point);
            plot_free(&plot);
            plot_free(&full);
        }
}

/* More components than the table has: the seen cells are met, the numbers stay finite. */
static void a_table_of_lower_rank_is_met(void **state)
{
    fescue_context *context = bench_of(state)->context;
    struct sowing sowing = plain;
    sowing.share = 0.8;
    for (size_t s = 0; solver_at(s) != NULL; s++) {
        struct plot plot = plot_sow(context, &sowing, 0);
        struct solve_result result = {0};
        struct low_rank point = solved(&plot, solver_at(s), 5, &result);
        assert_close(result.rmse, 0, 1e-6);
        assert_true(isfinite(result.gradient));
        assert_close(form_error(&point), 0, 1e-13);
        solve_result_free(context, &result);
        low_rank_free(context, &point);
        plot_free(&plot);
    }
}

static void tiny_tables_are_met(void **state)
{
    fescue_context *context = bench_of(state)->context;
    const double row[] = {1, NAN, 3, -2}, square[] = {1, 2, 2, 4}, lone[] = {NAN, NAN, 7, NAN, NAN, NAN};
    const double zeros[] = {0, NAN, 0, 0};
    const struct {
        const double *dense;
        uint32_t rows, columns;
    } tiny[] = {{row, 1, 4}, {row, 4, 1}, {square, 2, 2}, {lone, 2, 3}, {lone, 3, 2}, {zeros, 2, 2}, {row, 2, 2}};
    for (size_t s = 0; solver_at(s) != NULL; s++)
        for (size_t k = 0; k < sizeof tiny / sizeof *tiny; k++) {
            struct plot plot = plot_dense(context, tiny[k].rows, tiny[k].columns, tiny[k].dense, 0);
            struct solve_result result = {0};
            struct low_rank point = solved(&plot, solver_at(s), 1, &result);
            assert_true(solve_converged(result.stop));
            assert_close(result.rmse, 0, 1e-9);
            assert_close(form_error(&point), 0, 1e-13);
            solve_result_free(context, &result);
            low_rank_free(context, &point);
            plot_free(&plot);
        }
}

/* A start at the zero matrix, where nothing is known of either side but orthonormal columns, does not trap anyone. */
static void the_zero_matrix_is_left(void **state)
{
    fescue_context *context = bench_of(state)->context;
    for (size_t s = 0; solver_at(s) != NULL; s++) {
        struct plot plot = plot_sow(context, &plain, 0);
        struct low_rank point = random_point(context, 60, 40, 3, 0);
        struct solve_result result = {0};
        assert_status(context, solve_run(&plot.problem, solver_at(s), &usual_limits, &point, &result), FESCUE_OK);
        assert_close(truth_distance(&plot, &point), 0, 1e-9);
        solve_result_free(context, &result);
        low_rank_free(context, &point);
        plot_free(&plot);
    }
}

static void single_precision_goes_as_far_as_it_can(void **state)
{
    fescue_context *context = bench_of(state)->context;
    for (size_t s = 0; solver_at(s) != NULL; s++) {
        struct sowing sowing = plain;
        sowing.precision = FESCUE_SINGLE;
        struct plot plot = plot_sow(context, &sowing, 0);
        struct solve_result result = {0};
        struct low_rank point = solved(&plot, solver_at(s), 3, &result);
        assert_true(solve_converged(result.stop));
        assert_close(truth_distance(&plot, &point), 0, 1e-5);
        low_rank_free(context, &point);
        solve_result_free(context, &result);
        plot_free(&plot);
        sowing.noise = 0.3;
        plot = plot_sow(context, &sowing, 0);
        point = solved(&plot, solver_at(s), 3, &result);
        assert_true(solve_converged(result.stop));
        low_rank_free(context, &point);
        solve_result_free(context, &result);
        plot_free(&plot);
    }
}

/* Every allocation fails in turn: the status says so, nothing is lost, the point is as it came. */
static void lack_of_memory_leaves_everything_as_it_was(void **state)
{
    fescue_context *context = bench_of(state)->context;
    for (size_t s = 0; solver_at(s) != NULL; s++) {
        struct plot plot = plot_sow(context, &noisy, 0);
        struct low_rank before = random_point(context, 60, 40, 3, 10), point;
        struct solve_limits limits = {.iterations = 2};
        uint64_t alive = fescue_memory_usage(context).blocks;
        bool met = true;
        for (uint64_t nth = 1; met; nth++) {
            struct solve_result result = {0};
            assert_status(context, low_rank_copy(context, &before, &point), FESCUE_OK);
            fault_plan(FAULT_TAKE, nth, false, 0);
            fescue_status status = solve_run(&plot.problem, solver_at(s), &limits, &point, &result);
            met = fault_met();
            fault_clear();
            assert_int_equal(status, met ? FESCUE_NO_MEMORY : FESCUE_OK);
            assert_true(!met || points_same(&point, &before));
            solve_result_free(context, &result);
            low_rank_free(context, &point);
            assert_int_equal(fescue_memory_usage(context).blocks, alive);
            fescue_failure_clear(context);
        }
        low_rank_free(context, &before);
        plot_free(&plot);
    }
}

int main(void)
{
    const struct CMUnitTest tests[] = {
        BENCH_TEST(a_table_without_noise_is_recovered),
        BENCH_TEST(the_result_describes_the_point),
        BENCH_TEST(the_objective_never_rises),
        BENCH_TEST(the_gradient_is_the_slope),
        BENCH_TEST(a_full_table_gives_its_truncation),
        BENCH_TEST(the_minimum_does_not_depend_on_the_solver),
        BENCH_TEST(full_rank_is_no_restriction),
        BENCH_TEST(turning_the_table_turns_the_answer),
        BENCH_TEST(units_do_not_matter),
        BENCH_TEST(the_bits_do_not_depend_on_the_workers),
        BENCH_TEST(iterations_take_no_memory),
        BENCH_TEST(limits_are_kept),
        BENCH_TEST(cancelled_it_gives_back_a_valid_point),
        BENCH_TEST(never_worse_than_it_came),
        BENCH_TEST(rank_zero_is_the_zero_matrix),
        BENCH_TEST(thin_lines_do_no_harm),
        BENCH_TEST(a_table_of_lower_rank_is_met),
        BENCH_TEST(tiny_tables_are_met),
        BENCH_TEST(the_zero_matrix_is_left),
        BENCH_TEST(single_precision_goes_as_far_as_it_can),
        BENCH_TEST(lack_of_memory_leaves_everything_as_it_was),
    };
    return cmocka_run_group_tests(tests, NULL, NULL);
}
