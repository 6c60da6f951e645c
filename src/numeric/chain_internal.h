/* SPDX-License-Identifier: MIT
 *
 * The inside of the chain: links between steps and one elimination, shared by chain.c and chain_message.c. The symbols
 * stand at the top of chain.c.
 */
#ifndef FESCUE_NUMERIC_CHAIN_INTERNAL_H
#define FESCUE_NUMERIC_CHAIN_INTERNAL_H

#include "numeric/numeric.h"

/* Precision that stands for "held at 0": in units where data have size one no sum of them comes near it. */
#define PRECISION_OFF 1e30

/* E, f^2/q and 1/q between step t - 1 and t; at t = 0 no E, and 1/v. Number k stands at [k * stride]; those of equal
   steps are kept. */
struct chain_link {
    double step;
    size_t stride;
    double *off, *left, *right;
};
struct chain_link chain_link_carve(double *at, size_t size, size_t stride); /* 3 size stride doubles */
void chain_link_set(const struct chain *chain, size_t t, struct chain_link *link);

/* Where J g stands behind J, and both of step t in a room. */
size_t chain_side_at(size_t size);
static inline double *chain_room_at(const struct chain *chain, double *room, size_t t)
{
    return room + t * chain_room(chain->size);
}
size_t chain_line_at(const struct chain *chain, size_t t);

/* The data of step t. */
void chain_data_copy(const struct chain *chain, size_t t, double *precision, double *side);
/* precision += diag(own) - E J E, side += E J g: the message through `link` from the step whose J, J g are at `from`
   (NULL: there is none). */
void chain_message_add(size_t size, const struct chain_link *link, const double *own, const double *from,
                       double *precision, double *side);
/* At `room`: the inverse of `precision`, and its product with `side`. */
void chain_step_invert(size_t size, double *precision, double *side, double *room);

#endif
