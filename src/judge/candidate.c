/* SPDX-License-Identifier: MIT
 *
 * One fit and what the hidden cells say of it.
 *
 * Two fits are compared by paired differences: with e and e' their errors on the same hidden cell, d = e^2 - e'^2 has a
 * much smaller spread than either, since the noise of the cell is in both. The errors of one row hang together (they
 * share that row's factor), so the standard error of mean(d) is taken over groups of hidden cells that are neighbours
 * in row order, and only the groups' sums are kept: with N hidden cells, G groups of n_g cells, D_g the sum of d in
 * group g, d times its weight where cells have weights,
 *
 *     mean = sum_g D_g / N,      error^2 = G/(G-1) sum_g (D_g - n_g mean)^2 / N^2.
 */
#include "judge/choose_internal.h"

#include <math.h>

fescue_status candidate_note(struct chooser *chooser, const struct candidate *candidate)
{
    fescue_status status = FESCUE_OK;
    if (chooser->path_count == chooser->path_capacity) {
        uint64_t capacity = 2 * chooser->path_capacity + 16;
        TRY(RESIZE(chooser->context, capacity, &chooser->path));
        chooser->path_capacity = capacity;
    }
    chooser->path[chooser->path_count++] = (struct choose_step){.offsets = candidate->offsets.kind,
                                                                .rank = (uint32_t)candidate->point.rank,
                                                                .ridge = candidate->ridge,
                                                                .errors = candidate->errors};
done:
    return status;
}

fescue_status candidate_create(struct chooser *chooser, enum fescue_offsets kind, struct candidate *candidate)
{
    fescue_status status = FESCUE_OK;
    const struct cells *kept = chooser->kept;
    *candidate = (struct candidate){.version = ++chooser->versions, .rung = ridge_first_rung()};
    TRY(TAKE(chooser->context, chooser->groups, &candidate->square));
    TRY(offsets_fit(chooser->context, kept, kind, &candidate->offsets));
    TRY(low_rank_create(chooser->context, kept->rows, kept->columns, 0, &candidate->point));
    TRY(candidate_measure(chooser, candidate));
    TRY(candidate_note(chooser, candidate));
done:
    if (status != FESCUE_OK)
        candidate_free(chooser, candidate);
    return status;
}

void candidate_free(struct chooser *chooser, struct candidate *candidate)
{
    GIVE(chooser->context, &candidate->square);
    offsets_free(chooser->context, &candidate->offsets);
    low_rank_free(chooser->context, &candidate->point);
    time_part_free(chooser->context, &candidate->time);
}

fescue_status candidate_copy(struct chooser *chooser, const struct candidate *from, struct candidate *to)
{
    fescue_status status = FESCUE_OK;
    const struct cells *kept = chooser->kept;
    struct candidate copy = *from;
    copy.square = NULL;
    copy.offsets = (struct offsets){0};
    copy.point = (struct low_rank){0};
    copy.time = (struct time_part){0};
    TRY(TAKE(chooser->context, chooser->groups, &copy.square));
    TRY(offsets_copy(chooser->context, kept->rows, kept->columns, &from->offsets, &copy.offsets));
    TRY(low_rank_copy(chooser->context, &from->point, &copy.point));
    TRY(time_part_copy(chooser->context, &from->time, &copy.time));
    for (size_t g = 0; g < chooser->groups; g++)
        copy.square[g] = from->square[g];
    candidate_swap(&copy, to);
done:
    candidate_free(chooser, &copy);
    return status;
}

void candidate_swap(struct candidate *a, struct candidate *b)
{
    struct candidate kept = *a;
    *a = *b;
    *b = kept;
}

/* The first hidden cell of group g. */
static uint64_t group_start(const struct chooser *chooser, size_t g)
{
    uint64_t count = chooser->hidden->count, whole = count / chooser->groups, rest = count % chooser->groups;
    return g * whole + (g < rest ? g : rest);
}

static void groups_sum(const struct chooser *chooser, double *square)
{
    const float *weight = chooser->hidden->by_row.weight;
    for (size_t g = 0; g < chooser->groups; g++) {
        square[g] = 0;
        for (uint64_t k = group_start(chooser, g); k < group_start(chooser, g + 1); k++)
            square[g] += (weight != NULL ? (double)weight[k] : 1) * (chooser->residuals[k] * chooser->residuals[k]);
    }
}

struct low_rank candidate_point(struct chooser *chooser, const struct candidate *candidate)
{
    struct low_rank point = candidate->point;
    for (size_t k = 0; k < point.rank; k++)
        chooser->spectrum[k] = point.spectrum[k] * chooser->scale;
    point.spectrum = chooser->spectrum;
    return point;
}

/* Whether the hidden cells are met to rounding: four fifths of them, since a few may lie in lines that kept too few
   cells to determine them, and their errors tell nothing. */
static bool is_met(const struct chooser *chooser)
{
    /* Numbers are held to 2^-53 or 2^-24, and a few hundred roundings go into an estimate. */
    static const double double_rounding = 1e-8, single_rounding = 1e-5, share = 0.8;
    bool is_single = chooser->kept->precision == FESCUE_SINGLE;
    double rounding = (is_single ? single_rounding : double_rounding) * chooser->scale;
    uint64_t met = 0, count = chooser->hidden->count;
    for (uint64_t k = 0; k < count; k++)
        met += fabs(chooser->residuals[k]) <= rounding;
    return count > 0 && (double)met >= share * (double)count;
}

fescue_status candidate_measure(struct chooser *chooser, struct candidate *candidate)
{
    fescue_status status = FESCUE_OK;
    chooser_take_scale(chooser, candidate);
    struct model model = {.rows = chooser->kept->rows,
                          .columns = chooser->kept->columns,
                          .offsets = candidate->offsets,
                          .low_rank = candidate_point(chooser, candidate),
                          .time = candidate->time,
                          .bounds = chooser->options->bounds};
    TRY(errors_measure(chooser->context, chooser->hidden, &model, chooser->residuals, &candidate->errors));
    groups_sum(chooser, candidate->square);
    if (!isfinite(candidate->errors.rmse))
        candidate->errors.rmse = INFINITY;
    candidate->is_exact = is_met(chooser);
done:
    return status;
}

fescue_status candidate_fit(struct chooser *chooser, double ridge, const struct solve_limits *limits,
                            struct candidate *candidate)
{
    fescue_status status = FESCUE_OK;
    struct solve_result result = {0};
    TRY(chooser_take_up(chooser, candidate));
    problem_set_ridge(&chooser->problem, ridge);
    TRY(progress_tell(chooser->context, "choosing", -1));
    TRY(solve_run(&chooser->problem, chooser->solver, limits, &candidate->point, &result));
    candidate->ridge = ridge;
    candidate->is_learnt = false;
    time_part_free(chooser->context, &candidate->time);
    TRY(candidate_measure(chooser, candidate));
    TRY(candidate_note(chooser, candidate));
done:
    solve_result_free(chooser->context, &result);
    return status;
}

fescue_status candidate_refit(struct chooser *chooser, const struct solve_limits *limits, bool at_once,
                              struct candidate *candidate)
{
    fescue_status status = FESCUE_OK;
    struct offsets offsets = {0};
    TRY(chooser_take_up(chooser, candidate));
    struct low_rank point = candidate_point(chooser, candidate);
    double scale = chooser->problem.scale;
    if (at_once) {
        TRY(refit_offsets(chooser->context, chooser->kept, candidate->offsets.kind, &point, &offsets));
        offsets_free(chooser->context, &candidate->offsets);
        candidate->offsets = offsets;
    } else {
        TRY(refit_sweep(chooser->context, chooser->kept, &point, &candidate->offsets));
    }
    candidate->version = ++chooser->versions;
    TRY(chooser_take_up(chooser, candidate));
    for (size_t k = 0; k < candidate->point.rank; k++)
        candidate->point.spectrum[k] *= scale / chooser->problem.scale;
    TRY(candidate_fit(chooser, candidate->ridge, limits, candidate));
done:
    return status;
}

bool candidate_beats(const struct chooser *chooser, const struct candidate *large, const struct candidate *small,
                     double errors)
{
    size_t groups = chooser->groups;
    double count = (double)chooser->hidden->count, mean = 0, spread = 0;
    if (!isfinite(large->errors.rmse))
        return false;
    if (!isfinite(small->errors.rmse))
        return true;
    for (size_t g = 0; g < groups; g++)
        mean += (small->square[g] - large->square[g]) / count;
    for (size_t g = 0; g < groups; g++) {
        double share = (double)(group_start(chooser, g + 1) - group_start(chooser, g)) / count;
        double away = (small->square[g] - large->square[g]) / count - share * mean;
        spread += away * away;
    }
    if (groups < 2)
        return false; /* one hidden cell has no spread to judge by */
    return mean > errors * sqrt(spread * (double)groups / (double)(groups - 1));
}

/* Components, two-way effects counting as one; of equals the one with effects is simpler, as they are easier to read.
 */
static bool is_simpler(const struct candidate *a, const struct candidate *b)
{
    size_t of_a = a->point.rank + (a->offsets.kind == FESCUE_OFFSETS_BOTH);
    size_t of_b = b->point.rank + (b->offsets.kind == FESCUE_OFFSETS_BOTH);
    return of_a < of_b || (of_a == of_b && a->point.rank < b->point.rank);
}

bool candidate_succeeds(const struct chooser *chooser, const struct candidate *next, const struct candidate *best)
{
    static const double firmly = 2; /* kinds are tried side by side at many ranks: one is passed by chance too often */
    if (best->is_exact || next->is_exact)
        return !best->is_exact || (next->is_exact && is_simpler(next, best));
    if (is_simpler(next, best))
        return !candidate_beats(chooser, best, next, firmly);
    return candidate_beats(chooser, next, best, firmly);
}
