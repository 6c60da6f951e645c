/* SPDX-License-Identifier: MIT
 *
 * Sentences for people.
 */
#include "cli.h"

#include <errno.h>
#include <stdarg.h>
#include <string.h>

/* What the user typed may hold line breaks or terminal escapes: a message stays one plain line. */
static void text_make_plain(char *text)
{
    for (; *text != '\0'; text++)
        if ((unsigned char)*text < ' ' || *text == 0x7f)
            *text = '?';
}

void say_failure(const char *sentence)
{
    fprintf(stderr, "fescue: %s\n", sentence);
}

void say_stop(const char *format, ...)
{
    char sentence[1024];
    va_list arguments;
    va_start(arguments, format);
    vsnprintf(sentence, sizeof sentence, format, arguments);
    va_end(arguments);
    text_make_plain(sentence);
    say_failure(sentence);
}

fescue_status say_usage(const char *format, ...)
{
    char sentence[1024];
    va_list arguments;
    va_start(arguments, format);
    vsnprintf(sentence, sizeof sentence, format, arguments);
    va_end(arguments);
    text_make_plain(sentence);
    say_failure(sentence);
    return FESCUE_USAGE;
}

void say_summary(const struct request *request, const char *text, const char *place)
{
    size_t length = strlen(text);
    if (request->quiet)
        return;
    progress_clear(request->progress);
    fprintf(stderr, "%s%sresults in %s\n", text, length > 0 && text[length - 1] != '\n' ? "\n" : "", place);
}

fescue_status standard_output_close(void)
{
    bool lost = ferror(stdout) != 0;
    errno = 0;
    if (fclose(stdout) == 0 && !lost)
        return FESCUE_OK;
    fprintf(stderr, "fescue: standard output cannot be written%s%s\n", errno != 0 ? ": " : "",
            errno != 0 ? strerror(errno) : "");
    return FESCUE_CANNOT_WRITE;
}
