/* SPDX-License-Identifier: MIT
 *
 * Delimited text.
 */
#include "table/table_internal.h"

fescue_status delimited_read(struct stream *stream, const struct table_reading *reading, fescue_table *table)
{
    (void)reading, (void)table;
    return BAD_LINE_AT(stream, UINT64_C(1), "delimited text is not read yet, a Matrix Market file was expected");
}
