/* SPDX-License-Identifier: MIT
 *
 * The inside of what is determined: the lines of the core and how far they have been found to hang together (peel,
 * thin), and random motions of the rest that no seen cell notices (null).
 *
 * Rows and columns are lines of one numbering, rows first. Each line v has a factor f_v of `stride` = rank + 2 numbers,
 * a row (u, 0, s) and a column (v, t, 0), u and v random of `rank` numbers, t = 1 with row effects and s = 1 with
 * column effects, else 0. A motion gives each line as many numbers z_v, a row (du, da, 0) and a column (dv, 0, db), and
 * moves the cell of row i and column j by
 *
 *     z_i . f_j + z_j . f_i  =  du . v + da + u . dv + db,
 *
 * the derivative of u . v + a + b with those effects that there are.
 */
#ifndef FESCUE_DETERMINED_INTERNAL_H
#define FESCUE_DETERMINED_INTERNAL_H

#include "judge/judge_internal.h"

enum { RANK_MOST = 256 };

enum line_state {
    LINE_OUT,     /* not in the core */
    LINE_OPEN,    /* nothing known yet, or known to move */
    LINE_SETTLED, /* hangs together with the other settled lines of its block */
    LINE_ASIDE    /* left out for the time being */
};

struct rigid {
    fescue_context *context;
    const struct cells *cells;
    size_t rank, stride;
    size_t row_need, column_need; /* unknowns of a row, of a column */
    uint64_t lines;
    uint32_t blocks;
    uint32_t *block;         /* of each line: its block of the core, from 1; 0 outside */
    uint64_t *member, *from; /* the lines of block b are member[from[b-1]] .. member[from[b] - 1] */
    uint64_t *frame;         /* rank + 1 a block: the lines that its motions are measured against */
    uint32_t *frame_size;    /* how many those are */
    uint8_t *is_free;        /* one a block: no line of it is settled, not even the frame */
    uint8_t *state;          /* of each line, enum line_state */
};

/* The lines that have a cell with this one. */
struct ties {
    const uint32_t *across;
    uint64_t count, shift; /* line across[k] + shift */
};
struct ties rigid_ties(const struct rigid *rigid, uint64_t line);
void rigid_factor(const struct rigid *rigid, uint64_t line, double *factor);

/* Settles, in each block that has no settled line, what hangs together by counting alone; a block of which that is less
   than half is free. */
fescue_status peel_run(struct rigid *rigid);
/* Goes on from what is settled. */
fescue_status peel_on(struct rigid *rigid);

/* Where the open lines have too many cells for a motion: settles what it can from a part of them that is dense enough,
   and by peeling on from there. */
fescue_status thin_run(struct rigid *rigid);
/* Cells of the open lines, as seen from them, times stride. */
double rigid_work(const struct rigid *rigid);
bool rigid_is_affordable(double work);

/* A random motion of the open lines that moves no seen cell: numbers for the lines of `moving`. */
struct motion {
    uint64_t lines;
    uint64_t *line;  /* ascending */
    double *numbers; /* lines x stride */
    double typical;  /* rms over the seen cells of what a random motion does */
    bool is_found;   /* else there was no time for it, and the numbers say nothing */
};
/* Makes it (which = 0, 1: another one) and settles the lines that do not move. */
fescue_status null_motion(struct rigid *rigid, uint32_t which, struct motion *motion);
void motion_free(fescue_context *context, struct motion *motion);

#endif
