/* SPDX-License-Identifier: MIT
 *
 * The two messages of a chain (chain.c): one elimination a step, each from the one before. Place p counts the steps of
 * a message in its own direction: t = p forward, t = m - 1 - p backward.
 *
 * A message forgets where it began: data and innovations damp what came before, as a rule within a few steps. So a long
 * chain is cut into eight pieces that go side by side in the lanes of batch.c, each but the first from a guess (the
 * stationary prior; no message at all), and then set right: from the end of each piece on, steps are done again one
 * by one until they agree with what stands there to AGREE of their size. Where nothing is forgotten (slow components,
 * long outages) that goes on through the whole piece, and the message is as exact as one that was never cut. The pieces
 * depend on the number of steps alone.
 */
#include "numeric/chain_internal.h"

#include <math.h>
#include <string.h>

/* Far above rounding, which the recursions damp as well, and far below what anybody reads off a covariance. */
#define AGREE 1e-11
/* Below this many steps pieces are not worth the corrections at their ends. */
enum { PIECES_FROM = 256 };

struct message {
    const struct chain *chain;
    bool is_forward;
    double *room;
    size_t count; /* places */
    double *precision, *side;
    struct chain_link link;
    double *scalar; /* chain_room */
};

static size_t step_of(const struct message *message, size_t p)
{
    return message->is_forward ? p : message->chain->steps - 1 - p;
}

/* The link towards the place before, and towards the next one: number t is that between t - 1 and t. */
static size_t near_link(const struct message *message, size_t t)
{
    return message->is_forward ? t : t + 1;
}

static size_t far_link(const struct message *message, size_t t)
{
    return message->is_forward ? t + 1 : t;
}

static bool has_near(const struct message *message, size_t p)
{
    return message->is_forward || p > 0;
}

static double *place_room(const struct message *message, size_t p)
{
    return chain_room_at(message->chain, message->room, step_of(message, p));
}

/* J and J g of place p, from the place before, into `out`. */
static void place_solve(struct message *message, size_t p, double *out)
{
    const struct chain *chain = message->chain;
    struct chain_link *link = &message->link;
    size_t d = chain->size, t = step_of(message, p);
    const double *from = p > 0 ? place_room(message, p - 1) : NULL;
    chain_data_copy(chain, t, message->precision, message->side);
    if (has_near(message, p)) {
        chain_link_set(chain, near_link(message, t), link);
        chain_message_add(d, link, message->is_forward ? link->right : link->left, from, message->precision,
                          message->side);
    }
    chain_link_set(chain, far_link(message, t), link);
    const double *far = message->is_forward ? link->left : link->right;
    for (size_t k = 0; k < d; k++)
        message->precision[packed_size(k) + k] += far[k];
    chain_step_invert(d, message->precision, message->side, out);
}

/* ---- pieces side by side ---------------------------------------------------------------------------------------- */

struct lanes {
    double *precision, *side, *inverse; /* batches; of the place before, inverse and side are J and J g */
    double *next;                       /* a batch: the right side of this place */
    struct chain_link link[BATCH_LANES];
    double *beyond; /* where lanes put what lies behind their piece */
    size_t piece;   /* places */
};

#define EACH_LANE for (size_t lane = 0; lane < BATCH_LANES; lane++)

/* Data of one place of every lane. */
static void lanes_load(const struct message *message, size_t step, const struct lanes *lanes)
{
    const struct chain *chain = message->chain;
    size_t packed = packed_size(chain->size);
    EACH_LANE
    {
        size_t p = lane * lanes->piece + step, line = 0;
        line = chain_line_at(chain, step_of(message, p < message->count ? p : message->count - 1));
        const double *precision = chain->precision + line * chain->precision_stride;
        const double *side = chain->mean + line * chain->mean_stride;
        for (size_t at = 0; at < packed; at++)
            lanes->precision[at * BATCH_LANES + lane] = precision[at];
        for (size_t k = 0; k < chain->size; k++)
            lanes->next[k * BATCH_LANES + lane] = side[k];
    }
}

/* The message from the place before in every lane: precision += diag(own) - E J E, next += E J g. */
NUMERIC_VERSIONS
static void lanes_message(size_t size, const double *restrict off, const double *restrict own,
                          const struct lanes *lanes)
{
    double *restrict precision = lanes->precision, *restrict next = lanes->next;
    const double *restrict inverse = lanes->inverse, *restrict side = lanes->side;
    for (size_t k = 0, at = 0; k < size; k++) {
        const double *mine = off + k * BATCH_LANES;
        for (size_t l = 0; l <= k; l++, at += BATCH_LANES)
            EACH_LANE precision[at + lane] -= mine[lane] * off[l * BATCH_LANES + lane] * inverse[at + lane];
        EACH_LANE precision[at - BATCH_LANES + lane] += own[k * BATCH_LANES + lane];
        EACH_LANE next[k * BATCH_LANES + lane] += mine[lane] * side[k * BATCH_LANES + lane];
    }
}

static void lanes_links(const struct message *message, size_t step, bool is_near, struct lanes *lanes)
{
    EACH_LANE
    {
        size_t p = lane * lanes->piece + step, t = step_of(message, p < message->count ? p : message->count - 1);
        chain_link_set(message->chain, is_near ? near_link(message, t) : far_link(message, t), &lanes->link[lane]);
    }
}

/* The first place of every lane: the first piece begins as the message does, the others with the stationary prior or
   nothing. */
static void lanes_begin(const struct message *message, const struct lanes *lanes)
{
    const struct chain *chain = message->chain;
    for (size_t k = 0; message->is_forward && k < chain->size; k++) {
        double own = chain->law[k].variance > 0 ? 1 / chain->law[k].variance : PRECISION_OFF;
        EACH_LANE lanes->precision[(packed_size(k) + k) * BATCH_LANES + lane] += own;
    }
}

/* False when a pivot broke down. */
static bool lanes_step(const struct message *message, const struct batch_kernel *kernel, size_t step,
                       struct lanes *lanes)
{
    size_t d = message->chain->size;
    const struct chain_link *link = &lanes->link[0];
    double *to[BATCH_LANES];
    lanes_load(message, step, lanes);
    if (step == 0) {
        lanes_begin(message, lanes);
    } else {
        lanes_links(message, step, true, lanes);
        lanes_message(d, link->off, message->is_forward ? link->right : link->left, lanes);
    }
    lanes_links(message, step, false, lanes);
    const double *far = message->is_forward ? link->left : link->right;
    for (size_t k = 0; k < d; k++)
        EACH_LANE lanes->precision[(packed_size(k) + k) * BATCH_LANES + lane] += far[k * BATCH_LANES + lane];
    memcpy(lanes->side, lanes->next, d * BATCH_LANES * sizeof *lanes->side);
    if (packed_batch_solve(kernel, lanes->precision, d, lanes->side, lanes->inverse) != 0)
        return false;
    EACH_LANE
    {
        size_t p = lane * lanes->piece + step;
        to[lane] = step < lanes->piece && p < message->count ? place_room(message, p) : lanes->beyond;
    }
    packed_batch_unpack(kernel, lanes->inverse, packed_size(d), to);
    EACH_LANE to[lane] += chain_side_at(d);
    packed_batch_unpack(kernel, lanes->side, d, to);
    return true;
}

/* All pieces, each from its own beginning. */
static bool pieces_solve(const struct message *message, double *work)
{
    size_t d = message->chain->size;
    struct lanes lanes = {.piece = (message->count + BATCH_LANES - 1) / BATCH_LANES};
    const struct batch_kernel *kernel = batch_kernel_choose();
    lanes.precision = work;
    lanes.inverse = lanes.precision + batch_size(packed_size(d));
    lanes.side = lanes.inverse + batch_size(packed_size(d));
    lanes.next = lanes.side + batch_size(d);
    double *links = lanes.next + batch_size(d);
    EACH_LANE
    {
        lanes.link[lane] = chain_link_carve(links + lane, d, BATCH_LANES);
    }
    lanes.beyond = links + 3 * d * BATCH_LANES;
    for (size_t step = 0; step < lanes.piece; step++)
        if (!lanes_step(message, kernel, step, &lanes))
            return false;
    return true;
}

/* ---- the whole -------------------------------------------------------------------------------------------------- */

static bool is_agreed(size_t size, const double *a, const double *b)
{
    const double *a_side = a + chain_side_at(size), *b_side = b + chain_side_at(size);
    double most = 0;
    for (size_t k = 0; k < size; k++) {
        double spread = a[packed_size(k) + k];
        most = fmax(most, spread);
        if (!(fabs(a_side[k] - b_side[k]) <= AGREE * (sqrt(spread) + fabs(a_side[k]))))
            return false;
    }
    for (size_t at = 0; at < packed_size(size); at++)
        if (!(fabs(a[at] - b[at]) <= AGREE * most))
            return false;
    return true;
}

/* Places from `first` on, until they agree with what stands there. */
static void places_correct(struct message *message, size_t first)
{
    size_t room = chain_room(message->chain->size);
    for (size_t p = first; p < message->count; p++) {
        double *at = place_room(message, p);
        place_solve(message, p, message->scalar);
        if (is_agreed(message->chain->size, message->scalar, at))
            return;
        memcpy(at, message->scalar, room * sizeof *at);
    }
}

static void message_run(const struct chain *chain, bool is_forward, double *work)
{
    size_t d = chain->size;
    struct message message = {.chain = chain, .is_forward = is_forward, .count = chain->steps - 1};
    message.room = is_forward ? chain->forward : chain->backward;
    message.scalar = work;
    message.precision = work + chain_room(d);
    message.side = message.precision + packed_size(d);
    message.link = chain_link_carve(message.side + d, d, 1);
    if (message.count >= PIECES_FROM && pieces_solve(&message, message.link.off + 3 * d)) {
        size_t piece = (message.count + BATCH_LANES - 1) / BATCH_LANES;
        for (size_t first = piece; first < message.count; first += piece)
            places_correct(&message, first);
        return;
    }
    for (size_t p = 0; p < message.count; p++)
        place_solve(&message, p, place_room(&message, p));
}

void chain_forward(const struct chain *chain, double *work)
{
    message_run(chain, true, work);
}

void chain_backward(const struct chain *chain, double *work)
{
    message_run(chain, false, work);
}
