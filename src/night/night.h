/* SPDX-License-Identifier: MIT
 *
 * Nights: many jobs of fill, unattended.
 *
 *     plan --> what has to be done --> child processes --> ledger --> morning summary
 *
 *   plan, plan_jobs   the INI file; wildcards, folders, who waits for whom
 *   ledger            the SQLite database beside the plan: every night and every attempt at a job
 *   order             which job begins next, with how many threads and how much memory
 *   crew, child       processes: beginning, watching, ending; what a child does
 *   drift             tonight's figures against the job's own history
 *   morning           summary.txt, index.html, night.json
 *   night             all of it together
 *
 * Nothing of it is called by other folders but the functions fescue_night_ of fescue.h.
 */
#ifndef FESCUE_NIGHT_H
#define FESCUE_NIGHT_H

#include "job/job.h"

#endif
