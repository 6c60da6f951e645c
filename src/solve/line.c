/* SPDX-License-Identifier: MIT
 *
 * How far to go along a direction: the rules that all descent solvers share.
 *
 * A step t along a line with f(0) = f0 and f'(0) = s < 0 is taken when
 *
 *     f(t) <= f0 + c t s + slack,       slack = rounding |R| (|T| + |R|)
 *
 * (Armijo 1966). The slack is what rounding of the cells' residuals may move the objective by: near the minimum of a
 * noisy table the decrease that is still to be had is smaller than that, and without it no solver could bring the
 * gradient below the square root of epsilon. Otherwise the step is cut to the minimum of the parabola through f0, s
 * and f(t), held between a tenth and a half of t (Dennis, Schnabel 1983, section 6.3.2).
 */
#include "solve/solve_internal.h"

#include <math.h>

/* Small, so that the exact step of a nearly quadratic objective (ratio 1/2) is never refused. */
static const double armijo = 1e-4;

struct line line_start(const struct problem *problem, const struct solve_measure *measure, double slope)
{
    double residual = sqrt(measure->square);
    return (struct line){.objective = measure->objective,
                         .slope = slope,
                         .slack = problem->rounding * residual * (problem->norm + residual)};
}

bool line_accepts(const struct line *line, double t, double objective)
{
    return objective <= line->objective + armijo * t * line->slope + line->slack;
}

double line_shorten(const struct line *line, double t, double objective)
{
    double rise = objective - line->objective - t * line->slope;
    double shorter = -0.5 * line->slope * t * (t / rise);
    if (!(shorter > 0.1 * t)) /* also when the objective overflowed or is not a number */
        return 0.1 * t;
    return shorter > 0.5 * t ? 0.5 * t : shorter;
}
