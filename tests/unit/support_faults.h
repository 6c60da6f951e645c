/* SPDX-License-Identifier: MIT
 *
 * Fault sweeps over a whole job: fail its first call of a kind, check what is left behind, run it again without a fault
 * and compare with the reference; then its second call, and so on, until a run meets no fault.
 *
 * After every run, whatever happened:
 *   - the status is one that the kind of fault may have, and then the context keeps a sentence; or all is well
 *   - no block is alive, no descriptor more is open than before
 *   - in the directory of results no temporary file is left
 *   - without the seal there; or with all of the reference's files; or with all of the older run's, byte for byte; and
 *     where no older run was, without the seal there is no file at all
 *   - a clean run then gives the reference, byte for byte (behind the hundredth fault after every tenth only)
 */
#ifndef FESCUE_TESTS_SUPPORT_FAULTS_H
#define FESCUE_TESTS_SUPPORT_FAULTS_H

#include "support.h"

/* The files of a directory, by name. */
struct snapshot {
    size_t count;
    struct snapshot_file {
        char *name, *bytes;
        size_t size;
    } * files;
};
void snapshot_take(const char *folder, struct snapshot *snapshot);
/* Writes them back into a folder that does not exist yet. */
void snapshot_put(const struct snapshot *snapshot, const char *folder);
/* The same names and bytes; of run.json only what comes before its last part, "timing", which may differ. */
bool snapshots_match(const struct snapshot *a, const struct snapshot *b);
void snapshot_free(struct snapshot *snapshot);

struct fault_job {
    const char *name, *input, *directory;
    const char *seal; /* NULL: the job writes nothing */
    size_t threads;
    int variant; /* for the job's own use */
    /* Does it all within the context, and gives back all it took. After a failure it checks that outputs are NULL. */
    fescue_status (*run)(fescue_context *context, const struct fault_job *job);
};

struct fault_case {
    enum fault_kind kind;
    int error;
    unsigned allowed; /* bit by status: what a run that met the fault may end with */
};
#define ALLOWED(status) (1u << (status))

/* One run in a context of its own; FESCUE_OK and FESCUE_NO_MEMORY also when there was none for the context. */
fescue_status fault_job_run(const struct fault_job *job);
struct fault_sweep {
    const struct fault_job *job;
    const struct fault_case *fault;
    uint64_t first, step;             /* n of the first run, and from one to the next; 0 is 1 */
    bool lasting;                     /* all calls from the nth on fail, not the nth alone */
    const struct snapshot *older;     /* put into the directory before each run; NULL: none */
    const struct snapshot *reference; /* what the job gives; NULL where it writes nothing */
};
/* Returns how many runs met a fault. */
uint64_t fault_sweep_run(const struct fault_sweep *sweep);

#endif
