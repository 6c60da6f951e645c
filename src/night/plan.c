/* SPDX-License-Identifier: MIT
 *
 * The plan as a file: sections and lines "key = value", read with libinih.
 *
 *     [night]                  defaults and limits
 *     until = 05:30
 *     [levels]                 one section a job
 *     input = levels-*.csv.gz
 *
 * libinih is given one line at a time by line_give, which counts them, so that every complaint can name one; which
 * takes off leading blanks, so that no line is taken for the continuation of the one before; which notes the sections,
 * since libinih says nothing of one without keys; and which refuses lines that do not fit into its buffer, which it
 * would cut. The bytes come through the file calls of the context.
 */
#include "night/night_internal.h"

#include <ini.h>
#include <stdio.h>
#include <string.h>

enum { PLAN_MOST = 4 * 1024 * 1024 }; /* bytes of a plan; a longer file is none */

struct reading {
    struct plan *plan;
    const char *next, *end;
    unsigned line;
    fescue_status status; /* of the first failure */
};

fescue_status text_join(fescue_context *context, char **out, ...)
{
    va_list pieces;
    size_t size = 1;
    va_start(pieces, out);
    for (const char *piece = va_arg(pieces, const char *); piece != NULL; piece = va_arg(pieces, const char *))
        size += strlen(piece);
    va_end(pieces);
    fescue_status status = TAKE(context, size, out);
    if (status != FESCUE_OK)
        return status;
    char *end = *out;
    va_start(pieces, out);
    for (const char *piece = va_arg(pieces, const char *); piece != NULL; piece = va_arg(pieces, const char *))
        end = stpcpy(end, piece);
    va_end(pieces);
    return FESCUE_OK;
}

fescue_status plan_complain(const struct plan *plan, unsigned line, const char *format, ...)
{
    char sentence[SENTENCE_SIZE];
    va_list arguments;
    va_start(arguments, format);
    vsnprintf(sentence, sizeof sentence, format, arguments);
    va_end(arguments);
    return FAIL(plan->context, FESCUE_USAGE, "%s: line %u: %s", plan->path, line, sentence);
}

/* ---- sections and entries ------------------------------------------------------------------------------------------
 */

static fescue_status section_add(struct plan *plan, const char *name, size_t length, unsigned line)
{
    static const char taken[] = "abcdefghijklmnopqrstuvwxyzABCDEFGHIJKLMNOPQRSTUVWXYZ0123456789-_. ";
    fescue_status status = FESCUE_OK;
    if (length == 0 || length > 60 || strspn(name, taken) < length)
        return plan_complain(plan, line,
                             "found the section [%.*s], expected a name of letters, digits, blanks, - _ and .",
                             (int)(length < 80 ? length : 80), name);
    for (size_t k = 0; k < plan->section_count; k++)
        if (strlen(plan->sections[k].name) == length && memcmp(plan->sections[k].name, name, length) == 0)
            return plan_complain(plan, line, "the section [%s] comes a second time, after line %u",
                                 plan->sections[k].name, plan->sections[k].line);
    if (plan->section_count == plan->section_capacity) {
        TRY(RESIZE(plan->context, 2 * plan->section_capacity + 8, &plan->sections));
        plan->section_capacity = 2 * plan->section_capacity + 8;
    }
    struct plan_section *section = &plan->sections[plan->section_count];
    *section = (struct plan_section){.line = line};
    TRY(memory_copy_text(plan->context, name, length, &section->name));
    plan->section_count++;
done:
    return status;
}

static fescue_status entry_add(struct plan *plan, const char *key, const char *value, unsigned line)
{
    fescue_status status = FESCUE_OK;
    if (plan->section_count == 0)
        return plan_complain(plan, line,
                             "found \"%s\" before any section, expected [night] or a job's name in brackets", key);
    struct plan_section *section = &plan->sections[plan->section_count - 1];
    for (size_t k = 0; k < section->count; k++)
        if (strcmp(section->entries[k].key, key) == 0)
            return plan_complain(plan, line, "\"%s\" comes a second time in [%s], after line %u", key, section->name,
                                 section->entries[k].line);
    if (section->count == section->capacity) {
        TRY(RESIZE(plan->context, 2 * section->capacity + 8, &section->entries));
        section->capacity = 2 * section->capacity + 8;
    }
    struct plan_entry *entry = &section->entries[section->count++];
    *entry = (struct plan_entry){.line = line};
    TRY(memory_copy_text(plan->context, key, strlen(key), &entry->key));
    TRY(memory_copy_text(plan->context, value, strlen(value), &entry->value));
done:
    return status;
}

/* ---- what libinih calls --------------------------------------------------------------------------------------------
 */

static void reading_section(struct reading *reading, const char *text)
{
    const char *end = strchr(text, ']');
    if (end == NULL)
        reading->status = plan_complain(reading->plan, reading->line, "a section without its \"]\"");
    else
        reading->status = section_add(reading->plan, text + 1, (size_t)(end - text - 1), reading->line);
}

/* As fgets; NULL at the end, and after the first failure. */
static char *line_give(char *text, int size, void *stream)
{
    struct reading *reading = stream;
    while (reading->next < reading->end && reading->status == FESCUE_OK) {
        const char *first = reading->next, *end = memchr(first, '\n', (size_t)(reading->end - first));
        end = end == NULL ? reading->end : end;
        reading->next = end < reading->end ? end + 1 : end;
        reading->line++;
        while (first < end && (*first == ' ' || *first == '\t'))
            first++;
        size_t length = (size_t)(end - first);
        if (memchr(first, '\0', length) != NULL) {
            reading->status = plan_complain(reading->plan, reading->line, "found a byte 0, expected text");
        } else if ((int64_t)length > size - 3) {
            reading->status =
                plan_complain(reading->plan, reading->line, "the line has %zu bytes, more than %d", length, size - 3);
        } else {
            memcpy(text, first, length);
            text[length] = '\n';
            text[length + 1] = '\0';
            if (text[0] == '[')
                reading_section(reading, text);
            if (reading->status == FESCUE_OK)
                return text;
        }
    }
    return NULL;
}

static int entry_take(void *user, const char *section, const char *key, const char *value)
{
    struct reading *reading = user;
    (void)section; /* cut to 50 bytes there; line_give has it whole */
    if (reading->status == FESCUE_OK)
        reading->status = entry_add(reading->plan, key, value, reading->line);
    return reading->status == FESCUE_OK;
}

/* ---- the whole -----------------------------------------------------------------------------------------------------
 */

static fescue_status bytes_read(fescue_context *context, const char *path, char **bytes, size_t *count)
{
    int descriptor = -1;
    fescue_status status;
    size_t got;
    *count = 0;
    TRY(TAKE(context, PLAN_MOST + 1, bytes));
    TRY(file_open_read(context, path, &descriptor));
    do {
        TRY(file_read(context, path, descriptor, *bytes + *count, PLAN_MOST - *count, &got));
        *count += got;
    } while (got > 0 && *count < PLAN_MOST);
    if (*count == PLAN_MOST)
        TRY(FAIL(context, FESCUE_USAGE, "%s: longer than any plan", path));
done:
    file_close(context, &descriptor);
    return status;
}

/* Folder and stem of the path. */
static fescue_status plan_name(struct plan *plan, const char *path)
{
    static const char *const suffixes[] = {".ini", ".plan", ".conf"};
    const char *slash = strrchr(path, '/');
    size_t folder = slash == NULL ? 0 : (size_t)(slash + 1 - path), length = strlen(path);
    fescue_status status;
    TRY(memory_copy_text(plan->context, path, length, &plan->path));
    TRY(memory_copy_text(plan->context, path, folder, &plan->folder));
    for (size_t k = 0; k < sizeof suffixes / sizeof *suffixes; k++) {
        size_t size = strlen(suffixes[k]);
        if (length > folder + size && strcmp(path + length - size, suffixes[k]) == 0) {
            length -= size;
            break;
        }
    }
    TRY(memory_copy_text(plan->context, path, length, &plan->stem));
done:
    return status;
}

fescue_status plan_read(fescue_context *context, const char *path, struct plan *plan)
{
    char *bytes = NULL;
    struct reading reading = {.plan = plan};
    size_t count;
    fescue_status status;
    *plan = (struct plan){.context = context};
    TRY(plan_name(plan, path));
    TRY(bytes_read(context, path, &bytes, &count));
    reading.next = bytes;
    reading.end = bytes + count;
    int wrong = ini_parse_stream(line_give, &reading, entry_take, &reading);
    TRY(reading.status);
    if (wrong > 0)
        TRY(plan_complain(plan, (unsigned)wrong, "found neither [section] nor key = value"));
    if (wrong < 0)
        TRY(FAIL(context, FESCUE_NO_MEMORY, "%s: no memory to read the plan", path));
done:
    GIVE(context, &bytes);
    if (status != FESCUE_OK)
        plan_free(plan);
    return status;
}

void plan_free(struct plan *plan)
{
    fescue_context *context = plan->context;
    for (size_t k = 0; k < plan->section_count; k++) {
        struct plan_section *section = &plan->sections[k];
        for (size_t i = 0; i < section->count; i++) {
            GIVE(context, &section->entries[i].key);
            GIVE(context, &section->entries[i].value);
        }
        GIVE(context, &section->entries);
        GIVE(context, &section->name);
    }
    for (size_t k = 0; k < plan->count; k++) {
        struct plan_job *job = &plan->jobs[k];
        GIVE(context, &job->name);
        GIVE(context, &job->input);
        GIVE(context, &job->output);
        GIVE(context, &job->after);
    }
    GIVE(context, &plan->sections);
    GIVE(context, &plan->jobs);
    GIVE(context, &plan->path);
    GIVE(context, &plan->folder);
    GIVE(context, &plan->stem);
    *plan = (struct plan){.context = context};
}
