/* SPDX-License-Identifier: MIT
 *
 * The inside of the night folder.
 *
 * Times: what is kept for people is the wall clock, as text in UTC; what decides anything is the monotonic clock, but
 * for `until`, which means the clock on the wall. So a clock that jumps can end a night early and do nothing else: the
 * order of nights and attempts is that of their numbers in the ledger.
 */
#ifndef FESCUE_NIGHT_INTERNAL_H
#define FESCUE_NIGHT_INTERNAL_H

#include "night/night.h"

#include <sqlite3.h>
#include <sys/types.h>

/* ---- plan --------------------------------------------------------------------------------------------------------
 */

struct plan_entry { /* one line "key = value" */
    char *key, *value;
    unsigned line;
};
struct plan_section {
    char *name;
    unsigned line;
    struct plan_entry *entries;
    size_t count, capacity;
};
/* A point in time: after so many seconds from the job's beginning, or at a time of day; neither: none. */
struct moment {
    enum { MOMENT_NONE, MOMENT_AFTER, MOMENT_CLOCK } kind;
    double seconds; /* or those since midnight, local time */
};
struct plan_job {
    char *name;   /* the section's, behind a slash the input's where a wildcard made several; owned */
    char *input;  /* owned */
    char *output; /* owned; no slash at its end */
    size_t section;
    struct fescue_options options; /* its texts are borrowed from the plan */
    struct moment deadline;
    bool has_memory; /* options.memory_limit was given for this job */
    bool *after;     /* one flag a job of the plan: it waits for that one; owned */
};
struct plan {
    fescue_context *context;
    char *path, *folder, *stem; /* folder ends in a slash or is empty; stem: path without its suffix */
    struct plan_section *sections;
    size_t section_count, section_capacity;
    struct plan_job *jobs;
    size_t count, capacity;
    struct fescue_night_options options; /* of the section [night], then of the command line */
    struct moment until;
};
/* Sections and lines as they stand; FESCUE_USAGE "plan: line 7: ...". */
fescue_status plan_read(fescue_context *context, const char *path, struct plan *plan);
/* Jobs from sections, options from keys. */
fescue_status plan_jobs(struct plan *plan);
void plan_free(struct plan *plan);
/* One sentence with path and line in front; returns FESCUE_USAGE. */
fescue_status plan_complain(const struct plan *plan, unsigned line, const char *format, ...)
    __attribute__((format(printf, 3, 4)));
/* "05:30", or with `allows_duration` a time as an option takes it. */
bool moment_parse(fescue_context *context, const char *text, bool allows_duration, struct moment *moment);
/* New text of the pieces up to a NULL, one after the other. */
fescue_status text_join(fescue_context *context, char **out, ...) __attribute__((sentinel));
/* A file's name without folders and the suffixes of tables, into name. */
void name_of_table(const char *path, char *name, size_t size);

/* ---- what is known of a finished run ------------------------------------------------------------------------------
 */

enum { WORD_SIZE = 32, SENTENCE_SIZE = 1024 };

enum figure { FIGURE_ERROR, FIGURE_MISSING, FIGURE_RANK, FIGURE_MEAN, FIGURE_ROWS, FIGURE_COLUMNS, FIGURE_ANGLE };
enum { FIGURES = FIGURE_ANGLE + 1 };
extern const char *const figure_words[FIGURES], *const figure_columns[FIGURES];

struct outcome { /* NAN, 0 and "" where nothing is known */
    char input_sum[WORD_SIZE];
    int64_t input_bytes, rows, columns, observed;
    char version[WORD_SIZE], offsets[WORD_SIZE];
    char options[OPTIONS_SIZE]; /* those that bear on results, "name=value" a line */
    double figure[FIGURES];
    double distance; /* geodesic, to the last run's subspace */
    double mae, wall, cpu;
    int64_t memory;
    bool is_cut;            /* a time limit ended it */
    bool by_rows;           /* the subspace is that of the rows: they are the shorter side */
    char labels[WORD_SIZE]; /* checksum of the labels of that side */
};
/* From the run.json of a directory; false when there is none that can be read. */
bool outcome_read(fescue_context *context, const char *directory, struct outcome *outcome);
/* Checksum of a file's bytes as 8 hexadecimal digits, "" when it is not there. */
fescue_status file_sum(fescue_context *context, const char *path, char sum[WORD_SIZE], int64_t *bytes);

/* ---- ledger --------------------------------------------------------------------------------------------------------
 */

enum state {
    STATE_WAITING,
    STATE_RUNNING,
    STATE_DONE,
    STATE_UNCHANGED,
    STATE_STOPPED,
    STATE_FAILED,
    STATE_SKIPPED,
    STATE_LOST
};
extern const char *const state_words[];

struct ledger {
    fescue_context *context;
    const char *path; /* borrowed */
    sqlite3 *database;
    int64_t night; /* number of this night */
};
/* One attempt at a job, as the ledger has it. */
struct attempt {
    int64_t number, night;
    enum state state;
    char job[256], output[4096];
    char input_sum[WORD_SIZE];     /* before it began */
    char record_before[WORD_SIZE]; /* checksum of the run.json that lay in its output then */
    char options[OPTIONS_SIZE];    /* as it was run */
    char version[WORD_SIZE];
    int64_t input_bytes, memory;
    double wall, cpu;
    bool is_cut;
};
/* Opens the ledger beside the plan, makes it when there is none; refuses one of another layout. */
fescue_status ledger_open(fescue_context *context, const char *path, struct ledger *ledger);
void ledger_close(struct ledger *ledger);
/* Runs one statement; `kinds` has a letter a further argument: t text or NULL, i int64_t,
   r double (what is not finite becomes NULL), b bytes, which are two arguments: pointer and int64_t count. */
fescue_status ledger_do(struct ledger *ledger, const char *sql, const char *kinds, ...);
/* The same for a statement that gives rows: each goes to `take`. */
typedef void ledger_row(void *data, sqlite3_stmt *row);
fescue_status ledger_ask(struct ledger *ledger, ledger_row *take, void *data, const char *sql, const char *kinds, ...);
fescue_status ledger_night_begin(struct ledger *ledger, bool again);
fescue_status ledger_night_end(struct ledger *ledger, const char *state);
struct task;
fescue_status ledger_attempt_begin(struct ledger *ledger, struct task *task);
fescue_status ledger_attempt_end(struct ledger *ledger, const struct task *task);
/* The last attempt of a job that was done and whose results are its own (not "unchanged"); number 0: none. */
fescue_status ledger_last_done(struct ledger *ledger, const char *job, struct attempt *attempt);
/* Attempts that a night left running when it died. */
fescue_status ledger_left_running(struct ledger *ledger, struct attempt **attempts, size_t *count);
/* How many seconds of processors a byte of input took, the median over recent attempts of all jobs; 0: not known. */
double ledger_pace(struct ledger *ledger);
fescue_status ledger_history(struct ledger *ledger, struct text *text);

/* ---- jobs at work --------------------------------------------------------------------------------------------------
 */

struct task { /* one job of this night */
    const struct plan_job *job;
    enum state state;
    int64_t attempt;
    struct fescue_options options; /* as it is run: threads, limits, what was shrunk */
    char wanted[OPTIONS_SIZE];     /* options that bear on results, as planned */
    char as_run[OPTIONS_SIZE];     /* and as run */
    char shrunk[WORD_SIZE * 4];    /* what was shrunk for want of time, for people; "" */
    char input_sum[WORD_SIZE], record_before[WORD_SIZE];
    int64_t input_bytes;
    double guess_cpu, guess_memory; /* seconds of processors, bytes */
    double memory_limit;            /* bytes, above which it is ended */
    size_t threads;
    bool alone;       /* nothing else may run beside it */
    char *checkpoint; /* its file; owned */
    bool goes_on;     /* from a checkpoint */
    /* while it runs */
    pid_t process;
    int pipe;
    double begun, asked_at; /* clock_wall(); asked_at: when it was asked to stop, 0 */
    bool is_over_memory, is_crowded, is_killed;
    uint64_t resident; /* most seen, bytes */
    /* afterwards */
    fescue_status status;
    char message[SENTENCE_SIZE];
    char warning[SENTENCE_SIZE];
    double seconds, cpu;
    int64_t memory;
    struct outcome outcome;
    char flags[SENTENCE_SIZE]; /* what left its usual range */
};

struct fescue_night {
    fescue_context *context;
    struct plan plan;
    struct ledger ledger;
    char *place, *ledger_path, *lock_path;
    char *text;
    struct task *tasks;  /* one a job */
    size_t threads;      /* of the whole night */
    double memory, ends; /* bytes; clock_wall() second, or 0 */
    double ends_on_wall; /* second of the wall clock, or 0 */
    double pace;         /* seconds of processors a byte of input */
    char began[WORD_SIZE], ended[WORD_SIZE];
    int64_t fresh_since;         /* with --again: attempts of later nights count as fresh */
    char trouble[SENTENCE_SIZE]; /* of the ledger, first */
};

/* What a child does: one job from its options to its files; never returns. */
_Noreturn void child_run(const struct task *task, pid_t night, int pipe);
/* Begins the task in a child process. */
fescue_status crew_begin(struct fescue_night *night, struct task *task);
/* Waits a moment for something to happen; whether a task ended, which has another state then. Watches memory. */
bool crew_watch(struct fescue_night *night);
void crew_ask_to_stop(struct fescue_night *night);

/* Guesses for all tasks, before the night. */
fescue_status order_guess(struct fescue_night *night);
/* The task that begins now, its threads and limits set, or NULL while none can. Tasks that wait for what failed are
   skipped on the way. */
struct task *order_next(struct fescue_night *night);
/* Seconds from now to the moment, of a job that begins now; INFINITY when there is none. */
double moment_seconds(const struct moment *moment);
/* Seconds that are left for a task that begins now; INFINITY without a limit. */
double order_time_left(const struct fescue_night *night, const struct task *task);
/* Sets the time limit of a task about to begin, and shrinks its cross-validation when the time will not do. */
void order_shrink(const struct fescue_night *night, struct task *task);

/* Compares a finished task with its job's history: angle and distance in the outcome, flags. */
/* Whether a value leaves the usual range of its past (which gets sorted), and that range. Of too few: it does not. */
bool drift_is_unusual(double value, double floor, double *past, size_t count, double range[2]);
fescue_status drift_judge(struct fescue_night *night, struct task *task);

/* summary.txt, index.html, night.json in night->place, and night->text. */
fescue_status morning_write(struct fescue_night *night);
fescue_status morning_text(const struct fescue_night *night, char **text);
fescue_status morning_html(const struct fescue_night *night, struct output *output);
fescue_status morning_json(const struct fescue_night *night, struct output *output);
/* Jobs as planned. */
fescue_status plan_text(const struct plan *plan, char **text);
/* Keeps the context's failure, if it is the first of the night, and clears it: the night goes on. */
void night_trouble(struct fescue_night *night);
/* How the night ended: FESCUE_OK, FESCUE_STOPPED, FESCUE_SOME_FAILED. */
fescue_status night_verdict(const struct fescue_night *night);

/* "2024-04-01T05:30:00Z" of now. */
void time_words(char text[WORD_SIZE]);
/* "1 h 20 min", "35 s"; "12.3 MB". */
void seconds_words(double seconds, char text[WORD_SIZE]);
void bytes_words(double bytes, char text[WORD_SIZE]);

#endif
