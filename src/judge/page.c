/* SPDX-License-Identifier: MIT
 *
 * A text that grows, and the two ways in which foreign text is made safe in it: labels for a terminal, arguments for a
 * shell.
 */
#include "judge/judge_internal.h"

#include <stdio.h>
#include <string.h>

static void page_reserve(struct page *page, size_t more)
{
    size_t least = page->length + more + 1;
    if (page->status != FESCUE_OK || least <= page->capacity)
        return;
    size_t capacity = least > 2 * page->capacity ? least + 256 : 2 * page->capacity;
    page->status = RESIZE(page->context, capacity, &page->bytes);
    if (page->status == FESCUE_OK)
        page->capacity = capacity;
}

static void page_bytes(struct page *page, const char *bytes, size_t length)
{
    page_reserve(page, length);
    if (page->status != FESCUE_OK)
        return;
    memcpy(page->bytes + page->length, bytes, length);
    page->length += length;
    page->bytes[page->length] = '\0';
}

void page_add(struct page *page, const char *format, ...)
{
    va_list arguments, again;
    va_start(arguments, format);
    va_copy(again, arguments);
    int length = vsnprintf(NULL, 0, format, arguments);
    if (length > 0)
        page_reserve(page, (size_t)length);
    if (length > 0 && page->status == FESCUE_OK) {
        vsnprintf(page->bytes + page->length, (size_t)length + 1, format, again);
        page->length += (size_t)length;
    }
    va_end(again);
    va_end(arguments);
}

void page_count(struct page *page, uint64_t count, const char *one, const char *many)
{
    page_add(page, "%llu %s", (unsigned long long)count, count == 1 ? one : many);
}

/* The code point at s and its length in bytes; a length of 1 and -1 when the bytes are not UTF-8. */
static int32_t point_decode(const unsigned char *s, size_t *length)
{
    static const int32_t least[] = {0, 0, 0x80, 0x800, 0x10000};
    size_t bytes = s[0] < 0x80 ? 1 : s[0] >> 5 == 6 ? 2 : s[0] >> 4 == 14 ? 3 : s[0] >> 3 == 30 ? 4 : 0;
    *length = 1;
    if (bytes == 0)
        return -1;
    int32_t point = bytes == 1 ? s[0] : s[0] & (0x7f >> bytes);
    for (size_t k = 1; k < bytes; k++) {
        if (s[k] >> 6 != 2) /* the terminating NUL too */
            return -1;
        point = point << 6 | (s[k] & 0x3f);
    }
    if (point < least[bytes] || point > 0x10ffff || (point >= 0xd800 && point <= 0xdfff))
        return -1;
    *length = bytes;
    return point;
}

/* Control characters, and those that turn the direction of writing or break lines without being seen. */
static bool is_hidden(int32_t point)
{
    return point < 0x20 || (point >= 0x7f && point < 0xa0) || (point >= 0x200b && point <= 0x200f) ||
           (point >= 0x2028 && point <= 0x202e) || (point >= 0x2060 && point <= 0x2069) || point == 0xfeff;
}

void page_label(struct page *page, const char *label)
{
    enum { LONGEST = 40 }; /* characters: half a line of a terminal */
    const unsigned char *s = (const unsigned char *)label;
    size_t length;
    for (size_t shown = 0; *s != '\0'; shown++, s += length) {
        if (shown == LONGEST) {
            page_add(page, "...");
            return;
        }
        int32_t point = point_decode(s, &length);
        if (point < 0)
            page_add(page, "\\x%02x", *s);
        else if (is_hidden(point))
            page_add(page, point < 0x100 ? "\\x%02x" : "\\u%04x", (unsigned)point);
        else
            page_bytes(page, (const char *)s, length);
    }
}

void page_argument(struct page *page, const char *argument)
{
    static const char plain[] = "abcdefghijklmnopqrstuvwxyzABCDEFGHIJKLMNOPQRSTUVWXYZ0123456789_./-+:,=@%";
    const unsigned char *s = (const unsigned char *)argument;
    size_t length;
    if (*argument != '\0' && strspn(argument, plain) == strlen(argument)) {
        page_add(page, "%s", argument);
        return;
    }
    page_add(page, "'");
    for (; *s != '\0'; s += length) {
        int32_t point = point_decode(s, &length);
        if (point == '\'')
            page_add(page, "'\\''");
        else if (point < 0 || is_hidden(point))
            page_add(page, "?");
        else
            page_bytes(page, (const char *)s, length);
    }
    page_add(page, "'");
}

void page_wrap(struct page *page, size_t from)
{
    enum { WIDTH = 100, INDENT = 4 };
    size_t begin = from, blank = 0;
    for (size_t k = from; page->status == FESCUE_OK && k < page->length; k++) {
        if (page->bytes[k] == '\n') {
            begin = k + 1;
            blank = 0;
            continue;
        }
        if (k - begin >= WIDTH && blank > begin + INDENT) {
            page_reserve(page, INDENT);
            if (page->status != FESCUE_OK)
                return;
            memmove(page->bytes + blank + 1 + INDENT, page->bytes + blank + 1, page->length - blank);
            memset(page->bytes + blank + 1, ' ', INDENT);
            page->bytes[blank] = '\n';
            page->length += INDENT;
            begin = blank + 1;
            k = begin + INDENT;
            blank = 0;
        }
        if (page->bytes[k] == ' ')
            blank = k;
    }
}

fescue_status page_close(struct page *page, char **out)
{
    page_reserve(page, 0);
    if (page->status != FESCUE_OK) {
        GIVE(page->context, &page->bytes);
        return page->status;
    }
    page->bytes[page->length] = '\0';
    *out = page->bytes;
    page->bytes = NULL;
    return FESCUE_OK;
}
