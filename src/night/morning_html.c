/* SPDX-License-Identifier: MIT
 *
 * The morning as one page of HTML, which needs nothing else: a line a job, with links to its files. What comes from
 * plans, tables and messages is escaped; links are relative where a job's folder lies beside the plan.
 */
#include "night/night_internal.h"

#include <math.h>
#include <stdio.h>
#include <string.h>
#include <unistd.h>

/* In the order in which they are worth opening. */
static const char *const files[] = {"report.html", "filled.csv", "filled.tsv", "filled.mtx", "cells.csv",
                                    "left.mtx",    "right.mtx",  "trace.csv",  "run.json"};

static const char head[] =
    "<!DOCTYPE html>\n<html lang=\"en\">\n<head>\n<meta charset=\"utf-8\">\n<title>Night</title>\n<style>\n"
    "body { font-family: sans-serif; margin: 2em; color: #222; }\n"
    "table { border-collapse: collapse; }\n"
    "th, td { text-align: left; vertical-align: top; padding: 0.3em 0.8em; border-bottom: 1px solid #ccc; }\n"
    "td.number { text-align: right; }\n"
    "tr.failed td, tr.skipped td { background: #f6d5d0; }\n"
    "tr.stopped td, tr.waiting td { background: #f8ecc9; }\n"
    ".flag { color: #8a3b00; }\n</style>\n</head>\n<body>\n";

static void escaped(struct outfile *file, const char *text)
{
    for (; *text != '\0'; text++) {
        unsigned char byte = (unsigned char)*text;
        const char *instead = byte == '&'    ? "&amp;"
                              : byte == '<'  ? "&lt;"
                              : byte == '>'  ? "&gt;"
                              : byte == '"'  ? "&quot;"
                              : byte == '\'' ? "&#39;"
                                             : NULL;
        if (instead != NULL)
            outfile_text(file, instead);
        else
            outfile_write(file, byte < ' ' || byte == 0x7f ? "?" : text, 1);
    }
}

/* A path within a link: what is no plain character is written by its number (RFC 3986). */
static void link_path(struct outfile *file, const char *path)
{
    static const char plain[] = "ABCDEFGHIJKLMNOPQRSTUVWXYZabcdefghijklmnopqrstuvwxyz0123456789-._~/";
    for (; *path != '\0'; path++)
        if (strchr(plain, *path) != NULL)
            outfile_write(file, path, 1);
        else
            outfile_format(file, "%%%02X", (unsigned)(unsigned char)*path);
}

static fescue_status links(const struct fescue_night *night, const struct task *task, struct outfile *file)
{
    const char *output = task->job->output, *folder = night->plan.folder;
    size_t length = strlen(folder);
    bool is_beside = strncmp(output, folder, length) == 0 && output[0] != '/';
    char *path = NULL;
    fescue_status status = FESCUE_OK;
    for (size_t k = 0; k < sizeof files / sizeof *files; k++) {
        TRY(text_join(night->context, &path, output, "/", files[k], NULL));
        if (access(path, R_OK) == 0) {
            outfile_text(file, "<a href=\"");
            outfile_text(file, is_beside ? "../" : output[0] == '/' ? "file://" : "");
            link_path(file, is_beside ? path + length : path);
            outfile_format(file, "\">%s</a> ", files[k]);
        }
        GIVE(night->context, &path);
    }
done:
    return status;
}

static void number_cell(struct outfile *file, double value, const char *unit)
{
    char text[32];
    outfile_text(file, "<td class=\"number\">");
    if (isfinite(value))
        outfile_format(file, "%s%s", real_to_words(value, 4, text), unit);
    outfile_text(file, "</td>");
}

static void sentence(struct outfile *file, const char *kind, const char *text)
{
    if (text[0] == '\0')
        return;
    outfile_format(file, "<div class=\"%s\">", kind);
    escaped(file, text);
    outfile_text(file, "</div>");
}

static fescue_status row(const struct fescue_night *night, const struct task *task, struct outfile *file)
{
    const double *figure = task->outcome.figure;
    bool has_figures = task->state == STATE_DONE || task->state == STATE_UNCHANGED;
    outfile_format(file, "<tr class=\"%s\"><td>", state_words[task->state]);
    escaped(file, task->job->name);
    outfile_format(file, "</td><td>%s</td>", state_words[task->state]);
    number_cell(file, has_figures ? figure[FIGURE_ERROR] : NAN, "");
    number_cell(file, has_figures ? figure[FIGURE_RANK] : NAN, "");
    number_cell(file, has_figures ? 100 * figure[FIGURE_MISSING] : NAN, " %");
    outfile_text(file, "<td>");
    sentence(file, "message", task->message);
    sentence(file, "flag", task->flags);
    sentence(file, "flag", task->warning);
    sentence(file, "flag", task->shrunk);
    sentence(file, "flag", task->outcome.is_cut ? "the time limit ended it before it was done" : "");
    outfile_text(file, "</td><td>");
    fescue_status status = links(night, task, file);
    outfile_text(file, "</td></tr>\n");
    return status;
}

fescue_status morning_html(const struct fescue_night *night, struct output *output)
{
    struct outfile *file;
    fescue_status status;
    TRY(output_add(output, "index.html", &file));
    outfile_text(file, head);
    outfile_text(file, "<h1>Night of ");
    escaped(file, night->plan.path);
    outfile_format(file, "</h1>\n<p>From %s to %s: %s.</p>\n", night->began, night->ended,
                   fescue_status_text(night_verdict(night)));
    sentence(file, "flag", night->trouble);
    outfile_text(file, "<table>\n<tr><th>job</th><th>state</th><th>error</th><th>rank</th><th>missing</th>"
                       "<th>to look at</th><th>files</th></tr>\n");
    for (size_t k = 0; k < night->plan.count; k++)
        TRY(row(night, &night->tasks[k], file));
    outfile_text(file, "</table>\n<p>The error is the RMSE on cells that were hidden. ");
    escaped(file, run_caution);
    outfile_text(file, "</p>\n</body>\n</html>\n");
    TRY(outfile_status(file));
done:
    return status;
}
