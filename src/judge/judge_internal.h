/* SPDX-License-Identifier: MIT
 *
 * The inside of judge: the graph of observed cells (core, blocks), offsets again (refit), order statistics (order), a
 * text that grows (page).
 */
#ifndef FESCUE_JUDGE_INTERNAL_H
#define FESCUE_JUDGE_INTERNAL_H

#include "judge/judge.h"

/* The lines of the table are the vertices of a bipartite graph, its observed cells the edges. */

/* The core number of each line: the largest k such that the line has at least k cells among the lines whose number is
   also at least k. The k-core is the lines with numbers >= k. */
fescue_status core_numbers(fescue_context *context, const struct cells *cells, uint32_t *row_core,
                           uint32_t *column_core);

/* The largest part of the graph in which each row has at least row_least cells and each column column_least: 1 for a
   line in it, else 0. */
fescue_status core_trim(fescue_context *context, const struct cells *cells, size_t row_least, size_t column_least,
                        uint32_t *row_in, uint32_t *column_in);

/* Connected blocks among the lines whose core number is at least k: 1, 2, ... in the order of their first rows; 0 for
   a line outside, or (k = 0) without cells. *blocks is how many there are. */
fescue_status blocks_find(fescue_context *context, const struct cells *cells, const uint32_t *row_core,
                          const uint32_t *column_core, uint32_t k, uint32_t *row_block, uint32_t *column_block,
                          uint32_t *blocks);

/* Improves offsets, those of the cells, towards those of what the point (in the table's units) leaves of them. */
fescue_status refit_sweep(fescue_context *context, const struct cells *cells, const struct low_rank *point,
                          struct offsets *offsets);

/* The number at `place` (from 0) when all are sorted; no NaN among them. value_at(data, k) is the k-th. O(count). */
typedef double order_value(const void *data, uint64_t k);
double order_pick(order_value *value_at, const void *data, uint64_t count, uint64_t place);

/* A text that grows. A failure sticks: later additions do nothing, page_close tells. */
struct page {
    fescue_context *context;
    char *bytes;
    size_t length, capacity;
    fescue_status status;
};
void page_add(struct page *page, const char *format, ...) __attribute__((format(printf, 2, 3)));
/* A count with its noun: "1 row", "12 rows". */
void page_count(struct page *page, uint64_t count, const char *one, const char *many);
/* A label from the input, made safe to show in a terminal and cut when it is long. */
void page_label(struct page *page, const char *label);
/* An argument of a command line, quoted for a shell where it needs to be; characters that cannot be shown become '?'.
 */
void page_argument(struct page *page, const char *argument);
/* Breaks the lines longer than WIDTH from byte `from` on, at blanks; what goes on is indented. */
void page_wrap(struct page *page, size_t from);
/* Hands the bytes over (owned by the caller), or frees them and returns the failure. */
fescue_status page_close(struct page *page, char **out);

#endif
