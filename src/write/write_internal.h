/* SPDX-License-Identifier: MIT
 *
 * The inside of the write folder.
 */
#ifndef FESCUE_WRITE_INTERNAL_H
#define FESCUE_WRITE_INTERNAL_H

#include "write/write.h"

#include <jansson.h>

#endif
