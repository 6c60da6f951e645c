/* SPDX-License-Identifier: MIT
 *
 * The evidence fit among the candidates: it learns rank and ridge from the kept cells themselves, so that the hidden
 * ones have little to choose, only which kind of offsets it has, whether every line of the shorter side (with a time
 * axis: every series) has noise of its own, and whether the axis and near columns are of use.
 *
 * Where it is used: under --solver evidence, and under --solver auto while it is affordable and the ridge is left to
 * the program. It leaves neighbouring ranks and ridges nothing to win, as a rule, at the price of one path's first few
 * steps; near the noiseless limit its point is where an exact fit starts (path_try_exact).
 */
#include "judge/choose_internal.h"

#include <math.h>

/* Components to begin with: what most tables have is fewer, and growth adds what is missing. */
enum { START_RANK = 20, FINE_ROUNDS = 60, NOISE_ROUNDS = 40 };
/* On large tables noise of every line's own is not tried where its variance differs by less than 14 % between lines;
   else a few rounds, which leave what they have to settle far below the error, show whether it is worth all of them. */
enum { TRIAL_ROUNDS = 5 };
static const double felt_spread = 0.02;
/* Nor are effects tried beside components that leave less of them than a tenth of what chance does, so that a line's
   mean would tell its effect from 0 with a tenth of its weight and lower the squared error of its cells by a hundredth
   of the square of their mean's error; unless some component may be made of them. */
static const double felt_effects = 0.1, felt_constant = 0.05;
/* And rounds enough to tell kinds of offsets apart, on tables where a round is felt. */
enum { FELT = 50000, COMPARE_ROUNDS = 30 };
/* The estimates are settled when a round moves them by this share of the table's spread. */
static const double settled = 1e-4;
/* Or by this share of the noise's standard deviation: where each round moves them by a twentieth less than the one
   before, all that are left would change the squared error by some thousandths. */
static const double settled_noise = 2e-3;
/* On large tables the rounds end when all that are left would come to this share of it, which is a few ten-thousandths
   of the squared error. */
static const double left_noise = 0.02;

/* What auto affords: cells x (rank + 3)^2 multiplications a round, and the bytes of the lines' moments. */
static const double affordable_work = 1e10, affordable_bytes = 5e8;

static size_t rank_most_of(const struct chooser *chooser)
{
    const struct fescue_options *options = chooser->options;
    const struct cells *kept = chooser->kept;
    size_t shorter = kept->rows < kept->columns ? kept->rows : kept->columns;
    size_t asked = (size_t)(options->rank == FESCUE_AUTO ? options->rank_most : options->rank);
    return asked < shorter ? asked : shorter;
}

static bool is_affordable(const struct chooser *chooser, size_t rank)
{
    const struct cells *kept = chooser->kept;
    double size = (double)(rank + 3) * (double)(rank + 3), lines = (double)kept->rows + (double)kept->columns;
    return (double)kept->count * size <= affordable_work && 4 * lines * size <= affordable_bytes;
}

bool evidence_is_meant(const struct chooser *chooser)
{
    size_t most = rank_most_of(chooser), start = most < START_RANK ? most : START_RANK;
    if (most == 0 || chooser->hidden->count == 0)
        return false;
    return chooser->learns == CHOOSE_LEARN ||
           (chooser->learns == CHOOSE_AUTO && chooser->options->ridge == FESCUE_AUTO && is_affordable(chooser, start));
}

struct evidence_request evidence_request_of(const struct chooser *chooser, const struct candidate *candidate)
{
    size_t most = rank_most_of(chooser);
    return (struct evidence_request){.offsets = candidate->offsets.kind,
                                     .noise = candidate->noise,
                                     .rank = most < START_RANK ? most : START_RANK,
                                     .rank_most = most,
                                     .seed = (uint64_t)chooser->options->seed,
                                     .rounds = FINE_ROUNDS,
                                     .change = settled,
                                     .change_noise = settled_noise,
                                     .change_left = evidence_is_large(chooser->kept) ? left_noise : 0,
                                     .time = candidate->time.along != TIME_NONE ? chooser->time : NULL,
                                     .near = candidate->near.is_there ? chooser->near : NULL,
                                     .deadline = chooser->deadline};
}

/* The lines whose noise may differ: with time the series, else those of the shorter side. */
static enum evidence_noise noise_lines(const struct chooser *chooser)
{
    const struct cells *kept = chooser->kept;
    bool by_columns = chooser->time != NULL ? chooser->time->along == TIME_ROWS : kept->columns <= kept->rows;
    return by_columns ? EVIDENCE_NOISE_COLUMNS : EVIDENCE_NOISE_ROWS;
}

/* The candidate becomes what was learnt; takes over the result's offsets and point. */
static fescue_status candidate_take(struct chooser *chooser, struct evidence_result *result, enum evidence_noise noise,
                                    struct candidate *candidate)
{
    fescue_status status = FESCUE_OK;
    offsets_free(chooser->context, &candidate->offsets);
    low_rank_free(chooser->context, &candidate->point);
    time_part_free(chooser->context, &candidate->time);
    candidate->offsets = result->model.offsets;
    candidate->point = result->model.low_rank;
    candidate->time = result->model.time;
    candidate->near = result->model.near;
    result->model.time = (struct time_part){0};
    result->model.offsets = (struct offsets){0};
    result->model.low_rank = (struct low_rank){0};
    candidate->version = ++chooser->versions;
    candidate->is_learnt = true;
    candidate->noise = noise;
    candidate->variance = result->noise * result->noise;
    candidate->spread = noise_lines(chooser) == EVIDENCE_NOISE_COLUMNS ? result->column_spread : result->row_spread;
    candidate->effects = fmax(result->row_effects, result->column_effects);
    candidate->ridge = NAN;
    chooser_take_scale(chooser, candidate);
    for (size_t k = 0; k < candidate->point.rank; k++)
        candidate->point.spectrum[k] /= chooser->scale;
    TRY(candidate_measure(chooser, candidate));
    TRY(candidate_note(chooser, candidate));
done:
    return status;
}

static fescue_status learn_as(struct chooser *chooser, const struct evidence_request *request,
                              const struct candidate *alone, struct candidate *candidate)
{
    fescue_status status = FESCUE_OK;
    struct evidence_result result = {0};
    TRY(progress_tell(chooser->context, "choosing", -1));
    TRY(candidate_copy(chooser, alone, candidate));
    TRY(evidence_learn(chooser->context, chooser->kept, request, &result));
    TRY(candidate_take(chooser, &result, EVIDENCE_NOISE_EQUAL, candidate));
done:
    evidence_result_free(chooser->context, &result);
    return status;
}

/* To compare kinds of offsets. */
static struct evidence_request comparison_of(const struct chooser *chooser, const struct candidate *alone)
{
    struct evidence_request request = evidence_request_of(chooser, alone);
    if (chooser->kept->count >= FELT)
        request.rounds = COMPARE_ROUNDS;
    return request;
}

static fescue_status learn(struct chooser *chooser, const struct candidate *alone, struct candidate *candidate)
{
    const struct evidence_request request = comparison_of(chooser, alone);
    return learn_as(chooser, &request, alone, candidate);
}

fescue_status evidence_reach(struct chooser *chooser, const struct candidate *alone, size_t rank,
                             struct candidate *candidate)
{
    struct evidence_request request = evidence_request_of(chooser, alone);
    request.rank = request.rank_most = rank;
    return learn_as(chooser, &request, alone, candidate);
}

/* What a fit is to have beyond equal noise. */
struct more {
    enum evidence_noise noise;
    const struct time_axis *time;
    const struct nearness *near;
};

/* Standard errors by which a fit that follows time or near columns has to have more error to be turned down: where
   nothing hangs together it learns so by itself, and few hidden cells show what it is worth in lines of which all are
   missing, where turning it down costs most. */
static const double turned_down = 2;

/* The components of `from` again, beside these offsets and as is asked for, into *candidate. */
static fescue_status learn_further(struct chooser *chooser, struct evidence_request *request,
                                   const struct offsets *offsets, const struct candidate *from,
                                   struct candidate *candidate)
{
    const struct cells *kept = chooser->kept;
    struct evidence_result result = {0};
    chooser_take_scale(chooser, from);
    const struct model start = {.rows = kept->rows,
                                .columns = kept->columns,
                                .bounds = chooser->options->bounds,
                                .offsets = *offsets,
                                .low_rank = candidate_point(chooser, from),
                                .time = from->time,
                                .near = from->near};
    request->rank = from->point.rank;
    request->is_shrunk = evidence_is_large(kept);
    request->noise_start = request->is_shrunk ? from->variance : from->errors.rmse * from->errors.rmse;
    fescue_status status = evidence_fit(chooser->context, kept, request, &start, &result);
    if (status == FESCUE_OK)
        status = candidate_take(chooser, &result, request->noise, candidate);
    evidence_result_free(chooser->context, &result);
    return status;
}

/* The winner's components again, under the noise, the time part and the near columns that are asked for: takes its
   place when it has less error, or is not turned down. */
static fescue_status learn_rounds(struct chooser *chooser, const struct more *more, uint64_t rounds,
                                  struct candidate *winner, bool *is_better)
{
    fescue_status status = FESCUE_OK;
    struct candidate own = {0};
    struct evidence_request request = evidence_request_of(chooser, winner);
    request.noise = more->noise;
    request.time = more->time;
    request.near = more->near;
    request.rounds = rounds;
    *is_better = false;
    if (winner->point.rank == 0 || chooser_is_late(chooser))
        return FESCUE_OK;
    TRY(candidate_copy(chooser, winner, &own));
    TRY(learn_further(chooser, &request, &winner->offsets, winner, &own));
    *is_better = more->time != NULL || more->near != NULL ? !candidate_beats(chooser, winner, &own, turned_down)
                                                          : candidate_beats(chooser, &own, winner, 1);
    if (*is_better)
        candidate_swap(&own, winner);
done:
    candidate_free(chooser, &own);
    return status;
}

static fescue_status learn_more(struct chooser *chooser, const struct more *more, struct candidate *winner)
{
    bool is_plain = more->time == NULL && more->near == NULL, is_better = true;
    fescue_status status = FESCUE_OK;
    bool is_trial = is_plain && evidence_is_large(chooser->kept);
    if (is_trial && winner->spread < felt_spread)
        return FESCUE_OK;
    if (is_trial)
        status = learn_rounds(chooser, more, TRIAL_ROUNDS, winner, &is_better);
    if (status == FESCUE_OK && is_better)
        status = learn_rounds(chooser, more, NOISE_ROUNDS, winner, &is_better);
    return status;
}

/* Another kind of offsets than the best so far has: on a large table beside the components of that one, of which those
   go that were offsets. */
static fescue_status learn_next(struct chooser *chooser, const struct candidate *alone, const struct candidate *best,
                                struct candidate *candidate)
{
    struct evidence_request request = comparison_of(chooser, alone);
    fescue_status status;
    if (!evidence_is_large(chooser->kept) || best->point.rank == 0)
        return learn(chooser, alone, candidate);
    TRY(progress_tell(chooser->context, "choosing", -1));
    TRY(candidate_copy(chooser, alone, candidate));
    TRY(learn_further(chooser, &request, &alone->offsets, best, candidate));
done:
    return status;
}

/* How much of the constant lies in the span of a factor's orthonormal columns, over the lines with cells. */
static double constant_share(const struct half *half, struct matrix factor)
{
    double share = 0, lines = 0;
    for (size_t k = 0; k < factor.columns; k++) {
        double sum = 0;
        for (size_t i = 0; i < factor.rows; i++)
            sum += MATRIX_AT(factor, i, k);
        share += sum * sum;
    }
    for (size_t i = 0; i < half->lines; i++)
        lines += half->start[i + 1] > half->start[i];
    return share / lines;
}

/* Whether effects are worth a fit of their own on a large table: the best fit so far, which has none, leaves some, or
   has them as components, in which case the other factor of these is constant. */
static bool effects_felt(const struct chooser *chooser, const struct candidate *best)
{
    const struct cells *kept = chooser->kept;
    const struct low_rank *point = &best->point;
    if (!evidence_is_large(kept) || point->rank == 0 || best->offsets.kind != FESCUE_OFFSETS_NONE)
        return true;
    return best->effects >= felt_effects || constant_share(&kept->by_row, point->left) >= felt_constant ||
           constant_share(&kept->by_column, point->right) >= felt_constant;
}

fescue_status evidence_compete(struct chooser *chooser, const struct candidate *const *alone, size_t count,
                               struct candidate *winner, size_t *best)
{
    fescue_status status = FESCUE_OK;
    struct candidate candidate = {0};
    *best = 0;
    TRY(learn(chooser, alone[0], winner));
    TRY(path_try_exact(chooser, winner));
    for (size_t k = 1; k < count && !winner->is_exact && !chooser_is_late(chooser); k++) {
        if (!effects_felt(chooser, winner))
            continue;
        candidate_free(chooser, &candidate);
        TRY(learn_next(chooser, alone[k], winner, &candidate));
        TRY(path_try_exact(chooser, &candidate));
        if (candidate_succeeds(chooser, &candidate, winner)) {
            candidate_swap(winner, &candidate);
            *best = k;
        }
    }
    chooser->plain_errors = winner->errors;
    if (winner->is_exact)
        goto done;
    TRY(learn_more(chooser, &(struct more){.noise = noise_lines(chooser)}, winner));
    if (chooser->time != NULL)
        TRY(learn_more(chooser, &(struct more){winner->noise, chooser->time, NULL}, winner));
    if (chooser->near != NULL && winner->point.rank > 0) {
        const struct time_axis *time = winner->time.along != TIME_NONE ? chooser->time : NULL;
        chooser->far_errors = winner->errors;
        TRY(learn_more(chooser, &(struct more){winner->noise, time, chooser->near}, winner));
    }
done:
    candidate_free(chooser, &candidate);
    return status;
}
