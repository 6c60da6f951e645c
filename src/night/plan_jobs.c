/* SPDX-License-Identifier: MIT
 *
 * Jobs from the sections of a plan: options by the option tables, one job a file where the input has wildcards, folders
 * for results, who waits for whom.
 *
 * A job's keys are input, output, after, deadline, memory and every option of fill that a plan may set; [night] takes
 * the options of night and, as defaults for all jobs, those of fill. Nothing is listed here that an option table has.
 * Paths are relative to the plan's folder. Two jobs never share an output.
 *
 * Cost: the pairs of jobs are compared once; thousands of jobs are no trouble.
 */
#include "night/night_internal.h"

#include <glob.h>
#include <stdio.h>
#include <stdlib.h>
#include <string.h>

static const char *const own_keys[] = {"input", "output", "after", "deadline", "memory"};
/* Of fill's options, those that a night decides: where results and checkpoints go. */
static const char *const not_keys[] = {"output", "checkpoint"};

static bool is_one_of(const char *word, const char *const *words, size_t count)
{
    for (size_t k = 0; k < count; k++)
        if (strcmp(word, words[k]) == 0)
            return true;
    return false;
}

static const struct fescue_option *option_find(const struct fescue_option *table, size_t count, unsigned commands,
                                               const char *name)
{
    for (size_t k = 0; k < count; k++)
        if ((table[k].commands & commands) != 0 && strcmp(table[k].name, name) == 0)
            return &table[k];
    return NULL;
}

static bool is_fill_key(const char *name)
{
    size_t count;
    const struct fescue_option *table = fescue_option_table(&count);
    return !is_one_of(name, not_keys, sizeof not_keys / sizeof *not_keys) &&
           option_find(table, count, FESCUE_FOR_FILL, name) != NULL;
}

static bool is_night_key(const char *name)
{
    size_t count;
    const struct fescue_option *table = fescue_night_option_table(&count);
    return option_find(table, count, FESCUE_FOR_PLAN, name) != NULL;
}

static bool is_own_key(const char *name)
{
    return is_one_of(name, own_keys, sizeof own_keys / sizeof *own_keys);
}

/* ---- unknown keys --------------------------------------------------------------------------------------------------
 */

struct guess {
    const char *typed, *best;
    size_t fewest;
};

static void guess_offer(struct guess *guess, const char *name)
{
    size_t slips = fescue_slips(guess->typed, strlen(guess->typed), name);
    if (slips < guess->fewest) {
        guess->fewest = slips;
        guess->best = name;
    }
}

static fescue_status key_unknown(const struct plan *plan, const struct plan_section *section,
                                 const struct plan_entry *entry, bool is_night)
{
    struct guess guess = {.typed = entry->key, .fewest = SIZE_MAX};
    size_t count;
    const struct fescue_option *table = fescue_option_table(&count);
    for (size_t k = 0; k < count; k++)
        if (is_fill_key(table[k].name))
            guess_offer(&guess, table[k].name);
    for (size_t k = 0; !is_night && k < sizeof own_keys / sizeof *own_keys; k++)
        guess_offer(&guess, own_keys[k]);
    table = fescue_night_option_table(&count);
    for (size_t k = 0; is_night && k < count; k++)
        if (is_night_key(table[k].name))
            guess_offer(&guess, table[k].name);
    return plan_complain(plan, entry->line, "[%s] takes no key \"%s\"; the nearest is \"%s\"", section->name,
                         entry->key, guess.best);
}

/* ---- values --------------------------------------------------------------------------------------------------------
 */

/* Says again, with file, line and the key as it stands there, what fescue_options_set said of "--key". */
static fescue_status option_complain(const struct plan *plan, const struct plan_entry *entry)
{
    char said[SENTENCE_SIZE];
    snprintf(said, sizeof said, "%s", fescue_failure_text(plan->context));
    fescue_failure_clear(plan->context);
    const char *colon = strchr(said, ':');
    if (strncmp(said, "--", 2) != 0 || colon == NULL)
        return plan_complain(plan, entry->line, "%s", said);
    return plan_complain(plan, entry->line, "%s%s", entry->key, colon);
}

static fescue_status fill_set(const struct plan *plan, const struct plan_entry *entry, const char *name,
                              struct fescue_options *options)
{
    if (fescue_options_set(plan->context, options, name, entry->value) == FESCUE_OK)
        return FESCUE_OK;
    return option_complain(plan, entry);
}

static const char *digits_take(const char *text, int most, int *value)
{
    *value = 0;
    for (int k = 0; k < most && *text >= '0' && *text <= '9'; k++)
        *value = 10 * *value + (*text++ - '0');
    return text;
}

bool moment_parse(fescue_context *context, const char *text, bool allows_duration, struct moment *moment)
{
    int hours, minutes;
    const char *colon = digits_take(text, 2, &hours);
    const char *end = *colon == ':' ? digits_take(colon + 1, 2, &minutes) : colon;
    if (colon > text && *colon == ':' && end == colon + 3 && *end == '\0' && hours < 24 && minutes < 60) {
        *moment = (struct moment){MOMENT_CLOCK, 3600.0 * hours + 60.0 * minutes};
        return true;
    }
    struct fescue_options options = {0};
    bool is_time = allows_duration && fescue_options_set(context, &options, "time-limit", text) == FESCUE_OK;
    if (!is_time)
        fescue_failure_clear(context);
    *moment = (struct moment){MOMENT_AFTER, options.time_limit};
    return is_time && options.time_limit > 0;
}

/* ---- [night] -------------------------------------------------------------------------------------------------------
 */

static fescue_status night_section(struct plan *plan, const struct plan_section *section)
{
    fescue_status status = FESCUE_OK;
    struct fescue_options tried;
    fescue_options_standard(&tried);
    for (size_t k = 0; k < section->count; k++) {
        const struct plan_entry *entry = &section->entries[k];
        if (is_night_key(entry->key)) {
            if (fescue_night_options_set(plan->context, &plan->options, entry->key, entry->value) != FESCUE_OK)
                TRY(option_complain(plan, entry));
            if (strcmp(entry->key, "until") == 0 && !moment_parse(plan->context, entry->value, false, &plan->until))
                TRY(plan_complain(plan, entry->line, "until: found \"%s\", expected a time of day such as 05:30",
                                  entry->value));
        } else if (is_fill_key(entry->key)) {
            TRY(fill_set(plan, entry, entry->key, &tried));
        } else {
            TRY(key_unknown(plan, section, entry, true));
        }
    }
done:
    return status;
}

/* ---- one job -------------------------------------------------------------------------------------------------------
 */

static const struct plan_entry *entry_find(const struct plan_section *section, const char *key)
{
    for (size_t k = 0; k < section->count; k++)
        if (strcmp(section->entries[k].key, key) == 0)
            return &section->entries[k];
    return NULL;
}

void name_of_table(const char *path, char *name, size_t size)
{
    static const char *const suffixes[] = {".gz", ".csv", ".tsv", ".txt", ".mtx", ".mm"};
    const char *slash = strrchr(path, '/');
    snprintf(name, size, "%s", slash == NULL ? path : slash + 1);
    for (size_t k = 0; k < sizeof suffixes / sizeof *suffixes; k++) {
        size_t length = strlen(name), cut = strlen(suffixes[k]);
        if (length > cut && strcmp(name + length - cut, suffixes[k]) == 0)
            name[length - cut] = '\0';
    }
}

/* The path as seen from here: one that does not begin at the root begins at the plan. */
static fescue_status path_from_plan(const struct plan *plan, const char *path, char **out)
{
    return text_join(plan->context, out, path[0] == '/' ? "" : plan->folder, path, NULL);
}

/* One spelling for one place: no "./", no slash twice or at the end. */
static void path_tidy(char *path)
{
    char *to = path;
    for (const char *from = path; *from != '\0';) {
        bool begins = to == path || to[-1] == '/';
        if (begins && from[0] == '.' && from[1] == '/' && from[2] != '\0')
            from += 2;
        else if (*from == '/' && to > path && to[-1] == '/')
            from++;
        else
            *to++ = *from++;
    }
    while (to > path + 1 && to[-1] == '/')
        to--;
    *to = '\0';
}

/* `pattern` with {name} replaced; without {name}, behind a slash when there are several. */
static fescue_status output_name(const struct plan *plan, const char *pattern, const char *name, bool is_one_of_many,
                                 char **out)
{
    static const char hole[] = "{name}";
    fescue_context *context = plan->context;
    const char *at = strstr(pattern, hole), *rest = pattern;
    struct text text = {.context = context};
    char *path = NULL;
    fescue_status status;
    for (; at != NULL; at = strstr(rest, hole)) {
        text_add(&text, "%.*s%s", (int)(at - rest), rest, name);
        rest = at + strlen(hole);
    }
    text_add(&text, "%s", rest);
    if (is_one_of_many && rest == pattern)
        text_add(&text, "/%s", name);
    TRY(text_finish(&text, &path));
    path_tidy(path);
    TRY(path_from_plan(plan, path, out));
done:
    GIVE(context, &path);
    return status;
}

static fescue_status job_options(struct plan *plan, const struct plan_section *section, struct plan_job *job)
{
    fescue_status status = FESCUE_OK;
    const struct plan_section *night = NULL;
    for (size_t k = 0; k < plan->section_count; k++)
        if (strcmp(plan->sections[k].name, "night") == 0)
            night = &plan->sections[k];
    fescue_options_standard(&job->options);
    for (size_t k = 0; night != NULL && k < night->count; k++)
        if (is_fill_key(night->entries[k].key) && !is_night_key(night->entries[k].key))
            TRY(fill_set(plan, &night->entries[k], night->entries[k].key, &job->options));
    for (size_t k = 0; k < section->count; k++) {
        const struct plan_entry *entry = &section->entries[k];
        bool is_memory = strcmp(entry->key, "memory") == 0;
        job->has_memory = job->has_memory || is_memory || strcmp(entry->key, "memory-limit") == 0;
        if (is_memory)
            TRY(fill_set(plan, entry, "memory-limit", &job->options));
        else if (strcmp(entry->key, "deadline") == 0 &&
                 !moment_parse(plan->context, entry->value, true, &job->deadline))
            TRY(plan_complain(plan, entry->line,
                              "deadline: found \"%s\", expected a time of day such as 04:30, or a time such as 90m",
                              entry->value));
        else if (is_fill_key(entry->key))
            TRY(fill_set(plan, entry, entry->key, &job->options));
        else if (!is_own_key(entry->key))
            TRY(key_unknown(plan, section, entry, false));
    }
done:
    return status;
}

static fescue_status job_add(struct plan *plan, size_t which, const char *input, bool is_one_of_many)
{
    const struct plan_section *section = &plan->sections[which];
    const struct plan_entry *output = entry_find(section, "output");
    char name[256];
    fescue_status status = FESCUE_OK;
    if (plan->count == plan->capacity) {
        TRY(RESIZE(plan->context, 2 * plan->capacity + 8, &plan->jobs));
        plan->capacity = 2 * plan->capacity + 8;
    }
    struct plan_job *job = &plan->jobs[plan->count++];
    *job = (struct plan_job){.section = which};
    name_of_table(input, name, sizeof name);
    TRY(text_join(plan->context, &job->name, section->name, is_one_of_many ? "/" : "", is_one_of_many ? name : "",
                  NULL));
    TRY(memory_copy_text(plan->context, input, strlen(input), &job->input));
    if (output != NULL) {
        TRY(output_name(plan, output->value, name, is_one_of_many, &job->output));
    } else {
        const char *slash = strrchr(input, '/');
        size_t folder = slash == NULL ? 0 : (size_t)(slash + 1 - input);
        TRY(TAKE(plan->context, folder + strlen(name) + sizeof "-filled", &job->output));
        memcpy(job->output, input, folder);
        stpcpy(stpcpy(job->output + folder, name), "-filled");
    }
    TRY(job_options(plan, section, job));
done:
    return status;
}

static int path_compare(const void *a, const void *b)
{
    return strcmp(*(char *const *)a, *(char *const *)b);
}

/* One job a file, in the order of their names' bytes. No file today is no mistake: tomorrow there may be some. */
static fescue_status jobs_of_pattern(struct plan *plan, size_t which, const char *pattern, unsigned line)
{
    glob_t found = {0};
    fescue_status status = FESCUE_OK;
    int result = glob(pattern, GLOB_NOSORT, NULL, &found);
    if (result != 0 && result != GLOB_NOMATCH)
        TRY(plan_complain(plan, line, "input: %s cannot be looked up", pattern));
    if (result == 0)
        qsort(found.gl_pathv, found.gl_pathc, sizeof *found.gl_pathv, path_compare);
    for (size_t k = 0; result == 0 && k < found.gl_pathc; k++)
        TRY(job_add(plan, which, found.gl_pathv[k], true));
done:
    globfree(&found);
    return status;
}

static fescue_status jobs_of_section(struct plan *plan, size_t which)
{
    const struct plan_section *section = &plan->sections[which];
    const struct plan_entry *input = entry_find(section, "input");
    char *path = NULL;
    size_t first = plan->count;
    fescue_status status;
    if (input == NULL || input->value[0] == '\0')
        return plan_complain(plan, section->line, "[%s] has no input", section->name);
    if (strcmp(input->value, "-") == 0)
        return plan_complain(plan, input->line, "input: found \"-\", expected a file: nobody types at night");
    const struct plan_entry *output = entry_find(section, "output");
    if (output != NULL && output->value[0] == '\0')
        return plan_complain(plan, output->line, "output: found nothing, expected the name of a folder");
    TRY(path_from_plan(plan, input->value, &path));
    if (strpbrk(input->value, "*?[") != NULL)
        TRY(jobs_of_pattern(plan, which, path, input->line));
    else
        TRY(job_add(plan, which, path, false));
    if (plan->count == first) { /* the options of a section without files are read all the same */
        struct plan_job none = {.section = which};
        TRY(job_options(plan, section, &none));
    }
done:
    GIVE(plan->context, &path);
    return status;
}

/* ---- jobs among each other -----------------------------------------------------------------------------------------
 */

static unsigned job_line(const struct plan *plan, const struct plan_job *job, const char *key)
{
    const struct plan_section *section = &plan->sections[job->section];
    const struct plan_entry *entry = entry_find(section, key);
    return entry != NULL ? entry->line : section->line;
}

static fescue_status outputs_check(const struct plan *plan)
{
    for (size_t k = 0; k < plan->count; k++) {
        const struct plan_job *job = &plan->jobs[k];
        const char *slash = strrchr(job->input, '/');
        size_t folder = slash == NULL ? 1 : (size_t)(slash - job->input);
        if (strlen(job->output) == folder && memcmp(slash == NULL ? "." : job->input, job->output, folder) == 0)
            return plan_complain(plan, job_line(plan, job, "output"),
                                 "the results of %s would lie among its own input; give another output", job->name);
        for (size_t i = 0; i < k; i++)
            if (strcmp(job->output, plan->jobs[i].output) == 0)
                return plan_complain(plan, job_line(plan, job, "output"), "%s has the output of %s: %s", job->name,
                                     plan->jobs[i].name, job->output);
    }
    return FESCUE_OK;
}

/* Flags the jobs of the section that is named by [word, end). */
static bool after_mark(const struct plan *plan, const char *word, size_t length, struct plan_job *job)
{
    for (size_t k = 0; k < plan->section_count; k++) {
        const char *name = plan->sections[k].name;
        if (strlen(name) != length || memcmp(name, word, length) != 0 || strcmp(name, "night") == 0)
            continue;
        for (size_t i = 0; i < plan->count; i++)
            job->after[i] = job->after[i] || plan->jobs[i].section == k;
        return true;
    }
    return false;
}

static fescue_status after_read(struct plan *plan, struct plan_job *job)
{
    static const char between[] = ", ";
    const struct plan_entry *entry = entry_find(&plan->sections[job->section], "after");
    fescue_status status;
    TRY(TAKE(plan->context, plan->count, &job->after));
    for (const char *word = entry != NULL ? entry->value : ""; *word != '\0';) {
        word += strspn(word, between);
        size_t length = strcspn(word, ",");
        while (length > 0 && word[length - 1] == ' ')
            length--;
        if (length > 0 && !after_mark(plan, word, length, job))
            TRY(plan_complain(plan, entry->line, "after: there is no job [%.*s]", (int)length, word));
        word += strcspn(word, ",");
    }
done:
    return status;
}

/* Whether all jobs can be begun, each after those it waits for. */
static fescue_status circles_check(const struct plan *plan)
{
    bool *placed = NULL;
    size_t count = 0, before;
    fescue_status status;
    TRY(TAKE(plan->context, plan->count, &placed));
    do {
        before = count;
        for (size_t k = 0; k < plan->count; k++) {
            bool can = !placed[k];
            for (size_t i = 0; i < plan->count && can; i++)
                can = !plan->jobs[k].after[i] || placed[i];
            placed[k] = placed[k] || can;
            count += can;
        }
    } while (count > before);
    for (size_t k = 0; k < plan->count; k++)
        if (!placed[k])
            TRY(plan_complain(plan, job_line(plan, &plan->jobs[k], "after"), "%s waits for itself, by way of after",
                              plan->jobs[k].name));
done:
    GIVE(plan->context, &placed);
    return status;
}

fescue_status plan_jobs(struct plan *plan)
{
    fescue_status status = FESCUE_OK;
    bool has_job = false;
    fescue_night_options_standard(&plan->options);
    for (size_t k = 0; k < plan->section_count; k++)
        if (strcmp(plan->sections[k].name, "night") == 0)
            TRY(night_section(plan, &plan->sections[k]));
    for (size_t k = 0; k < plan->section_count; k++)
        if (strcmp(plan->sections[k].name, "night") != 0) {
            has_job = true;
            TRY(jobs_of_section(plan, k));
        }
    if (!has_job)
        TRY(FAIL(plan->context, FESCUE_USAGE, "%s: no job; one is a section such as [levels] with an input",
                 plan->path));
    TRY(outputs_check(plan));
    for (size_t k = 0; k < plan->count; k++)
        TRY(after_read(plan, &plan->jobs[k]));
    TRY(circles_check(plan));
done:
    return status;
}
