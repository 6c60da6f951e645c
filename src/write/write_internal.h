/* SPDX-License-Identifier: MIT
 *
 * The inside of the write folder.
 */
#ifndef FESCUE_WRITE_INTERNAL_H
#define FESCUE_WRITE_INTERNAL_H

#include "write/write.h"

#include <jansson.h>

/* The value as text, and a line break. False when there was no memory for it (or the file has failed). */
bool json_put(struct outfile *file, json_t *value);

#endif
