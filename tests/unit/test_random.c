/* SPDX-License-Identifier: MIT
 *
 * Random numbers: known answers, then properties with fixed seeds. Bounds are four standard errors unless said.
 */
#include "support.h"

#include <math.h>

/* The known-answer vectors that accompany the paper of Salmon, Moraes, Dror and Shaw for philox4x32 with ten rounds;
   quoted from memory. */
static void philox_gives_the_known_answers(void **state)
{
    static const struct {
        uint32_t counter[4], key[2], out[4];
    } cases[] = {
        {{0, 0, 0, 0}, {0, 0}, {0x6627e8d5, 0xe169c58d, 0xbc57ac4c, 0x9b00dbd8}},
        {{0xffffffff, 0xffffffff, 0xffffffff, 0xffffffff},
         {0xffffffff, 0xffffffff},
         {0x408f276d, 0x41c83b0e, 0xa20bc7c6, 0x6d5451fd}},
        {{0x243f6a88, 0x85a308d3, 0x13198a2e, 0x03707344},
         {0xa4093822, 0x299f31d0},
         {0xd16cfe09, 0x94fdcceb, 0x5001e420, 0x24126ea1}},
    };
    (void)state;
    for (size_t k = 0; k < sizeof cases / sizeof cases[0]; k++) {
        uint32_t out[4];
        philox4x32(cases[k].counter, cases[k].key, out);
        assert_memory_equal(out, cases[k].out, sizeof out);
    }
}

/* Where seed, stream and index go, from the same vectors: the file header of random.c. */
static void a_stream_is_philox_by_counter(void **state)
{
    (void)state;
    struct random_stream stream = {
        .seed = 0x299f31d0a4093822, .stream = 0x0370734413198a2e, .index = 0x85a308d3243f6a88};
    assert_int_equal(random_bits(&stream), 0x94fdccebd16cfe09);
    assert_int_equal(stream.index, 0x85a308d3243f6a89);
}

static void a_draw_depends_on_its_index_alone(void **state)
{
    (void)state;
    struct random_stream stream = random_open(7, RANDOM_TEST, 3);
    for (uint64_t k = 0; k < 1000; k++)
        assert_close(random_uniform(&stream), random_uniform_at(7, RANDOM_TEST, 3, k), 0);
}

static void seeds_purposes_and_numbers_give_different_streams(void **state)
{
    (void)state;
    struct random_stream streams[] = {random_open(1, RANDOM_TEST, 0), random_open(2, RANDOM_TEST, 0),
                                      random_open(1, RANDOM_SOW, 0), random_open(1, RANDOM_TEST, 1),
                                      random_open(1ull << 32, RANDOM_TEST, 0)};
    enum { STREAMS = sizeof streams / sizeof streams[0] };
    uint64_t draw[STREAMS];
    for (size_t i = 0; i < STREAMS; i++) {
        draw[i] = random_bits(&streams[i]);
        for (size_t j = 0; j < i; j++)
            assert_int_not_equal(draw[i], draw[j]);
    }
}

/* Moments 1 to 4 of N numbers against those of their law; the errors are those of the mean of x^p. */
static void moments_check(const double sum[5], double count, const double law[9])
{
    for (int p = 1; p <= 4; p++) {
        double error = sqrt((law[2 * p] - law[p] * law[p]) / count);
        assert_close(sum[p] / count, law[p], 4 * error);
    }
}

static void powers_add(double sum[5], double x)
{
    for (int p = 1; p <= 4; p++)
        sum[p] += pow(x, p);
}

static void uniform_numbers_have_the_moments_of_their_law(void **state)
{
    enum { COUNT = 200000 };
    (void)state;
    double sum[5] = {0}, law[9];
    for (int p = 0; p <= 8; p++)
        law[p] = 1.0 / (p + 1);
    struct random_stream stream = random_open(11, RANDOM_TEST, 0);
    for (int k = 0; k < COUNT; k++) {
        double x = random_uniform(&stream);
        assert_true(x >= 0 && x < 1);
        powers_add(sum, x);
    }
    moments_check(sum, COUNT, law);
}

static void normal_numbers_have_the_moments_of_their_law(void **state)
{
    enum { COUNT = 200000 };
    static const double law[9] = {1, 0, 1, 0, 3, 0, 15, 0, 105};
    (void)state;
    double sum[5] = {0};
    struct random_stream stream = random_open(12, RANDOM_TEST, 0);
    for (int k = 0; k < COUNT; k++) {
        double x = random_normal(&stream);
        assert_true(isfinite(x));
        powers_add(sum, x);
    }
    moments_check(sum, COUNT, law);
}

/* The greatest distance of the empirical distribution from the law: 1.95/sqrt(n) is passed once in a thousand times
   (Kolmogorov's limit law, tables such as NIST's e-Handbook 1.3.5.16). Counted in 1000 bins of equal probability. */
static void normal_numbers_follow_their_distribution(void **state)
{
    enum { COUNT = 200000, BINS = 1000 };
    static uint32_t bin[BINS];
    (void)state;
    struct random_stream stream = random_open(13, RANDOM_TEST, 0);
    for (int k = 0; k < COUNT; k++) {
        double probability = 0.5 * erfc(-random_normal(&stream) / sqrt(2));
        size_t place = (size_t)(probability * BINS);
        bin[place < BINS ? place : BINS - 1]++;
    }
    double below = 0, worst = 0;
    for (int k = 0; k < BINS; k++) {
        below += bin[k];
        worst = fmax(worst, fabs(below / COUNT - (k + 1.0) / BINS));
    }
    assert_true(worst < 1.95 / sqrt(COUNT));
}

static void neighbouring_draws_and_streams_do_not_correlate(void **state)
{
    enum { COUNT = 100000 };
    (void)state;
    struct random_stream a = random_open(14, RANDOM_TEST, 0), b = random_open(14, RANDOM_TEST, 1);
    double before = random_normal(&a), within = 0, across = 0;
    for (int k = 0; k < COUNT; k++) {
        double now = random_normal(&a);
        within += before * now;
        across += now * random_normal(&b);
        before = now;
    }
    assert_close(within / COUNT, 0, 4 / sqrt(COUNT));
    assert_close(across / COUNT, 0, 4 / sqrt(COUNT));
}

static void draws_below_a_bound_are_unbiased(void **state)
{
    enum { COUNT = 90000 };
    (void)state;
    /* With this bound a plain remainder would give the lowest third half of all draws. */
    const uint64_t bound = 3ull << 62, third = 1ull << 62;
    struct random_stream stream = random_open(15, RANDOM_TEST, 0);
    double part[3] = {0};
    for (int k = 0; k < COUNT; k++) {
        uint64_t draw = random_below(&stream, bound);
        assert_true(draw < bound);
        part[draw / third]++;
    }
    for (int k = 0; k < 3; k++)
        assert_close(part[k] / COUNT, 1.0 / 3, 4 * sqrt(2.0 / 9 / COUNT));
}

static void small_bounds_reach_every_number(void **state)
{
    (void)state;
    struct random_stream stream = random_open(16, RANDOM_TEST, 0);
    for (uint64_t bound = 1; bound <= 10; bound++) {
        uint64_t seen = 0;
        for (int k = 0; k < 400; k++) {
            uint64_t draw = random_below(&stream, bound);
            assert_true(draw < bound);
            seen |= 1ull << draw;
        }
        assert_int_equal(seen, (1ull << bound) - 1);
    }
}

int main(void)
{
    const struct CMUnitTest tests[] = {
        cmocka_unit_test(philox_gives_the_known_answers),
        cmocka_unit_test(a_stream_is_philox_by_counter),
        cmocka_unit_test(a_draw_depends_on_its_index_alone),
        cmocka_unit_test(seeds_purposes_and_numbers_give_different_streams),
        cmocka_unit_test(uniform_numbers_have_the_moments_of_their_law),
        cmocka_unit_test(normal_numbers_have_the_moments_of_their_law),
        cmocka_unit_test(normal_numbers_follow_their_distribution),
        cmocka_unit_test(neighbouring_draws_and_streams_do_not_correlate),
        cmocka_unit_test(draws_below_a_bound_are_unbiased),
        cmocka_unit_test(small_bounds_reach_every_number),
    };
    return cmocka_run_group_tests(tests, NULL, NULL);
}
