/* SPDX-License-Identifier: MIT
 *
 * The ladder of ridges, and the walk along it.
 *
 * In the scale-free unit of problem_set_ridge a ridge L shrinks a table whose cells are evenly seen by 1/(1+L), so one
 * ladder serves every table: from 10, where next to nothing is left of the low-rank part, down to 3e-4, which changes
 * estimates by less than their rounding in most tables, and none at all. The best ridge is about the noise over the
 * signal, times r(m+n)/|seen|; neighbours differ by about 3, over which the error near its minimum moves by far less
 * than its own uncertainty.
 *
 * The best ridge changes little from one rank to the next, so a search starts where the rank before ended and asks the
 * neighbours only: down while that gains; when the first step down gained, none at all is tried next (tables with
 * hardly any noise go there at once); up when down did not gain. All fits start from the best point so far.
 */
#include "judge/choose_internal.h"

#include <math.h>

static const double ladder[] = {10, 3, 1, 0.3, 0.1, 0.03, 0.01, 0.003, 0.001, 0.0003, 0};
enum { RUNGS = sizeof ladder / sizeof ladder[0], FIRST_RUNG = 4 };

size_t ridge_rungs(void)
{
    return RUNGS;
}

double ridge_rung(size_t rung)
{
    return ladder[rung];
}

size_t ridge_first_rung(void)
{
    return FIRST_RUNG;
}

/* One rung, from the best point so far; takes its place when it has less error by at least a relative 1e-4, below which
   another fit is not worth its time. */
static fescue_status rung_try(struct chooser *chooser, const struct solve_limits *limits, size_t rung,
                              struct candidate *best, struct candidate *trial, bool *gained)
{
    fescue_status status = FESCUE_OK;
    static const double worth = 1e-4;
    *gained = false;
    TRY(candidate_copy(chooser, best, trial));
    trial->rung = rung;
    TRY(candidate_fit(chooser, ladder[rung], limits, trial));
    *gained = trial->errors.rmse < best->errors.rmse * (1 - worth);
    if (*gained)
        candidate_swap(best, trial);
done:
    return status;
}

static fescue_status ladder_down(struct chooser *chooser, const struct solve_limits *limits, struct candidate *best,
                                 struct candidate *trial, bool *moved)
{
    fescue_status status = FESCUE_OK;
    bool gained = true, tried_none = false;
    *moved = false;
    while (gained && best->rung + 1 < RUNGS && !chooser_is_late(chooser)) {
        if (best->rung + 2 == RUNGS && tried_none)
            break;
        TRY(rung_try(chooser, limits, best->rung + 1, best, trial, &gained));
        *moved |= gained;
        if (gained && !tried_none && best->rung + 2 < RUNGS) {
            bool none_gained;
            tried_none = true;
            TRY(rung_try(chooser, limits, RUNGS - 1, best, trial, &none_gained));
        }
    }
done:
    return status;
}

static fescue_status ladder_up(struct chooser *chooser, const struct solve_limits *limits, struct candidate *best,
                               struct candidate *trial)
{
    fescue_status status = FESCUE_OK;
    bool gained = true;
    while (gained && best->rung > 0 && !chooser_is_late(chooser))
        TRY(rung_try(chooser, limits, best->rung - 1, best, trial, &gained));
done:
    return status;
}

double ridge_of(const struct chooser *chooser, const struct candidate *candidate)
{
    return chooser->options->ridge == FESCUE_AUTO ? ladder[candidate->rung] : chooser->options->ridge;
}

static bool is_searched(const struct chooser *chooser)
{
    return chooser->options->ridge == FESCUE_AUTO && chooser->hidden->count > 0;
}

fescue_status ridge_search(struct chooser *chooser, const struct solve_limits *limits, struct candidate *candidate)
{
    fescue_status status = FESCUE_OK;
    struct candidate trial = {0};
    bool moved = false;
    if (!is_searched(chooser))
        goto done;
    TRY(ladder_down(chooser, limits, candidate, &trial, &moved));
    if (!moved)
        TRY(ladder_up(chooser, limits, candidate, &trial));
done:
    candidate_free(chooser, &trial);
    return status;
}

fescue_status ridge_lower(struct chooser *chooser, const struct solve_limits *limits, struct candidate *candidate)
{
    fescue_status status = FESCUE_OK;
    struct candidate trial = {0};
    bool moved;
    if (is_searched(chooser))
        status = ladder_down(chooser, limits, candidate, &trial, &moved);
    candidate_free(chooser, &trial);
    return status;
}
