/* SPDX-License-Identifier: MIT
 *
 * One job from options to results: the pipeline behind fescue.h.
 *
 *   options   the option tables, parsing and bounds
 *   fill      table --> hold-out --> choice --> final fit --> results
 *   sow       synthetic tables with known truth; scene_fen, scene_cider: the invented scenes
 *   api       the public functions, each a few lines over the folders below
 */
#ifndef FESCUE_JOB_H
#define FESCUE_JOB_H

#include "write/write.h"

#endif
