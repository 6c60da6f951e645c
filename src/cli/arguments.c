/* SPDX-License-Identifier: MIT
 *
 * The command line of one command, read with getopt_long by the library's option table and the program's own options.
 *
 * Long options are not abbreviated: what a script abbreviates today may mean two things in a later version.
 */
#include "cli.h"

#include <assert.h>
#include <getopt.h>
#include <string.h>

const struct own_option own_options[] = {
    {"quiet", 'q', "say nothing but errors", offsetof(struct request, quiet)},
    {"verbose", 'v', "say what is being done", offsetof(struct request, verbose)},
    {"help", 'h', "show this help", offsetof(struct request, help)},
};
const size_t own_option_count = sizeof own_options / sizeof own_options[0];

/* getopt_long's tables; options of the library come first, then our own. */
enum { MOST_OPTIONS = 64, OWN = 256 + MOST_OPTIONS };
struct grammar {
    const struct fescue_option *options;
    size_t count;
    struct option longs[MOST_OPTIONS + 1];
    char shorts[3 * MOST_OPTIONS + 3];
};

const struct fescue_option *command_options(const struct command *command, size_t *count)
{
    if (command->flag == FESCUE_FOR_NIGHT)
        return fescue_night_option_table(count);
    return command->flag == FESCUE_FOR_SOW ? fescue_sow_option_table(count) : fescue_option_table(count);
}

static void short_add(struct grammar *grammar, char letter, bool has_value)
{
    size_t length = strlen(grammar->shorts);
    grammar->shorts[length] = letter;
    grammar->shorts[length + 1] = has_value ? ':' : '\0';
}

/* Values of long options: 256 + position in the library's table, OWN + position in ours; letters are themselves. */
static void grammar_build(const struct command *command, struct grammar *grammar)
{
    size_t used = 0;
    *grammar = (struct grammar){0};
    grammar->options = command_options(command, &grammar->count);
    assert(grammar->count + own_option_count <= MOST_OPTIONS);
    strcpy(grammar->shorts, "-:"); /* arguments in order; a missing value is told apart */
    for (size_t k = 0; k < grammar->count; k++) {
        const struct fescue_option *option = &grammar->options[k];
        bool is_flag = option->kind == FESCUE_KIND_FLAG;
        if ((option->commands & command->flag) == 0)
            continue;
        grammar->longs[used++] =
            (struct option){option->name, is_flag ? optional_argument : required_argument, NULL, 256 + (int)k};
        if (option->letter != 0)
            short_add(grammar, option->letter, !is_flag);
    }
    for (size_t k = 0; k < own_option_count; k++) {
        grammar->longs[used++] = (struct option){own_options[k].name, no_argument, NULL, OWN + (int)k};
        short_add(grammar, own_options[k].letter, false);
    }
}

/* ---- messages --------------------------------------------------------------------------------------------------- */

static fescue_status unknown_say(const struct command *command, const struct grammar *grammar, const char *argument)
{
    const char *name = argument + 2, *best = NULL;
    size_t length = strcspn(name, "="), fewest = 3; /* up to two slips make a guess worth showing */
    for (const struct option *option = grammar->longs; option->name != NULL; option++) {
        bool begins = length >= 3 && strncmp(name, option->name, length) == 0;
        size_t slips = begins ? 1 : fescue_slips(name, length, option->name);
        if (slips < fewest) {
            best = option->name;
            fewest = slips;
        }
    }
    if (best != NULL)
        return say_usage("%s takes no option %.*s; is --%s meant?", command->name, (int)(length + 2), argument, best);
    return say_usage("%s takes no option %.*s; \"fescue %s --help\" lists them", command->name, (int)(length + 2),
                     argument, command->name);
}

static bool is_named_in_full(const char *argument, const char *name)
{
    size_t length = strlen(name);
    return strncmp(argument + 2, name, length) == 0 && (argument[2 + length] == '=' || argument[2 + length] == '\0');
}

/* What getopt_long could not take: its code '?' or ':' with optopt, or an abbreviation. */
static fescue_status misuse_say(const struct command *command, const struct grammar *grammar, int code,
                                const char *argument)
{
    bool is_long = strncmp(argument, "--", 2) == 0;
    if (code == ':')
        return is_long ? say_usage("%s: found nothing, expected a value", argument)
                       : say_usage("-%c: found nothing, expected a value", optopt);
    if (!is_long)
        return say_usage("%s takes no option -%c; \"fescue %s --help\" lists them", command->name, optopt,
                         command->name);
    if (optopt >= OWN)
        return say_usage("--%s takes no value", own_options[optopt - OWN].name);
    return unknown_say(command, grammar, argument);
}

/* ---- reading ---------------------------------------------------------------------------------------------------- */

static fescue_status positional_take(struct request *request, const char *text)
{
    if (request->command->positional == NULL)
        return say_usage("%s takes no argument, found \"%s\"", request->command->name, text);
    if (request->table != NULL)
        return say_usage("%s takes one %s, found a second: \"%s\"", request->command->name,
                         request->command->positional, text);
    request->table = text;
    return FESCUE_OK;
}

static fescue_status option_set(struct request *request, const struct fescue_option *option, const char *text)
{
    if (strcmp(option->name, "output") == 0 && text[0] == '\0')
        return say_usage("--output: found \"\", expected the name of a %s",
                         request->command->output != NULL ? "file" : "directory");
    if (request->command->flag == FESCUE_FOR_NIGHT)
        return fescue_night_options_set(request->context, &request->night_options, option->name, text);
    return request->command->flag == FESCUE_FOR_SOW
               ? fescue_sow_options_set(request->context, &request->sow_options, option->name, text)
               : fescue_options_set(request->context, &request->options, option->name, text);
}

static void own_set(struct request *request, size_t k)
{
    *(bool *)((char *)request + own_options[k].position) = true;
}

/* Takes what getopt_long gave as `code`: a long option, a letter. */
static fescue_status code_take(struct request *request, const struct grammar *grammar, int code)
{
    if (code >= OWN) {
        own_set(request, (size_t)(code - OWN));
        return FESCUE_OK;
    }
    if (code >= 256)
        return option_set(request, &grammar->options[code - 256], optarg);
    for (size_t k = 0; k < own_option_count; k++)
        if (own_options[k].letter == code) {
            own_set(request, k);
            return FESCUE_OK;
        }
    size_t k = 0;
    while (grammar->options[k].letter != code || (grammar->options[k].commands & request->command->flag) == 0)
        k++;
    return option_set(request, &grammar->options[k], optarg);
}

static fescue_status rest_take(int argc, char **argv, struct request *request)
{
    fescue_status status = FESCUE_OK;
    for (int k = optind; k < argc && status == FESCUE_OK; k++)
        status = positional_take(request, argv[k]);
    return status;
}

fescue_status arguments_read(int argc, char **argv, struct request *request)
{
    struct grammar grammar;
    grammar_build(request->command, &grammar);
    opterr = 0;
    optind = 1;
    for (;;) {
        const char *argument = optind < argc ? argv[optind] : ""; /* which getopt_long is about to read */
        int which = 0;
        int code = getopt_long(argc, argv, grammar.shorts, grammar.longs, &which);
        if (code == -1)
            break;
        fescue_status status;
        if (code == 1)
            status = positional_take(request, optarg);
        else if (code == '?' || code == ':')
            status = misuse_say(request->command, &grammar, code, argument);
        else if (code >= 256 && !is_named_in_full(argument, grammar.longs[which].name))
            status = unknown_say(request->command, &grammar, argument);
        else
            status = code_take(request, &grammar, code);
        if (status != FESCUE_OK || request->help)
            return status;
    }
    fescue_status status = rest_take(argc, argv, request);
    if (status == FESCUE_OK && request->command->positional != NULL && request->table == NULL)
        return say_usage("%s needs a %s%s", request->command->name, request->command->positional,
                         request->command->flag == FESCUE_FOR_NIGHT ? "" : "; \"-\" is standard input");
    return status;
}
