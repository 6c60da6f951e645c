/* SPDX-License-Identifier: MIT
 *
 * Sentences for a person. They quote labels and paths, which come from outside and may hold line breaks, the escapes of
 * a terminal or bytes that are no text at all: a message stays one plain line of UTF-8.
 */
#include "base/context_internal.h"

#include <string.h>

static bool is_continuation(char byte)
{
    return ((unsigned char)byte & 0xc0) == 0x80;
}

/* A sentence that did not fit ends in "..."; no character is cut in two. */
static size_t sentence_cut(char *text, size_t size)
{
    size_t end = size - sizeof "...";
    while (end > 0 && is_continuation(text[end]))
        end--;
    memcpy(text + end, "...", sizeof "...");
    return end + 3;
}

/* Bytes of the UTF-8 character at `text`; 0 when it is none, as RFC 3629 says (no overlong form, no surrogate, nothing
   above U+10FFFF), or when it is a control character. */
static size_t character_length(const char *text)
{
    const unsigned char *byte = (const unsigned char *)text;
    if (byte[0] < 0x80)
        return byte[0] >= ' ' && byte[0] != 0x7f;
    size_t length = byte[0] >= 0xf0 ? 4 : byte[0] >= 0xe0 ? 3 : 2;
    if (byte[0] < 0xc2 || byte[0] > 0xf4)
        return 0;
    for (size_t k = 1; k < length; k++)
        if (!is_continuation(text[k])) /* the NUL at the end is none either */
            return 0;
    bool overlong = (byte[0] == 0xe0 && byte[1] < 0xa0) || (byte[0] == 0xf0 && byte[1] < 0x90);
    bool surrogate = byte[0] == 0xed && byte[1] >= 0xa0;
    bool too_large = byte[0] == 0xf4 && byte[1] >= 0x90;
    bool control = byte[0] == 0xc2 && byte[1] < 0xa0; /* U+0080 .. U+009F, among them a terminal's CSI */
    return overlong || surrogate || too_large || control ? 0 : length;
}

static void sentence_make_plain(char *text)
{
    while (*text != '\0') {
        size_t length = character_length(text);
        if (length == 0)
            *text = '?';
        text += length == 0 ? 1 : length;
    }
}

int sentence_format(const fescue_context *context, char *text, size_t size, const char *format, va_list arguments)
{
    int length = text_format(context, text, size, format, arguments);
    if (length < 0) {
        text[0] = '\0';
        return length;
    }
    if ((size_t)length >= size)
        length = (int)sentence_cut(text, size);
    sentence_make_plain(text);
    return length;
}
