/* SPDX-License-Identifier: MIT
 *
 * The residual of a series between its seen cells, against the conditional mean of a Gaussian process written out.
 */
#include "model/model.h"
#include "support_solve.h"

enum { STEPS = 6 };
static double times[STEPS] = {0, 1, 2.5, 4, 9, 10};

/* Two series across six times; the first was seen at times 1 and 4, the second never. */
static struct time_part part_make(fescue_context *context, enum time_along along)
{
    struct time_axis axis = {.along = along, .count = STEPS, .at = times};
    struct time_part part;
    assert_status(context, time_part_create(context, &axis, 2, 2, 0, &part), FESCUE_OK);
    part.start[1] = part.start[2] = 2;
    part.time[0] = 1;
    part.time[1] = 4;
    part.mean[0] = 2;
    part.mean[1] = -1;
    part.law[0] = (struct kalman_law){3, 0.7};
    part.law[1] = (struct kalman_law){3, 0.7};
    return part;
}

/* c' C^-1 m with C_ab = rho^|a-b| of the seen times, c that of the time asked for; the variance cancels. */
static double between(double when)
{
    double c[2] = {pow(0.7, fabs(when - 1)), pow(0.7, fabs(when - 4))}, off = pow(0.7, 3);
    double determinant = 1 - off * off;
    return ((c[0] - off * c[1]) * 2 + (c[1] - off * c[0]) * -1) / determinant;
}

static void residual_follows_the_process(void **state)
{
    fescue_context *context = bench_of(state)->context;
    struct time_part part = part_make(context, TIME_ROWS), copy;
    struct time_part turned = part_make(context, TIME_COLUMNS);
    assert_status(context, time_part_copy(context, &part, &copy), FESCUE_OK);
    for (uint32_t t = 0; t < STEPS; t++) {
        assert_close(time_part_at(&part, t, 0), between(times[t]), 1e-14);
        assert_close(time_part_at(&copy, t, 0), between(times[t]), 1e-14);
        assert_close(time_part_at(&turned, 0, t), between(times[t]), 1e-14);
        assert_true(time_part_at(&part, t, 1) == 0);
    }
    time_part_free(context, &part);
    time_part_free(context, &copy);
    time_part_free(context, &turned);
}

static void no_time_adds_nothing(void **state)
{
    fescue_context *context = bench_of(state)->context;
    struct time_part none = {0}, copy;
    assert_status(context, time_part_copy(context, &none, &copy), FESCUE_OK);
    assert_true(time_part_at(&copy, 3, 4) == 0);
    time_part_free(context, &copy);
}

int main(void)
{
    const struct CMUnitTest tests[] = {
        BENCH_TEST(residual_follows_the_process),
        BENCH_TEST(no_time_adds_nothing),
    };
    return cmocka_run_group_tests_name("time_part", tests, NULL, NULL);
}
