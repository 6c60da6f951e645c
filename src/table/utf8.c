/* SPDX-License-Identifier: MIT
 *
 * UTF-8 (RFC 3629).
 */
#include "table/table_internal.h"

/* How many bytes the character at `text` has in UTF-8 (RFC 3629, section 4): 0 when it is none. */
static size_t utf8_length(const unsigned char *text, const unsigned char *end)
{
    static const struct {
        unsigned char first, last, second_least, second_most;
        size_t length;
    } forms[] = {{0x00, 0x7f, 0, 0, 1},       {0xc2, 0xdf, 0x80, 0xbf, 2}, {0xe0, 0xe0, 0xa0, 0xbf, 3},
                 {0xe1, 0xec, 0x80, 0xbf, 3}, {0xed, 0xed, 0x80, 0x9f, 3}, {0xee, 0xef, 0x80, 0xbf, 3},
                 {0xf0, 0xf0, 0x90, 0xbf, 4}, {0xf1, 0xf3, 0x80, 0xbf, 4}, {0xf4, 0xf4, 0x80, 0x8f, 4}};
    size_t k = 0;
    while (k < sizeof forms / sizeof forms[0] && (*text < forms[k].first || *text > forms[k].last))
        k++;
    if (k == sizeof forms / sizeof forms[0] || (size_t)(end - text) < forms[k].length)
        return 0;
    if (forms[k].length > 1 && (text[1] < forms[k].second_least || text[1] > forms[k].second_most))
        return 0;
    for (size_t i = 2; i < forms[k].length; i++)
        if ((text[i] & 0xc0) != 0x80)
            return 0;
    return forms[k].length;
}

const char *utf8_fault(const char *text, const char *end)
{
    while (text < end) {
        size_t length = utf8_length((const unsigned char *)text, (const unsigned char *)end);
        if (length == 0)
            return text;
        text += length;
    }
    return NULL;
}
