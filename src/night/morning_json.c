/* SPDX-License-Identifier: MIT
 *
 * night.json: the morning for programs.
 *
 *   program, version, plan, began, ended, state, exit, trouble
 *   jobs      a list: job, input, output, state, exit, message, warning, unusual, shrunk, cut, figures, seconds, memory
 *
 * What is not known is null. Jansson takes memory from malloc; when it has none it gives NULL, which every call of it
 * passes on.
 */
#include "night/night_internal.h"

#include <jansson.h>
#include <math.h>
#include <string.h>

/* JSON is UTF-8; a path may be any bytes: those beyond ASCII become question marks in a text that is not UTF-8. */
static json_t *text_value(const char *text)
{
    char plain[SENTENCE_SIZE];
    json_t *value = json_string(text);
    if (value != NULL)
        return value;
    size_t length = strnlen(text, sizeof plain - 1);
    for (size_t k = 0; k < length; k++)
        plain[k] = (unsigned char)text[k] < 0x80 ? text[k] : '?';
    plain[length] = '\0';
    return json_string(plain);
}

static json_t *real_value(double value)
{
    return isfinite(value) ? json_real(value) : json_null();
}

static bool set(json_t *object, const char *key, json_t *value)
{
    return json_object_set_new(object, key, value) == 0;
}

static bool figures_set(json_t *object, const struct task *task)
{
    json_t *figures = json_object();
    bool good = figures != NULL;
    for (size_t k = 0; k < FIGURES; k++)
        good = good && set(figures, figure_columns[k], real_value(task->outcome.figure[k]));
    good = good && set(figures, "mae", real_value(task->outcome.mae)) &&
           set(figures, "distance", real_value(task->outcome.distance)) &&
           set(figures, "rows", json_integer(task->outcome.rows)) &&
           set(figures, "columns", json_integer(task->outcome.columns)) &&
           set(figures, "observed", json_integer(task->outcome.observed)) &&
           set(figures, "offsets", text_value(task->outcome.offsets));
    return set(object, "figures", figures) && good;
}

static json_t *task_value(const struct task *task)
{
    json_t *object = json_object();
    bool ran = task->attempt != 0 && task->state != STATE_UNCHANGED;
    bool has_figures = task->state == STATE_DONE || task->state == STATE_UNCHANGED;
    bool good = set(object, "job", text_value(task->job->name)) && set(object, "input", text_value(task->job->input)) &&
                set(object, "input_crc32", text_value(task->input_sum)) &&
                set(object, "output", text_value(task->job->output)) &&
                set(object, "state", json_string(state_words[task->state])) &&
                set(object, "exit", ran ? json_integer(fescue_status_exit_code(task->status)) : json_null()) &&
                set(object, "message", text_value(task->message)) &&
                set(object, "warning", text_value(task->warning)) && set(object, "unusual", text_value(task->flags)) &&
                set(object, "shrunk", text_value(task->shrunk)) &&
                set(object, "cut", json_boolean(task->outcome.is_cut)) &&
                set(object, "threads", ran ? json_integer((json_int_t)task->threads) : json_null()) &&
                set(object, "seconds", ran ? real_value(task->seconds) : json_null()) &&
                set(object, "processor_seconds", ran ? real_value(task->cpu) : json_null()) &&
                set(object, "memory_bytes", ran ? json_integer(task->memory) : json_null());
    good = good && (has_figures ? figures_set(object, task) : set(object, "figures", json_null()));
    if (good)
        return object;
    json_decref(object);
    return NULL;
}

static json_t *night_value(const struct fescue_night *night)
{
    json_t *object = json_object(), *jobs = json_array();
    fescue_status verdict = night_verdict(night);
    bool good = jobs != NULL;
    for (size_t k = 0; k < night->plan.count; k++)
        good = json_array_append_new(jobs, task_value(&night->tasks[k])) == 0 && good;
    good = set(object, "program", json_string("fescue")) && set(object, "version", json_string(FESCUE_VERSION)) &&
           set(object, "plan", text_value(night->plan.path)) && set(object, "began", json_string(night->began)) &&
           set(object, "ended", json_string(night->ended)) &&
           set(object, "state", json_string(fescue_status_text(verdict))) &&
           set(object, "exit", json_integer(fescue_status_exit_code(verdict))) &&
           set(object, "trouble", text_value(night->trouble)) && good;
    if (set(object, "jobs", jobs) && good)
        return object;
    json_decref(object);
    return NULL;
}

fescue_status morning_json(const struct fescue_night *night, struct output *output)
{
    struct outfile *file;
    json_t *value = NULL;
    fescue_status status;
    TRY(output_add(output, "night.json", &file));
    value = night_value(night);
    bool good = value != NULL && json_put(file, value);
    TRY(outfile_status(file));
    if (!good)
        TRY(FAIL(night->context, FESCUE_NO_MEMORY, "the system has no memory left for the record of the night"));
done:
    json_decref(value);
    return status;
}
