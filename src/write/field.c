/* SPDX-License-Identifier: MIT
 *
 * One field of delimited text, quoted as RFC 4180 says: within double quotes, a quote inside doubled. Quoted is what
 * holds the separator, a quote or a line break, and what begins or ends with a blank, which some readers take off.
 */
#include "write/write.h"

#include <string.h>

static bool is_blank(char byte)
{
    return byte == ' ' || byte == '\t';
}

static bool has_to_be_quoted(const char *text, char separator)
{
    const char special[] = {'"', '\n', '\r', separator, '\0'};
    size_t length = strlen(text);
    if (length > 0 && (is_blank(text[0]) || is_blank(text[length - 1])))
        return true;
    return strpbrk(text, special) != NULL;
}

void write_field(struct outfile *file, const char *text, char separator)
{
    if (!has_to_be_quoted(text, separator)) {
        outfile_text(file, text);
        return;
    }
    outfile_write(file, "\"", 1);
    for (size_t length; *text != '\0'; text += length) {
        length = strcspn(text, "\"");
        if (text[length] == '"') {
            outfile_write(file, text, ++length);
            outfile_write(file, "\"", 1);
        } else {
            outfile_write(file, text, length);
        }
    }
    outfile_write(file, "\"", 1);
}
