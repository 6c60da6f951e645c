/* SPDX-License-Identifier: MIT
 *
 * The morning summary as plain text, for a mail, in at most 80 columns unless a single word is longer: how the night
 * went, what to look at first, a line a job. And the files of the morning, which appear together: summary.txt,
 * index.html, night.json, in the folder STEM-morning.
 */
#include "night/night_internal.h"

#include <inttypes.h>
#include <math.h>
#include <stdio.h>
#include <string.h>
#include <unistd.h>

enum { NAME_WIDTH = 22, WIDTH = 78, INDENT = 6 };

/* A sentence, indented, in lines that are cut between words. */
static void sentence_add(struct text *text, const char *sentence)
{
    size_t column = 0;
    for (const char *word = sentence + strspn(sentence, " "); *word != '\0'; word += strspn(word, " ")) {
        size_t length = strcspn(word, " ");
        if (column > 0 && column + 1 + length > WIDTH) {
            text_add(text, "\n");
            column = 0;
        }
        text_add(text, "%*s%.*s", column > 0 ? 1 : INDENT, "", (int)length, word);
        column += (column > 0 ? 1 : INDENT) + length;
        word += length;
    }
    if (column > 0)
        text_add(text, "\n");
}

/* Sections whose wildcards match no file: no mistake, and yet to be known. */
static void empty_sections_add(const struct plan *plan, struct text *text)
{
    for (size_t k = 0; k < plan->section_count; k++) {
        const struct plan_section *section = &plan->sections[k];
        const char *input = "";
        bool has_job = strcmp(section->name, "night") == 0;
        for (size_t i = 0; i < plan->count && !has_job; i++)
            has_job = plan->jobs[i].section == k;
        for (size_t i = 0; i < section->count; i++)
            if (strcmp(section->entries[i].key, "input") == 0)
                input = section->entries[i].value;
        if (!has_job)
            text_add(text, "  [%s]: no file matches %s\n", section->name, input);
    }
}

fescue_status night_verdict(const struct fescue_night *night)
{
    fescue_status verdict = FESCUE_OK;
    for (size_t k = 0; k < night->plan.count; k++) {
        enum state state = night->tasks[k].state;
        if (state == STATE_FAILED || state == STATE_SKIPPED)
            return FESCUE_SOME_FAILED;
        if (state == STATE_STOPPED || state == STATE_WAITING)
            verdict = FESCUE_STOPPED;
    }
    return verdict;
}

static size_t count_state(const struct fescue_night *night, enum state state)
{
    size_t count = 0;
    for (size_t k = 0; k < night->plan.count; k++)
        count += night->tasks[k].state == state;
    return count;
}

static void counts_line(const struct fescue_night *night, struct text *text)
{
    static const enum state told[] = {STATE_DONE,    STATE_UNCHANGED, STATE_STOPPED,
                                      STATE_WAITING, STATE_FAILED,    STATE_SKIPPED};
    size_t count = night->plan.count;
    text_add(text, "%s: %zu %s", night->plan.path, count, count == 1 ? "job" : "jobs");
    const char *between = ":";
    for (size_t k = 0; k < sizeof told / sizeof *told; k++) {
        if (count_state(night, told[k]) == 0)
            continue;
        text_add(text, "%s %zu %s", between, count_state(night, told[k]), state_words[told[k]]);
        between = ",";
    }
    text_add(text, "\nfrom %s to %s\n", night->began, night->ended);
    empty_sections_add(&night->plan, text);
    if (night_verdict(night) == FESCUE_STOPPED)
        text_add(text, "The same command goes on where this night ended.\n");
    if (night->trouble[0] != '\0') {
        text_add(text, "WARNING: not all could be written down:\n");
        sentence_add(text, night->trouble);
    }
}

static bool is_worth_a_look(const struct task *task)
{
    return task->state == STATE_FAILED || task->state == STATE_SKIPPED || task->state == STATE_STOPPED ||
           task->flags[0] != '\0' || task->warning[0] != '\0' || task->shrunk[0] != '\0' || task->outcome.is_cut;
}

static void look_lines(const struct fescue_night *night, struct text *text)
{
    bool is_first = true;
    for (size_t k = 0; k < night->plan.count; k++) {
        const struct task *task = &night->tasks[k];
        char unusual[SENTENCE_SIZE + 16] = "";
        if (task->flags[0] != '\0')
            snprintf(unusual, sizeof unusual, "unusual: %s", task->flags);
        const char *const sentences[] = {task->message, unusual, task->warning, task->shrunk,
                                         task->outcome.is_cut ? "the time limit ended it before it was done" : ""};
        if (!is_worth_a_look(task))
            continue;
        if (is_first)
            text_add(text, "\nLook at these first\n");
        is_first = false;
        text_add(text, "  %s (%s)\n", task->job->name, state_words[task->state]);
        for (size_t i = 0; i < sizeof sentences / sizeof *sentences; i++)
            sentence_add(text, sentences[i]);
    }
}

/* The longest: a time of "119 min 59 s", a share of "0.0123 %". */
#define LINE "%-*s %-9s %9s %4s %8s %12s %8s\n"

static void job_line(const struct task *task, struct text *text)
{
    char error[32] = "-", rank[32] = "-", missing[32] = "-", time[WORD_SIZE] = "-", memory[WORD_SIZE] = "-";
    const double *figure = task->outcome.figure;
    bool has_figures = task->state == STATE_DONE || task->state == STATE_UNCHANGED;
    if (has_figures && isfinite(figure[FIGURE_ERROR]))
        real_to_words(figure[FIGURE_ERROR], 4, error);
    if (has_figures && isfinite(figure[FIGURE_RANK]))
        real_to_words(figure[FIGURE_RANK], 4, rank);
    if (has_figures && isfinite(figure[FIGURE_MISSING]))
        snprintf(missing, sizeof missing, "%s %%", real_to_words(100 * figure[FIGURE_MISSING], 3, (char[32]){0}));
    if (task->attempt != 0 && task->state != STATE_UNCHANGED) {
        seconds_words(task->seconds, time);
        bytes_words((double)task->memory, memory);
    }
    bool is_long = strlen(task->job->name) > NAME_WIDTH;
    if (is_long)
        text_add(text, "%s\n", task->job->name);
    text_add(text, LINE, NAME_WIDTH, is_long ? "" : task->job->name, state_words[task->state], error, rank, missing,
             time, memory);
}

fescue_status morning_text(const struct fescue_night *night, char **out)
{
    struct text text = {.context = night->context};
    counts_line(night, &text);
    look_lines(night, &text);
    if (night->plan.count > 0) {
        text_add(&text, "\n");
        text_add(&text, LINE, NAME_WIDTH, "job", "state", "error", "rank", "missing", "time", "memory");
    }
    for (size_t k = 0; k < night->plan.count; k++)
        job_line(&night->tasks[k], &text);
    text_add(&text, "\nThe error is the RMSE on cells that were hidden.\n");
    words_wrap(&text, run_caution);
    return text_finish(&text, out);
}

static void when_add(struct text *text, const char *what, const struct moment *moment)
{
    char words[WORD_SIZE];
    if (moment->kind == MOMENT_CLOCK)
        text_add(text, "%s %02d:%02d", what, (int)(moment->seconds / 3600), (int)(moment->seconds / 60) % 60);
    if (moment->kind == MOMENT_AFTER) {
        seconds_words(moment->seconds, words);
        text_add(text, "%s %s after it began", what, words);
    }
}

fescue_status plan_text(const struct plan *plan, char **out)
{
    struct text text = {.context = plan->context};
    text_add(&text, "%s: %zu %s\n", plan->path, plan->count, plan->count == 1 ? "job" : "jobs");
    for (size_t k = 0; k < plan->count; k++) {
        const struct plan_job *job = &plan->jobs[k];
        text_add(&text, "  %-*s  %s -> %s", NAME_WIDTH, job->name, job->input, job->output);
        if (access(job->input, R_OK) != 0)
            text_add(&text, " (the input cannot be read now)");
        when_add(&text, ", deadline", &job->deadline);
        for (size_t i = 0; i < plan->count; i++)
            if (job->after[i])
                text_add(&text, ", after %s", plan->jobs[i].name);
        text_add(&text, "\n");
    }
    empty_sections_add(plan, &text);
    return text_finish(&text, out);
}

/* ---- the files -----------------------------------------------------------------------------------------------------
 */

fescue_status morning_write(struct fescue_night *night)
{
    struct output *output = NULL;
    struct outfile *file;
    fescue_status status;
    GIVE(night->context, &night->text);
    TRY(morning_text(night, &night->text));
    TRY(output_open(night->context, night->place, "night.json", &output));
    TRY(output_add(output, "summary.txt", &file));
    outfile_text(file, night->text);
    TRY(outfile_status(file));
    TRY(morning_html(night, output));
    TRY(morning_json(night, output));
    TRY(output_publish(&output));
done:
    output_abandon(&output);
    return status;
}
