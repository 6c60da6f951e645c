/* SPDX-License-Identifier: MIT
 *
 * The program: one file a command, and what they share. No mathematics; nothing of the library but fescue.h.
 *
 *   main        the commands, --version, --help, signals, exit status
 *   arguments   the command line, read by the option tables
 *   help        help texts, made from the same tables
 *   say         sentences for people, on standard error
 *   progress    the moving line on a terminal
 *   place       where the files of a run go
 *   fill, survey, rank, sow, night, pack   the commands
 *
 * Data go to files or standard output, everything else to standard error. A failure is one line "fescue: sentence", and
 * the exit status is that of fescue.h's status list.
 */
#ifndef FESCUE_CLI_H
#define FESCUE_CLI_H

#include "fescue.h"

#include <stdio.h>

/* What one run of the program was asked to do. */
struct request {
    fescue_context *context;
    const struct command *command;
    const char *table; /* the positional argument, borrowed; NULL when not given */
    struct fescue_options options;
    struct fescue_sow_options sow_options;
    struct fescue_night_options night_options;
    struct progress *progress;
    bool quiet, verbose, help;
};

struct command {
    const char *name;
    const char *positional; /* what its one argument is called; NULL when it takes none */
    const char *summary;    /* one line */
    const char *description;
    unsigned flag; /* FESCUE_FOR_... */
    const char *const
        *output; /* what --output takes, and its help, where the table of options does not say it; or NULL */
    fescue_status (*run)(struct request *request);
};
extern const struct command commands[];
extern const size_t command_count;

fescue_status command_fill(struct request *request);
fescue_status command_survey(struct request *request);
fescue_status command_rank(struct request *request);
fescue_status command_sow(struct request *request);
fescue_status command_night(struct request *request);
fescue_status command_pack(struct request *request);

/* The options that are the program's own, not the library's. */
struct own_option {
    const char *name;
    char letter;
    const char *help;
    size_t position; /* of a bool in struct request */
};
extern const struct own_option own_options[];
extern const size_t own_option_count;

/* The library's table for a command, with options of other commands in it. */
const struct fescue_option *command_options(const struct command *command, size_t *count);
/* Reads argv[first ..] into the request, whose context and command are set. FESCUE_USAGE after saying why. */
fescue_status arguments_read(int argc, char **argv, struct request *request);

/* Whether a signal asked this run of the program to stop. */
bool is_asked_to_stop(void);

void help_program(FILE *file);
void help_command(FILE *file, const struct command *command);

/* Says "fescue: sentence" as one plain line on standard error and returns FESCUE_USAGE. */
fescue_status say_usage(const char *format, ...) __attribute__((format(printf, 1, 2)));
void say_failure(const char *sentence);
void say_stop(const char *format, ...) __attribute__((format(printf, 1, 2))); /* the same, made plain */
/* The summary of a run and where its files are, on standard error, unless --quiet. */
void say_summary(const struct request *request, const char *text, const char *place);
/* Flushes and closes standard output; FESCUE_CANNOT_WRITE after saying why, when not all of it got out. */
fescue_status standard_output_close(void);

/* The hooks for progress and log of a context; `data` is a struct progress. */
struct progress {
    bool draws, tells; /* a moving line; sentences of the log */
    bool visible;
    double started, drawn;
    char stage[48]; /* what is being done, and since when */
    double stage_started;
};
bool progress_draw(void *data, const char *stage, double share);
void progress_log(void *data, const char *sentence);
void progress_open(struct progress *progress);
void progress_clear(struct progress *progress); /* wipes the line, if there is one */

/* Where the results of filling `table` go unless asked otherwise: its path without the suffixes of its format, with
   "-filled". FESCUE_USAGE after saying why: standard input has no name; the path is too long. */
enum { PLACE_SIZE = 4096 };
fescue_status place_choose(const char *table, char place[PLACE_SIZE]);
/* Whether `directory` can be made and written, as far as can be told without touching it, and whether its results
   would replace `table` itself (NULL: there is none): better said before the work than after. */
fescue_status place_check(const char *directory, const char *table);
/* The same for one file. */
fescue_status place_check_file(const char *file, const char *table);

#endif
