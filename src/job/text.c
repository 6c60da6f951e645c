/* SPDX-License-Identifier: MIT
 *
 * Text for people, as it grows.
 */
#include "job/job_internal.h"

#include <assert.h>
#include <math.h>
#include <stdio.h>
#include <stdlib.h>
#include <string.h>

enum { TEXT_FIRST = 1024, TEXT_PIECE = 1024 };

static void text_reserve(struct text *text, size_t size)
{
    size_t capacity = text->capacity == 0 ? TEXT_FIRST : text->capacity;
    while (capacity < size)
        capacity *= 2;
    if (capacity == text->capacity)
        return;
    text->status = RESIZE(text->context, capacity, &text->bytes);
    if (text->status == FESCUE_OK)
        text->capacity = capacity;
}

void text_add(struct text *text, const char *format, ...)
{
    char piece[TEXT_PIECE];
    va_list arguments;
    va_start(arguments, format);
    int put = vsnprintf(piece, sizeof piece, format, arguments);
    va_end(arguments);
    size_t length = put < 0 ? 0 : put < TEXT_PIECE ? (size_t)put : TEXT_PIECE - 1;
    if (text->status == FESCUE_OK)
        text_reserve(text, text->length + length + 1);
    if (text->status != FESCUE_OK)
        return;
    memcpy(text->bytes + text->length, piece, length);
    text->length += length;
    text->bytes[text->length] = '\0';
}

fescue_status text_finish(struct text *text, char **out)
{
    if (text->status == FESCUE_OK)
        text_reserve(text, 1);
    if (text->status != FESCUE_OK)
        GIVE(text->context, &text->bytes);
    *out = text->bytes;
    text->bytes = NULL;
    return text->status;
}

/* Rounded to a whole number of units of 10^n, which a division or product by an exact power of ten turns into the
   double nearest to the decimal; its shortest text is that decimal. Powers of ten are exact up to 10^22; beyond, the
   value is given in full. */
const char *real_to_words(double value, int digits, char text[32])
{
    assert(digits >= 1 && digits <= 15);
    double size = fabs(value);
    if (isfinite(value) && size >= 1e-7 && size < 1e20) {
        int places = digits - 1 - (int)floor(log10(size));
        double power = pow(10, abs(places));
        value = places >= 0 ? round(value * power) / power : round(value / power) * power;
    }
    real_to_text(value, FESCUE_DOUBLE, text);
    return text;
}
