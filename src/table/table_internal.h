/* SPDX-License-Identifier: MIT
 *
 * The inside of the table folder.
 */
#ifndef FESCUE_TABLE_INTERNAL_H
#define FESCUE_TABLE_INTERNAL_H

#include "table/table.h"

/* Rows and columns are counted in 32 bits, and one number is kept free to mean "none". */
#define TABLE_MOST_LINES (UINT32_MAX - 1)

/* ---- text_store: characters that stay where they are ----------------------------------------------------------- */

/* Many short texts in few blocks; a text never moves while the store lives, so pointers into it stay good. */
struct text_store {
    struct text_store *older;
    size_t used, size;
    char bytes[];
};
/* New NUL-terminated copy of `length` bytes; *store is created at the first call. */
fescue_status text_store_add(fescue_context *context, struct text_store **store, const char *text, size_t length,
                             char **out);
void text_store_free(fescue_context *context, struct text_store **store);

/* ---- labels ------------------------------------------------------------------------------------------------------ */

/* A growing list of labels: capacity belongs to labels->text. */
struct label_list {
    struct labels labels;
    uint32_t capacity;
    struct label_index *index; /* NULL: positions are not looked up */
};
/* Appends without looking whether it is there already. The index, when there is one, learns it. */
fescue_status label_list_add(fescue_context *context, struct label_list *list, const char *text, size_t length);
/* The position of a label, which is added when it is new. Creates the index at the first call. */
fescue_status label_list_find_or_add(fescue_context *context, struct label_list *list, const char *text, size_t length,
                                     uint32_t *position);
void label_list_free(fescue_context *context, struct label_list *list);
void labels_free(fescue_context *context, struct labels *labels);

/* ---- halves: one direction of the store ----------------------------------------------------------------------------
 *
 * Made by counting: half_open, half_count once for all cells, half_begin, half_place once for the same cells, half_end.
 */

/* Room for `count` cells; everything zero. */
fescue_status half_open(fescue_context *context, uint32_t lines, uint32_t length, uint64_t count,
                        enum fescue_precision precision, struct half *half);
void half_count(struct half *half, const uint32_t *line, uint64_t count);
void half_begin(struct half *half);
/* Cells of the same line keep the order in which they are placed. `value` has the half's precision. */
void half_place(struct half *half, const uint32_t *line, const uint32_t *across, const void *value, uint64_t count,
                enum fescue_precision precision);
void half_end(struct half *half);
/* Fills `to`, opened with room for the cells of `from`, with the same cells the other way; ascending within each line;
   equal cells keep their order. What `to` held is lost. */
void half_transpose(const struct half *from, struct half *to, enum fescue_precision precision);
/* Whether every line is strictly ascending: in order and without a cell twice. */
bool half_is_ascending(const struct half *half);
/* Looks for two cells at the same place, in lines of any order: *twice, and where. O(cells + lines). */
fescue_status half_find_twice(fescue_context *context, const struct half *half, bool *twice, uint32_t *line,
                              uint32_t *across);
/* Cuts the lines into blocks of roughly equal work. */
fescue_status half_cut(fescue_context *context, struct half *half);
void half_free(fescue_context *context, struct half *half);

/* With by_row filled in any order within the rows, and no cell twice: sorts it, makes by_column and the blocks. */
fescue_status cells_finish(fescue_context *context, struct cells *cells);

#endif
