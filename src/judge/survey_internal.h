/* SPDX-License-Identifier: MIT
 *
 * The parts of the survey, and what they share; each adds its lines to one page.
 */
#ifndef FESCUE_SURVEY_INTERNAL_H
#define FESCUE_SURVEY_INTERNAL_H

#include "judge/tracks.h"

#include <stdio.h>

enum { NAMED_MOST = 5, ODD_MOST = 8 }; /* labels of a list, of a list of oddities; the rest is counted */

struct survey {
    const fescue_table *table;
    const struct cells *cells;
    const struct time_axis *time; /* along none where there is no clock */
    struct page *page;
    uint32_t *row_core, *column_core;               /* core numbers */
    double low, high;                               /* of the values */
    double alike;                                   /* chance that two cells have the same value */
    bool is_scale;                                  /* few different values: likely a closed scale of scores */
    uint64_t rank_most;                             /* the largest rank that the pattern leaves worth trying */
    uint64_t noticed;                               /* oddities told so far */
    uint32_t *row_block, *column_block, main_block; /* connected blocks, from 1, and the one with most cells */

    /* along the order: time, else the side whose holes come in runs, else the rows as they came */
    struct hole_shape shape;
    struct tracks tracks;
    bool has_order;    /* that of time or of the input */
    bool is_ordered;   /* by time, or holes come in runs */
    uint32_t *line_of; /* of each place */
    const struct labels *place_labels, *sensor_labels;
    const char *places_word, *sensor_word, *sensors_word; /* "rows", "column", "columns" */
};
fescue_status survey_values(struct survey *survey);
void survey_lines(struct survey *survey);
fescue_status survey_blocks(struct survey *survey);
fescue_status survey_ranks(struct survey *survey);
fescue_status survey_holes(struct survey *survey);   /* charts of the holes */
fescue_status survey_missing(struct survey *survey); /* whether being missing goes with the value */
fescue_status survey_series(struct survey *survey);  /* late, early, stuck */
fescue_status survey_twins(struct survey *survey);   /* duplicates */
fescue_status survey_far(struct survey *survey);     /* wildly outlying cells */

/* Begins the line of an oddity: "2 columns". */
void survey_notice(struct survey *survey, uint64_t count, const char *one, const char *many);
void survey_label(const struct survey *survey, const struct labels *labels, uint32_t line, const char *before);
/* Ends a list of `found`, of which ODD_MOST at most were named. */
void survey_more(const struct survey *survey, uint64_t found);

#endif
