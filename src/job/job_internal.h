/* SPDX-License-Identifier: MIT
 *
 * The inside of the job folder.
 */
#ifndef FESCUE_JOB_INTERNAL_H
#define FESCUE_JOB_INTERNAL_H

#include "job/job.h"

/* ---- one option ------------------------------------------------------------------------------------------------- */

/* Reads text (NULL: none was given) as a value of this option into its field. False, and the field untouched, when it
   is not one. */
bool option_value_parse(const struct fescue_option *option, const char *text, void *field);
/* What the option takes, as the end of a sentence that begins "expected ". */
void option_value_expected(const struct fescue_option *option, char *text, size_t size);

#endif
