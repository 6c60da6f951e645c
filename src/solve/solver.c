/* SPDX-License-Identifier: MIT
 *
 * The list of solvers, and the words for why a run ended.
 */
#include "solve/solve_internal.h"

#include <string.h>

static const struct solver *const solvers[] = {&fixed_rank_cg_solver,
                                               &grassmann_cg_solver,
                                               &grassmann_trust_region_solver,
                                               &alternating_solver,
                                               &recursive_least_squares_solver,
                                               &grassmann_stochastic_solver,
                                               &grassmann_variance_reduced_solver,
                                               &subgradient_solver};

const struct solver *solver_at(size_t k)
{
    return k < sizeof solvers / sizeof *solvers ? solvers[k] : NULL;
}

const struct solver *solver_find(const char *name)
{
    for (size_t k = 0; solver_at(k) != NULL; k++)
        if (strcmp(solver_at(k)->name, name) == 0)
            return solver_at(k);
    return NULL;
}

const char *solver_name(const struct solver *solver)
{
    return solver->name;
}

bool solver_is_robust(const struct solver *solver)
{
    return solver->loss == LOSS_ABSOLUTE;
}

const char *solver_summary(const struct solver *solver)
{
    return solver->summary;
}

const char *solve_stop_word(enum solve_stop stop)
{
    static const char *const words[] = {
#define SOLVE_STOP_WORD_(name, word, text) [name] = word,
        SOLVE_STOP_LIST(SOLVE_STOP_WORD_)
#undef SOLVE_STOP_WORD_
    };
    return words[stop];
}

const char *solve_stop_text(enum solve_stop stop)
{
    static const char *const texts[] = {
#define SOLVE_STOP_TEXT_(name, word, text) [name] = text,
        SOLVE_STOP_LIST(SOLVE_STOP_TEXT_)
#undef SOLVE_STOP_TEXT_
    };
    return texts[stop];
}

bool solve_converged(enum solve_stop stop)
{
    return stop == STOP_GRADIENT || stop == STOP_EXACT || stop == STOP_CHANGE;
}
