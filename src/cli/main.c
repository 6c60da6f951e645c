/* SPDX-License-Identifier: MIT
 *
 * fescue: the commands, signals and the exit status.
 *
 * A first SIGINT, SIGTERM or SIGHUP asks the library to stop, which then leaves nothing half written; a second one ends
 * the program at once. SIGPIPE is ignored: a reader that went away shows as a failed write.
 */
#include "cli.h"

#include <fcntl.h>
#include <signal.h>
#include <stdlib.h>
#include <string.h>
#include <unistd.h>

static const char *const pack_output[] = {"FILE", "the file to write"};

const struct command commands[] = {
    {"fill", "TABLE", "fill the holes of a table and measure the error",
     "Fills the holes of TABLE, a file or \"-\" for standard input, and writes the full table, every filled cell with "
     "its interval, the factors and a record of the run into a directory. The summary goes to standard error.",
     FESCUE_FOR_FILL, NULL, command_fill},
    {"survey", "TABLE", "say what a table is like, before any fit",
     "Prints shape, density, thin and empty rows and columns, and what the pattern of holes can determine, to standard "
     "output.",
     FESCUE_FOR_SURVEY, NULL, command_survey},
    {"rank", "TABLE", "find rank and ridge by cross-validation",
     "Hides the cells of TABLE in folds and prints to standard output how well each rank foretells them, as a small "
     "chart, and which rank, ridge and offsets follow from it. With -o the curve is also written as rank.csv.",
     FESCUE_FOR_RANK, NULL, command_rank},
    {"sow", NULL, "make a synthetic table with known truth",
     "Writes a synthetic table and the truth it was made from into a directory.", FESCUE_FOR_SOW, NULL, command_sow},
    {"night", "PLAN", "fill many tables unattended, with a ledger and a summary",
     "Runs the jobs of PLAN, an INI file: each in a process of its own, within limits of time and memory, with "
     "checkpoints. Run again, it goes on; what is done and unchanged is not done again. The summary goes to standard "
     "error, and with the ledger of all nights beside the plan.",
     FESCUE_FOR_NIGHT, NULL, command_night},
    {"pack", "TABLE", "write a table as a file that is mapped, not parsed",
     "Writes TABLE, a file or \"-\" for standard input, as one checked binary file, which every command takes wherever "
     "it takes a table: it is there at once, whatever the size of the table.",
     FESCUE_FOR_PACK, pack_output, command_pack},
};
const size_t command_count = sizeof commands / sizeof commands[0];

/* The handler's only way to the context. NULL again before the context goes; a handler that still runs then runs on
   one of the context's workers, and its end is waited for. */
static fescue_context *_Atomic running;
static volatile sig_atomic_t asked_to_stop;

static void signal_take(int number)
{
    (void)number;
    asked_to_stop = 1;
    fescue_context *context = running;
    if (context != NULL)
        fescue_context_cancel(context);
}

bool is_asked_to_stop(void)
{
    return asked_to_stop != 0;
}

static void signals_set(fescue_context *context)
{
    static const int asking[] = {SIGINT, SIGTERM, SIGHUP};
    struct sigaction action = {.sa_handler = signal_take, .sa_flags = (int)SA_RESETHAND}, before;
    running = context;
    for (size_t k = 0; k < sizeof asking / sizeof asking[0]; k++)
        if (sigaction(asking[k], NULL, &before) == 0 && before.sa_handler != SIG_IGN) /* nohup stays in force */
            sigaction(asking[k], &action, NULL);
}

/* A file opened under the number of a closed standard stream would get what is meant for the stream. Read-only, so that
   writing to a stream that was closed still fails. */
static void standard_streams_open(void)
{
    for (int descriptor = 0; descriptor <= STDERR_FILENO; descriptor++)
        if (fcntl(descriptor, F_GETFD) < 0 && open("/dev/null", O_RDONLY) < 0)
            abort();
}

static const struct command *command_find(const char *name)
{
    for (size_t k = 0; k < command_count; k++)
        if (strcmp(name, commands[k].name) == 0)
            return &commands[k];
    return NULL;
}

/* Runs a command within a context of its own; argv[0] is the command's name. */
static fescue_status command_run(const struct command *command, int argc, char **argv)
{
    struct progress progress;
    progress_open(&progress);
    struct fescue_hooks hooks = {.data = &progress, .progress = progress_draw, .log = progress_log};
    struct request request = {.command = command, .progress = &progress};
    fescue_status status = fescue_context_create(&hooks, &request.context);
    if (status != FESCUE_OK) {
        say_failure(fescue_status_text(status));
        return status;
    }
    signals_set(request.context);
    fescue_options_standard(&request.options);
    fescue_sow_options_standard(&request.sow_options);
    fescue_night_options_standard(&request.night_options);
    status = arguments_read(argc, argv, &request);
    if (status == FESCUE_OK && request.help) {
        help_command(stdout, command);
    } else if (status == FESCUE_OK) {
        progress.draws = progress.draws && !request.quiet;
        progress.tells = request.verbose;
        status = command->run(&request);
    }
    progress_clear(&progress);
    const char *sentence = fescue_failure_text(request.context);
    if (status != FESCUE_OK && sentence[0] != '\0')
        say_failure(sentence);
    if (status == FESCUE_DEFECT)
        fprintf(stderr, "fescue: found in %s\n", fescue_failure_where(request.context));
    running = NULL;
    fescue_context_destroy(&request.context);
    return status;
}

static fescue_status program_run(int argc, char **argv)
{
    const char *first = argc > 1 ? argv[1] : "";
    if (argc < 2)
        return say_usage("no command given; \"fescue --help\" lists them");
    const struct command *command = command_find(first);
    if (command != NULL)
        return command_run(command, argc - 1, argv + 1);
    bool alone = argc == 2;
    if (alone && (strcmp(first, "--help") == 0 || strcmp(first, "-h") == 0))
        help_program(stdout);
    else if (alone && (strcmp(first, "--version") == 0 || strcmp(first, "-V") == 0))
        puts("fescue " FESCUE_VERSION);
    else
        return say_usage("there is no command \"%s\"; \"fescue --help\" lists them", first);
    return FESCUE_OK;
}

/* OpenBLAS reads the variable before main, so the program begins once more; if it cannot, it is but slower. */
static void openblas_kernels_settle(char **argv)
{
    const char *missed = fescue_openblas_kernels_missed();
    if (missed != NULL && setenv("OPENBLAS_CORETYPE", missed, 1) == 0)
        execv("/proc/self/exe", argv);
}

int main(int argc, char **argv)
{
    openblas_kernels_settle(argv);
    standard_streams_open();
    signal(SIGPIPE, SIG_IGN);
    fescue_status status = program_run(argc, argv);
    fescue_status written = standard_output_close();
    return fescue_status_exit_code(status != FESCUE_OK ? status : written);
}
