/* SPDX-License-Identifier: MIT
 *
 * A chain of vectors in time whose components are AR(1), each step seen through its own Gaussian data: the posterior
 * of x_0 .. x_(m-1), d numbers each, with f_tk = rho_k^(t_t - t_(t-1)) and q_tk = v_k (1 - f_tk^2),
 *
 *     x_0k ~ N(0, v_k)     x_tk = f_tk x_(t-1)k + N(0, q_tk)     data: exp(-1/2 x_t' D_t x_t + b_t' x_t)
 *
 * Its precision is block tridiagonal: D_t plus diagonals on the diagonal, the diagonal matrices -E_t = -f_t/q_t beside
 * it. A message from the left and one from the right, each one elimination a step,
 *
 *     J_t = (D_t + M_t + f_(t+1)^2/q_(t+1))^-1     M_(t+1) = 1/q_(t+1) - E_(t+1) J_t E_(t+1)           M_0 = 1/v
 *     K_t = (D_t + N_t + 1/q_t)^-1                 N_(t-1) = f_t^2/q_t - E_t K_t E_t                    N_(m-1) = 0
 *
 * (with the right sides carried along) give every marginal on its own: Cov(x_t) = (D_t + M_t + N_t)^-1, and
 * Cov(x_(t-1), x_t) = J_(t-1) E_t Cov(x_t), of which the diagonal is kept. (Two-filter smoothing: Fraser, Potter 1969,
 * "The optimum linear smoother as a combination of two optimum linear filters", here in information form.)
 *
 * Cost: three factorisations and inverses of size d a step, O(m d^3); the two messages (chain_message.c) run beside one
 * another, the marginals in batches of eight steps. Nothing depends on the number of workers. As E is diagonal a
 * message costs no product of matrices. Precisions are differences: at rho = 0.9999 some four digits of sixteen are
 * lost, which is why rho stays below that (kalman_learn).
 */
#include "numeric/chain_internal.h"

#include <math.h>
#include <string.h>

size_t chain_side_at(size_t size)
{
    return (packed_size(size) + 7) / 8 * 8;
}

size_t chain_room(size_t size)
{
    return chain_side_at(size) + (size + 7) / 8 * 8;
}

size_t chain_work(size_t size)
{
    size_t eight = 2 * batch_size(packed_size(size)) + 2 * batch_size(size) + 3 * size * BATCH_LANES;
    return eight + 2 * chain_room(size) + packed_size(size) + 4 * size;
}

struct chain_link chain_link_carve(double *at, size_t size, size_t stride)
{
    return (struct chain_link){
        .step = -1, .stride = stride, .off = at, .left = at + size * stride, .right = at + 2 * size * stride};
}

void chain_link_set(const struct chain *chain, size_t t, struct chain_link *link)
{
    double step = t > 0 ? kalman_step(chain->time[t - 1], chain->time[t]) : 0;
    if (step == link->step)
        return;
    link->step = step;
    for (size_t k = 0; k < chain->size; k++) {
        const struct kalman_law *law = &chain->law[k];
        double f = t > 0 && law->variance > 0 ? pow(law->correlation, step) : 0;
        double right = law->variance > 0 ? 1 / (law->variance * (1 - f * f)) : PRECISION_OFF;
        link->right[k * link->stride] = right;
        link->off[k * link->stride] = f * right;
        link->left[k * link->stride] = f * f * right;
    }
}

size_t chain_line_at(const struct chain *chain, size_t t)
{
    return chain->line != NULL ? chain->line[t] : t;
}

void chain_message_add(size_t size, const struct chain_link *link, const double *own, const double *from,
                       double *precision, double *side)
{
    for (size_t k = 0; k < size; k++)
        precision[packed_size(k) + k] += own[k];
    if (from == NULL)
        return;
    const double *image = from + chain_side_at(size);
    for (size_t k = 0, at = 0; k < size; k++) {
        double scale = link->off[k];
        for (size_t l = 0; l <= k; l++, at++)
            precision[at] -= scale * link->off[l] * from[at];
        side[k] += scale * image[k];
    }
}

void chain_data_copy(const struct chain *chain, size_t t, double *precision, double *side)
{
    size_t line = chain_line_at(chain, t);
    memcpy(precision, chain->precision + line * chain->precision_stride, packed_size(chain->size) * sizeof *precision);
    memcpy(side, chain->mean + line * chain->mean_stride, chain->size * sizeof *side);
}

void chain_step_invert(size_t size, double *precision, double *side, double *room)
{
    packed_cholesky(precision, size);
    packed_solve(precision, size, side);
    packed_inverse(precision, size, room);
    memcpy(room + chain_side_at(size), side, size * sizeof *side);
}

/* Diagonal of J_(t-1) E_t C_t. */
static void cross_write(size_t size, const struct chain_link *link, const double *from, const double *covariance,
                        double *cross)
{
    for (size_t k = 0; k < size; k++)
        cross[k] = 0;
    if (from == NULL)
        return;
    for (size_t k = 0, at = 0; k < size; k++)
        for (size_t l = 0; l <= k; l++, at++) {
            double product = from[at] * covariance[at];
            cross[k] += product * link->off[l];
            if (l < k)
                cross[l] += product * link->off[k];
        }
}

/* Precision and right side of the marginal of step t. */
static void marginal_system(const struct chain *chain, size_t t, double *precision, double *side,
                            struct chain_link *link)
{
    size_t d = chain->size;
    chain_data_copy(chain, t, precision, side);
    if (t + 1 < chain->steps) {
        chain_link_set(chain, t + 1, link);
        chain_message_add(d, link, link->left, chain_room_at(chain, chain->backward, t + 1), precision, side);
    }
    chain_link_set(chain, t, link);
    chain_message_add(d, link, link->right, t > 0 ? chain_room_at(chain, chain->forward, t - 1) : NULL, precision,
                      side);
}

/* A lane whose pivots broke down, again and with a lift. */
static void lane_solve(const struct chain *chain, size_t t, double *precision, double *side, struct chain_link *link,
                       double *room)
{
    marginal_system(chain, t, precision, side, link);
    chain_step_invert(chain->size, precision, side, room);
}

void chain_marginals(const struct chain *chain, const struct batch_kernel *kernel, size_t first, double *out,
                     double *work)
{
    size_t d = chain->size, packed = packed_size(d), room = chain_room(d);
    size_t left = chain->steps - first, count = left < BATCH_LANES ? left : BATCH_LANES;
    double *factor = work, *inverse = factor + batch_size(packed), *mean = inverse + batch_size(packed);
    double *precision = mean + batch_size(d), *side = precision + packed, *to[BATCH_LANES];
    struct chain_link link = chain_link_carve(side + d, d, 1);
    for (size_t lane = 0; lane < BATCH_LANES; lane++) { /* beyond the last step: that one again */
        marginal_system(chain, first + (lane < count ? lane : count - 1), precision, side, &link);
        for (size_t at = 0; at < packed; at++)
            factor[at * BATCH_LANES + lane] = precision[at];
        for (size_t k = 0; k < d; k++)
            mean[k * BATCH_LANES + lane] = side[k];
        to[lane] = out + lane * room;
    }
    unsigned broken = packed_batch_solve(kernel, factor, d, mean, inverse);
    packed_batch_unpack(kernel, inverse, packed, to);
    for (size_t lane = 0; lane < BATCH_LANES; lane++)
        to[lane] += chain_side_at(d);
    packed_batch_unpack(kernel, mean, d, to);
    for (size_t lane = 0; lane < count; lane++) {
        size_t t = first + lane;
        double *own = out + lane * room;
        if (broken >> lane & 1)
            lane_solve(chain, t, precision, side, &link, own);
        chain_link_set(chain, t, &link);
        cross_write(d, &link, t > 0 ? chain_room_at(chain, chain->forward, t - 1) : NULL, own,
                    chain->cross + chain_line_at(chain, t) * d);
    }
}

const double *chain_mean(const struct chain *chain, const double *out, size_t lane)
{
    return out + lane * chain_room(chain->size) + chain_side_at(chain->size);
}

const double *chain_covariance(const struct chain *chain, const double *out, size_t lane)
{
    return out + lane * chain_room(chain->size);
}
