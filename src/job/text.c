/* SPDX-License-Identifier: MIT
 *
 * Text for people, as it grows.
 */
#include "job/job_internal.h"

#include <assert.h>
#include <math.h>
#include <stdio.h>
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

/* Through the digits that the C library prints, for it rounds correctly; what it prints between the first two of them
   is the locale's and left out. */
const char *real_to_words(double value, int digits, char text[32])
{
    char printed[64], plain[64];
    size_t used = 0;
    assert(digits >= 1 && digits <= 15);
    snprintf(printed, sizeof printed, "%.*e", digits - 1, value);
    for (const char *next = printed; *next != '\0' && isfinite(value); next++) {
        bool is_digit = *next >= '0' && *next <= '9';
        if (is_digit || *next == '-' || *next == '+' || *next == 'e')
            plain[used++] = *next;
        if (is_digit && digits > 1 && memchr(plain, '.', used) == NULL)
            plain[used++] = '.';
    }
    number_parse(plain, plain + used, &value);
    real_to_text(value, FESCUE_DOUBLE, text);
    return text;
}

void words_wrap(struct text *text, const char *words)
{
    enum { WIDTH = 80 };
    while (*words != '\0') {
        size_t length = strlen(words);
        if (length > WIDTH)
            for (length = WIDTH; words[length] != ' ';)
                length--;
        text_add(text, "%.*s\n", (int)length, words);
        words += length;
        words += *words == ' ';
    }
}
