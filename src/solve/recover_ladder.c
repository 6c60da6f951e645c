/* SPDX-License-Identifier: MIT
 *
 * Starting strategy: all components at once, from a strong ridge down to none.
 *
 * From the spectral start, with s_k the singular values relative to the first and p the share seen, on each rung
 *
 *     ridge_k = mu p / (s_k^2 + 0.3 mu),      mu = 1, 0.9, 0.81, ...
 *
 * with three trust region steps, the frame turned and the ridges set anew before each. Components with s_k^2 well above
 * mu go free; those below are held, at 3 p, which shrinks them to a quarter but does not kill them: they wait until mu
 * has come down to them, and rise when the residual calls for them. So a flat spectrum comes as a whole, as with an
 * even ridge, and a falling one by and by, as with growth; and nothing has to be told which it is. The penalty is
 * the tangent of mu log(s^2 + 0.3 mu), a smoothed log-determinant whose smoothing goes down with its strength (as in
 * reweighted least squares: Mohan, Fazel 2012).
 *
 * Recovered of 8 tables of 300 x 300, rank 5, 1.3 times as many cells as unknowns, condition 1, 3, 10, 1000:
 * 8, 8, 8, 6; an even ridge with the same rungs: 8, 2, 0, 0. One step a rung: 7, 7, 8; a factor of 0.8: 7, 7, 8, 1.
 *
 * The ladder is left when Newton's steps can finish (descent_is_near) or when ten rungs did not lower the residual by
 * one per cent: what is left of it is noise, or a minimum that is not the table's.
 */
#include "solve/recover_internal.h"

#include <math.h>

static const struct trust_rules rules = {.accuracy = 0.1, .inner_most = 200, .exact = false};
static const double smoothing = 0.3;
static const double last_rung = 1e-5; /* beyond a condition of 300 growth does better */
enum { STILL_RUNGS = 10 };
static const double still = 0.99, near = 0.3;

static fescue_status rung_step(struct descent *descent, double mu)
{
    struct projection *p = &descent->projection;
    const struct cells *target = &descent->field.problem->target;
    double density = (double)target->count / ((double)target->rows * (double)target->columns);
    bool moved;
    fescue_status status = descent_turn(descent);
    if (status != FESCUE_OK)
        return status;
    for (size_t k = 0; k < p->rank; k++) {
        double s = p->spectrum[0] > 0 ? p->spectrum[k] / p->spectrum[0] : 1;
        p->ridge[k] = mu * density / (s * s + smoothing * mu);
    }
    trust_start(&descent->trust);
    return trust_step(&descent->trust, &rules, &moved);
}

fescue_status recover_ladder(const struct recover_request *request, struct low_rank *out)
{
    struct descent descent;
    double lowest = INFINITY;
    int waited = 0;
    bool late = false, open = false;
    fescue_status status = start_spectral(request->problem, request->rank, request->seed, out);
    if (status != FESCUE_OK || request->rank == 0)
        return status;
    TRY(descent_open(request->problem, out, &descent));
    open = true;
    for (double mu = 1; mu > last_rung && waited < STILL_RUNGS && !late; mu *= request->weight) {
        for (int step = 0; step < request->steps && !late; step++) {
            TRY(recover_pause(request, &late));
            TRY(rung_step(&descent, mu));
        }
        if (descent_is_near(&descent, near))
            break;
        waited = descent.projection.square < still * lowest ? 0 : waited + 1;
        if (waited == 0)
            lowest = descent.projection.square;
    }
    TRY(projection_write(&descent.projection, out));
done:
    if (open)
        descent_close(&descent);
    return status;
}
