/* SPDX-License-Identifier: MIT
 *
 * One job from options to results: the pipeline behind fescue.h.
 *
 *   options   the option tables, parsing and bounds
 *   fill      table --> hold-out --> choice --> final fit --> results
 *   checkpoint  what makes a checkpoint one of this very job
 *   place       a hold on a directory for results
 *   sow       synthetic tables with known truth; scene_fen, scene_cider: the invented scenes
 *   text      text for people
 *   api       the public functions, each a few lines over the folders below
 */
#ifndef FESCUE_JOB_H
#define FESCUE_JOB_H

#include "write/write.h"

/* ---- text for people ----------------------------------------------------------------------------------------------
 */

/* A text that grows. Failures are sticky: text_finish tells. */
struct text {
    fescue_context *context;
    fescue_status status;
    size_t length, capacity;
    char *bytes;
};
/* Formats are for texts and whole numbers: what they print does not depend on the locale then. Reals go in by
   real_to_words. At most 1023 bytes at once. */
void text_add(struct text *text, const char *format, ...) __attribute__((format(printf, 2, 3)));
/* Words in lines of at most 80. */
void words_wrap(struct text *text, const char *words);
/* Hands over the text, or frees it and tells the first failure. */
fescue_status text_finish(struct text *text, char **out);
/* value to so many significant digits, at most 15, trailing zeros dropped, whatever the locale. */
const char *real_to_words(double value, int digits, char text[32]);

/* ---- options that bear on results ---------------------------------------------------------------------------------
 */

enum { OPTIONS_SIZE = 4096 };
/* Whether results depend on it, but by being ended (limits of time and memory). */
bool option_is_bearing(const struct fescue_option *option);
/* All of those, "name=value" a line; and one more line at text + *used. */
void options_words(const struct fescue_options *options, char text[OPTIONS_SIZE]);
void option_line_add(char text[OPTIONS_SIZE], size_t *used, const char *name, const char *value);

#endif
