/* SPDX-License-Identifier: MIT
 *
 * fescue_sow: a synthetic table and the truth it was made from, in one directory, sealed by sow.json, which says how to
 * make it again. Nothing in the files depends on time or place.
 */
#include "job/sow_internal.h"

#include <math.h>
#include <stdio.h>
#include <string.h>

enum { SCENE_PLAIN, SCENE_FEN, SCENE_CIDER }; /* the words of --scene */

static const char seal[] = "sow.json";

struct random_stream sow_stream(const struct sowing *sowing, unsigned which, uint64_t index)
{
    struct random_stream stream = random_open((uint64_t)sowing->options->seed, RANDOM_SOW, which);
    stream.index = index;
    return stream;
}

/* ---- options ---------------------------------------------------------------------------------------------------- */

static bool is_one_of(const char *name, const char *const *names)
{
    for (; *names != NULL; names++)
        if (strcmp(name, *names) == 0)
            return true;
    return false;
}

/* A scene has its own size and shape: an option that would go unheard is refused. */
static fescue_status scene_options_check(fescue_context *context, const struct fescue_sow_options *options)
{
    static const char *const heard[] = {"output", "scene", "gzip", "seed", "threads", NULL};
    struct fescue_sow_options standard;
    char given[SOW_TEXT_SIZE], usual[SOW_TEXT_SIZE];
    size_t count;
    const struct fescue_option *table = fescue_sow_option_table(&count);
    fescue_sow_options_standard(&standard);
    for (size_t k = 0; k < count; k++) {
        if (is_one_of(table[k].name, heard))
            continue;
        fescue_option_text(&table[k], options, given, sizeof given);
        fescue_option_text(&table[k], &standard, usual, sizeof usual);
        if (strcmp(given, usual) != 0)
            return FAIL(context, FESCUE_USAGE,
                        "--%s: found \"%.100s\", but a scene has its own; the option is for plain tables",
                        table[k].name, given);
    }
    return FESCUE_OK;
}

/* ---- the record ------------------------------------------------------------------------------------------------- */

/* A number, or null where there is none: JSON knows no nan. */
static void number_write(struct outfile *file, const char *name, double value)
{
    outfile_format(file, "  \"%s\": ", name);
    if (isfinite(value))
        outfile_real(file, value, FESCUE_DOUBLE);
    else
        outfile_text(file, "null");
    outfile_text(file, ",\n");
}

/* All options but the place and the workers, on which nothing depends. Their texts are words and numbers, which need no
   escapes: the one free text, the spectrum, was found to be a list of numbers or a known word. */
static void options_write(struct outfile *file, const struct fescue_sow_options *options)
{
    static const char *const unheard[] = {"output", "threads", NULL};
    char text[SOW_TEXT_SIZE];
    size_t count, written = 0;
    const struct fescue_option *table = fescue_sow_option_table(&count);
    outfile_text(file, "  \"options\": {");
    for (size_t k = 0; k < count; k++) {
        if (is_one_of(table[k].name, unheard))
            continue;
        fescue_option_text(&table[k], options, text, sizeof text);
        outfile_format(file, "%s\n    \"%s\": \"%s\"", written++ > 0 ? "," : "", table[k].name, text);
    }
    outfile_text(file, "\n  }\n");
}

static fescue_status record_write(const struct sowing *sowing)
{
    struct outfile *file = NULL;
    fescue_status status;
    TRY(output_add(sowing->output, seal, &file));
    outfile_text(file, "{\n  \"made_by\": \"fescue sow " FESCUE_VERSION "\",\n");
    outfile_format(file, "  \"rows\": %llu,\n  \"columns\": %llu,\n  \"observed\": %llu,\n",
                   (unsigned long long)sowing->rows, (unsigned long long)sowing->columns,
                   (unsigned long long)sowing->observed);
    number_write(file, "noise", sowing->noise);
    number_write(file, "rmse_floor", sowing->floor);
    faults_write(sowing, file);
    options_write(file, sowing->options);
    outfile_text(file, "}\n");
    TRY(outfile_status(file));
done:
    return status;
}

/* What an older sowing in the same place has and this one does not must not lie beside its record. */
static fescue_status names_retire(struct output *output)
{
    static const char *const names[] = {"table.mtx",
                                        "table.csv",
                                        "truth.mtx",
                                        "truth.csv",
                                        "table.mtx.gz",
                                        "table.csv.gz",
                                        "truth.mtx.gz",
                                        "truth.csv.gz",
                                        "readings.mtx",
                                        "readings.mtx.gz",
                                        "truth-left.mtx",
                                        "truth-right.mtx",
                                        "truth-spectrum.mtx",
                                        "truth-row-offsets.mtx",
                                        "truth-column-offsets.mtx"};
    fescue_status status = FESCUE_OK;
    for (size_t k = 0; k < sizeof names / sizeof names[0] && status == FESCUE_OK; k++)
        status = output_retire(output, names[k]);
    return status;
}

static fescue_status summary_write(const struct sowing *sowing, char **text)
{
    char line[1024];
    const char *suffix = sowing->options->gzip ? ".gz" : "";
    double cells = (double)sowing->rows * (double)sowing->columns;
    int length = snprintf(line, sizeof line, "sown: %llu rows x %llu columns, %llu cells seen (%.3g %%)\n",
                          (unsigned long long)sowing->rows, (unsigned long long)sowing->columns,
                          (unsigned long long)sowing->observed, 100 * (double)sowing->observed / cells);
    length += snprintf(line + length, sizeof line - (size_t)length, "table %s%s, truth %s%s\n", sowing->table, suffix,
                       sowing->truth, strchr(sowing->truth, '*') == NULL ? suffix : "");
    if (isfinite(sowing->floor))
        length += snprintf(line + length, sizeof line - (size_t)length,
                           "noise %.4g; the best RMSE over unseen cells is about %.4g\n", sowing->noise, sowing->floor);
    return memory_copy_text(sowing->context, line, (size_t)length, text);
}

/* ---- all -------------------------------------------------------------------------------------------------------- */

fescue_status fescue_sow(fescue_context *context, const struct fescue_sow_options *options, const char *directory,
                         char **text)
{
    static fescue_status (*const scenes[])(struct sowing * sowing) = {
        [SCENE_PLAIN] = sow_plain, [SCENE_FEN] = sow_fen, [SCENE_CIDER] = sow_cider};
    struct sowing sowing = {.context = context, .options = options, .noise = NAN, .floor = NAN};
    fescue_status status;
    *text = NULL;
    if (options->scene != SCENE_PLAIN)
        TRY(scene_options_check(context, options));
    TRY(output_open(context, directory, seal, &sowing.output));
    TRY(scenes[options->scene](&sowing));
    TRY(record_write(&sowing));
    TRY(names_retire(sowing.output));
    TRY(summary_write(&sowing, text));
    TRY(output_publish(&sowing.output));
done:
    output_abandon(&sowing.output);
    if (status != FESCUE_OK)
        fescue_text_free(context, text);
    return status;
}

void fescue_text_free(fescue_context *context, char **text)
{
    GIVE(context, text);
}
