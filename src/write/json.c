/* SPDX-License-Identifier: MIT
 *
 * A JSON value as text (RFC 8259), two blanks deeper a level. The one thing that the library's own printer cannot do is
 * reals as the shortest decimal that reads back the same; a real without point and exponent gets ".0", so that it stays
 * one. Objects within an array stand on one line each.
 */
#include "write/write_internal.h"

#include <string.h>

static int chunk_put(const char *chunk, size_t size, void *data)
{
    struct outfile *file = data;
    outfile_write(file, chunk, size);
    return outfile_status(file) == FESCUE_OK ? 0 : -1;
}

/* Texts and the constants: escaping is the library's. */
static bool scalar_put(struct outfile *file, const json_t *value)
{
    return json_dump_callback(value, chunk_put, file, JSON_ENCODE_ANY) == 0;
}

static bool real_put(struct outfile *file, double value)
{
    char text[32];
    real_to_text(value, FESCUE_DOUBLE, text);
    outfile_text(file, text);
    if (strpbrk(text, ".e") == NULL)
        outfile_text(file, ".0");
    return true;
}

static void line_begin(struct outfile *file, int depth)
{
    static const char blanks[] = "                ";
    outfile_text(file, "\n");
    outfile_write(file, blanks, (size_t)(2 * depth));
}

static bool key_put(struct outfile *file, const char *key)
{
    json_t *text = json_string(key);
    bool good = text != NULL && scalar_put(file, text);
    json_decref(text);
    outfile_text(file, ": ");
    return good;
}

static bool value_put(struct outfile *file, json_t *value, int depth, bool on_one_line);

static bool object_put(struct outfile *file, json_t *object, int depth, bool on_one_line)
{
    const char *key, *between = "";
    json_t *value;
    bool good = true;
    outfile_text(file, "{");
    json_object_foreach(object, key, value)
    {
        outfile_text(file, between);
        between = on_one_line ? ", " : ",";
        if (!on_one_line)
            line_begin(file, depth + 1);
        good = good && key_put(file, key) && value_put(file, value, depth + 1, on_one_line);
    }
    if (!on_one_line)
        line_begin(file, depth);
    outfile_text(file, "}");
    return good;
}

static bool array_put(struct outfile *file, const json_t *array, int depth)
{
    size_t k;
    json_t *value;
    bool good = true, is_long = json_is_object(json_array_get(array, 0));
    outfile_text(file, "[");
    json_array_foreach(array, k, value)
    {
        if (k > 0)
            outfile_text(file, is_long ? "," : ", ");
        if (is_long)
            line_begin(file, depth + 1);
        good = good && value_put(file, value, depth + 1, true);
    }
    if (is_long)
        line_begin(file, depth);
    outfile_text(file, "]");
    return good;
}

static bool value_put(struct outfile *file, json_t *value, int depth, bool on_one_line)
{
    switch (json_typeof(value)) {
    case JSON_OBJECT:
        return object_put(file, value, depth, on_one_line);
    case JSON_ARRAY:
        return array_put(file, value, depth);
    case JSON_REAL:
        return real_put(file, json_real_value(value));
    default:
        return scalar_put(file, value);
    }
}

bool json_put(struct outfile *file, json_t *value)
{
    bool good = value_put(file, value, 0, false);
    outfile_text(file, "\n");
    return good;
}
