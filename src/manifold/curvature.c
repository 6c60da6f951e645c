/* SPDX-License-Identifier: MIT
 *
 * What curvature costs a first-order method, and the step lengths that follow (PMLR 49 (2016), 1617-1638).
 *
 * In a geodesic triangle with sides a, b, c and the angle A between b and c, where the sectional curvature is at least
 * kappa,
 *     a^2 <= zeta(kappa, c) b^2 + c^2 - 2 b c cos A,      zeta(kappa, c) = sqrt|kappa| c / tanh(sqrt|kappa| c)
 * for kappa < 0, and zeta = 1, as in the plane, where kappa >= 0. This takes the place of the law of cosines in the
 * proofs, and zeta comes out in the rates and in the steps of the methods without smoothness. The Grassmann manifold
 * has kappa >= 0, hence zeta = 1; the formula is for bounds below zero.
 */
#include "manifold/manifold.h"

#include <assert.h>
#include <math.h>

/* x / tanh(x) = 1 + x^2/3 - x^4/45 + ...: below this x the third term, 2e-18, is less than half a unit in the last
   place of the sum, and the quotient, which fails at 0, is not needed. */
static const double series_below = 1e-4;

double curvature_zeta(double curvature, double radius)
{
    assert(radius >= 0);
    if (curvature >= 0)
        return 1;
    double x = sqrt(-curvature) * radius;
    return x < series_below ? 1 + x * x / 3 : x / tanh(x);
}

double step_smooth(double smoothness)
{
    assert(smoothness > 0);
    return 1 / smoothness;
}

double step_subgradient(double diameter, double gradient_most, double zeta, uint64_t t)
{
    assert(diameter > 0 && gradient_most > 0 && zeta >= 1 && t >= 1);
    return diameter / (gradient_most * sqrt(zeta * (double)t));
}

double step_strongly_convex(double strong_convexity, uint64_t t)
{
    assert(strong_convexity > 0 && t >= 1);
    return 2 / (strong_convexity * ((double)t + 1));
}

double average_weight(uint64_t t)
{
    assert(t >= 1);
    return 1 / (double)t;
}
