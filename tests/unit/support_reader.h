/* SPDX-License-Identifier: MIT
 *
 * Tables from small texts, for the tests of the readers.
 */
#ifndef FESCUE_TESTS_SUPPORT_READER_H
#define FESCUE_TESTS_SUPPORT_READER_H

#include "support.h"
#include "table/table.h"

/* Writes the bytes into the bench's folder as "input" and reads them; reading may be NULL. */
fescue_status bytes_read(struct bench *bench, const void *bytes, size_t count, const struct table_reading *reading,
                         fescue_table **out);
/* A text that must be read: the table, which the caller destroys. */
fescue_table *text_read(struct bench *bench, const char *text, const struct table_reading *reading);
/* A text that must be refused, with the sentence "PATH: " and `sentence`. */
void text_refused(struct bench *bench, const char *text, const struct table_reading *reading, const char *sentence);
void bytes_refused(struct bench *bench, const void *bytes, size_t count, const struct table_reading *reading,
                   const char *sentence);

/* All cells in row order, one a line: "row|column|text", labels and texts as they are kept. */
void table_check(const fescue_table *table, const char *cells);
/* The same sides, cells and values, to the bit. */
void tables_equal(const fescue_table *a, const fescue_table *b);

/* Whether the table is one, whatever it was read from: lines in order, finite values, labels, and texts that read as
   their values. */
bool table_is_sound(const fescue_table *table);

/* Gzip members in memory, one behind the other; the caller frees *bytes with free(). */
void gzip_append(char **bytes, size_t *count, const void *text, size_t length);

#endif
