/* SPDX-License-Identifier: MIT
 *
 * Help texts. What they say of an option comes from the table that also parses it.
 */
#include "cli.h"

#include <string.h>

enum { TEXT_COLUMN = 28, WIDTH = 100 }; /* where descriptions begin; no line goes beyond WIDTH */

/* Prints words from column `from` on, wrapped, each further line at TEXT_COLUMN. */
static void text_wrap(FILE *file, const char *text, size_t from, size_t indent)
{
    size_t column = from;
    while (*text != '\0') {
        size_t length = strcspn(text, " ");
        if (column > indent && column + 1 + length > WIDTH) {
            fprintf(file, "\n%*s", (int)indent, "");
            column = indent;
        } else if (column > indent) {
            fputc(' ', file);
            column++;
        }
        fwrite(text, 1, length, file);
        column += length;
        text += length;
        text += strspn(text, " ");
    }
    fputc('\n', file);
}

/* "both|rows|columns", "R|auto", "SET" and so on: what may stand for the value. */
static void value_text(const struct fescue_option *option, char *text, size_t size)
{
    const char *words = option->words != NULL ? option->words : "";
    const char *list = option->kind == FESCUE_KIND_WORDS ? "[,...]" : "";
    const char *automatic = option->can_be_auto ? "|auto" : "";
    snprintf(text, size, "%s%s%s", words, list, automatic);
}

/* Prints what may stand for a value from column `from` on, broken behind a "|" where it does not fit; returns the
   column where it ends. */
static size_t value_wrap(FILE *file, const char *value, size_t from)
{
    size_t column = from;
    while (*value != '\0') {
        size_t length = strcspn(value, "|");
        length += value[length] == '|';
        if (column + length > WIDTH && column > from) {
            fprintf(file, "\n%*s", (int)from, "");
            column = from;
        }
        fwrite(value, 1, length, file);
        column += length;
        value += length;
    }
    return column;
}

static void option_print(FILE *file, char letter, const char *name, const char *value, const char *text)
{
    char head[64];
    int length = snprintf(head, sizeof head, letter != 0 ? "  -%c, " : "      ", letter);
    length += snprintf(head + length, sizeof head - (size_t)length, "--%s%s", name, value[0] != '\0' ? " " : "");
    fputs(head, file);
    size_t column = value_wrap(file, value, (size_t)length);
    if (column + 2 > TEXT_COLUMN) {
        fputc('\n', file);
        column = 0;
    }
    fprintf(file, "%*s", (int)(TEXT_COLUMN - column), "");
    text_wrap(file, text, TEXT_COLUMN, TEXT_COLUMN);
}

static void library_option_print(FILE *file, const struct command *command, const struct fescue_option *given)
{
    char value[512], text[512];
    struct fescue_option own = *given;
    const struct fescue_option *option = &own;
    if (strcmp(own.name, "output") == 0 && command->output != NULL) {
        own.words = command->output[0];
        own.help = command->output[1];
    }
    value_text(option, value, sizeof value);
    bool has_standard = option->standard != NULL && option->kind != FESCUE_KIND_FLAG;
    snprintf(text, sizeof text, "%s%s%s%s", option->help, has_standard ? " [" : "",
             has_standard ? option->standard : "", has_standard ? "]" : "");
    option_print(file, option->letter, option->name, value, text);
}

void help_command(FILE *file, const struct command *command)
{
    size_t count;
    const struct fescue_option *options = command_options(command, &count);
    fprintf(file, "usage: fescue %s [OPTIONS]%s%s\n\n", command->name, command->positional != NULL ? " " : "",
            command->positional != NULL ? command->positional : "");
    text_wrap(file, command->description, 0, 0);
    fputs("\noptions, with their standard values in brackets:\n", file);
    for (size_t k = 0; k < count; k++)
        if ((options[k].commands & command->flag) != 0)
            library_option_print(file, command, &options[k]);
    for (size_t k = 0; k < own_option_count; k++)
        option_print(file, own_options[k].letter, own_options[k].name, "", own_options[k].help);
}

void help_program(FILE *file)
{
    fputs("usage: fescue COMMAND [OPTIONS] [TABLE]\n\n"
          "Fills the missing cells of a table by low-rank completion and says how wrong the filled cells are.\n\n"
          "commands:\n",
          file);
    for (size_t k = 0; k < command_count; k++)
        fprintf(file, "  %-8s%s\n", commands[k].name, commands[k].summary);
    fputs("\n\"fescue COMMAND --help\" lists the options of a command; \"fescue --version\" tells the version.\n\n"
          "exit status:\n",
          file);
#define STATUS_LINE(name, code, text) fprintf(file, "  %-4d%s\n", code, text);
    FESCUE_STATUS_LIST(STATUS_LINE)
#undef STATUS_LINE
    fputs("\nFilled values are estimates, not measurements.\n", file);
}
