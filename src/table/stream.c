/* SPDX-License-Identifier: MIT
 *
 * Bytes of a plain or gzip file, or of standard input, handed out line by line.
 *
 *     disk      what was read last: DISK_SIZE bytes, counted into the check sum of the run record
 *     buffer    text, plain or inflated; [at, got) is not handed out yet
 *
 * A line is found by memchr in the buffer. When none ends there, what is left moves to the front and more is read
 * behind it; when it fills the buffer, the buffer doubles: a line may be as long as memory allows.
 *
 * A gzip file is a row of members (RFC 1952, section 2.2). They are inflated one after the other with zlib; its own
 * file layer is not used because it takes a damaged or cut file for a short one, or for text.
 */
#include "table/table_internal.h"

#include <assert.h>
#include <limits.h>
#include <string.h>
#include <zlib.h>

enum {
    DISK_SIZE = 1 << 18,   /* large enough that system calls cost nothing beside the parsing */
    BUFFER_SIZE = 1 << 20, /* holds one disk block of text, several when inflated, and stays in the second cache */
    GZIP_WINDOW = 15 + 16  /* zlib: the largest window, and a gzip header */
};

struct stream {
    fescue_context *context;
    const char *path, *name; /* borrowed */
    int descriptor;
    unsigned char *disk;
    size_t disk_at, disk_got;
    bool disk_ended;
    uint64_t disk_bytes;
    uint32_t crc32;
    bool is_gzip, inflate_open;
    bool in_member; /* between the first and the last byte of a gzip member */
    z_stream inflate;
    char *buffer;
    size_t at, got, size;
    bool ended;    /* nothing comes behind `got` */
    bool has_zero; /* a zero byte was seen: every line is looked at */
    uint64_t line;
};

uint64_t stream_line_number(const struct stream *stream)
{
    return stream->line;
}

const char *stream_name(const struct stream *stream)
{
    return stream->name;
}

fescue_context *stream_context(const struct stream *stream)
{
    return stream->context;
}

void stream_told(const struct stream *stream, uint32_t *crc32, uint64_t *bytes)
{
    *crc32 = stream->crc32;
    *bytes = stream->disk_bytes;
}

/* ---- the disk --------------------------------------------------------------------------------------------------- */

/* Adds what one read gives to the end of the disk block, which has room. */
static fescue_status disk_read(struct stream *stream)
{
    size_t got;
    unsigned char *to = stream->disk + stream->disk_got;
    fescue_status status =
        file_read(stream->context, stream->path, stream->descriptor, to, DISK_SIZE - stream->disk_got, &got);
    if (status != FESCUE_OK)
        return status;
    stream->crc32 = (uint32_t)crc32(stream->crc32, to, (uInt)got);
    stream->disk_got += got;
    stream->disk_bytes += got;
    stream->disk_ended = got == 0;
    return FESCUE_OK;
}

/* Leaves at least one byte in the disk block, unless the file has ended. */
static fescue_status disk_refill(struct stream *stream)
{
    if (stream->disk_at < stream->disk_got || stream->disk_ended)
        return FESCUE_OK;
    stream->disk_at = stream->disk_got = 0;
    return disk_read(stream);
}

/* ---- gzip ------------------------------------------------------------------------------------------------------- */

/* zlib's memory is ours too, so that it is counted and can be refused. */
static voidpf zlib_take(voidpf context, uInt count, uInt size)
{
    void *block;
    return memory_take(context, count, size, &block) == FESCUE_OK ? block : Z_NULL;
}

static void zlib_give(voidpf context, voidpf block)
{
    memory_give(context, &block);
}

static fescue_status gzip_open(struct stream *stream)
{
    stream->is_gzip = true;
    stream->inflate.zalloc = zlib_take;
    stream->inflate.zfree = zlib_give;
    stream->inflate.opaque = stream->context;
    int result = inflateInit2(&stream->inflate, GZIP_WINDOW);
    if (result != Z_OK) /* zlib's version was checked when we were linked: what is left is memory */
        return FAIL(stream->context, FESCUE_NO_MEMORY, "%s: no memory to inflate it", stream->name);
    stream->inflate_open = true;
    stream->in_member = true;
    return FESCUE_OK;
}

/* The line that was being inflated when it went wrong, at `end`. */
static uint64_t line_at(const struct stream *stream, const char *end)
{
    uint64_t line = stream->line + 1;
    for (const char *c = stream->buffer + stream->at; c < end; c++)
        line += *c == '\n';
    return line;
}

static fescue_status gzip_fail(const struct stream *stream, int result)
{
    const char *cause = stream->inflate.msg != NULL ? stream->inflate.msg : "";
    uint64_t line = line_at(stream, (const char *)stream->inflate.next_out);
    if (result == Z_MEM_ERROR)
        return FAIL(stream->context, FESCUE_NO_MEMORY, "%s: no memory to inflate it", stream->name);
    if (result == Z_NEED_DICT)
        cause = "a preset dictionary is asked for";
    if (strcmp(cause, "incorrect header check") == 0) /* the first member's header was seen when the file was opened */
        return BAD_LINE_AT(stream, line, "the gzip data are followed by bytes that are not gzip");
    if (strcmp(cause, "incorrect data check") == 0)
        return BAD_LINE_AT(stream, line, "the gzip check sum does not match what was inflated: the file is damaged");
    if (strcmp(cause, "incorrect length check") == 0)
        return BAD_LINE_AT(stream, line, "the gzip length does not match what was inflated: the file is damaged");
    return BAD_LINE_AT(stream, line, "the gzip data are damaged (%s)", cause);
}

/* Inflates from the disk block, which is not empty, to `to`. */
static fescue_status gzip_step(struct stream *stream, char *to, size_t room, size_t *made)
{
    z_stream *inflating = &stream->inflate;
    uInt given = (uInt)(stream->disk_got - stream->disk_at), space = room < UINT_MAX ? (uInt)room : UINT_MAX;
    if (!stream->in_member)
        inflateReset(inflating);
    stream->in_member = true;
    inflating->next_in = stream->disk + stream->disk_at;
    inflating->avail_in = given;
    inflating->next_out = (unsigned char *)to;
    inflating->avail_out = space;
    int result = inflate(inflating, Z_NO_FLUSH);
    stream->disk_at += given - inflating->avail_in;
    *made = space - inflating->avail_out;
    if (result == Z_STREAM_END)
        stream->in_member = false;
    else if (result != Z_OK && result != Z_BUF_ERROR) /* Z_BUF_ERROR: more input or room is needed, as usual */
        return gzip_fail(stream, result);
    return FESCUE_OK;
}

/* ---- text ------------------------------------------------------------------------------------------------------- */

static fescue_status text_step(struct stream *stream, char *to, size_t room, size_t *made)
{
    fescue_status status;
    *made = 0;
    TRY(disk_refill(stream));
    if (stream->disk_at == stream->disk_got) {
        if (stream->is_gzip && stream->in_member)
            return BAD_LINE_AT(stream, line_at(stream, to),
                               "the gzip data end in the middle: the file is truncated after %" PRIu64 " bytes",
                               stream->disk_bytes);
        stream->ended = true;
        return FESCUE_OK;
    }
    if (stream->is_gzip)
        return gzip_step(stream, to, room, made);
    size_t held = stream->disk_got - stream->disk_at;
    *made = held < room ? held : room;
    memcpy(to, stream->disk + stream->disk_at, *made);
    stream->disk_at += *made;
done:
    return status;
}

/* Makes room behind `got`: what was handed out is dropped, and if that is not enough the buffer doubles. */
static fescue_status buffer_make_room(struct stream *stream)
{
    if (stream->at > 0) {
        memmove(stream->buffer, stream->buffer + stream->at, stream->got - stream->at);
        stream->got -= stream->at;
        stream->at = 0;
    }
    if (stream->got < stream->size)
        return FESCUE_OK;
    size_t size;
    if (!size_product(stream->size, 2, &size))
        return FAIL(stream->context, FESCUE_NO_MEMORY, "%s: a line is longer than can be addressed", stream->name);
    fescue_status status = RESIZE(stream->context, size, &stream->buffer);
    if (status == FESCUE_OK)
        stream->size = size;
    return status;
}

/* At least one more byte behind `got`, unless the text has ended. */
static fescue_status buffer_fill(struct stream *stream)
{
    fescue_status status;
    TRY(progress_tell(stream->context, "reading", -1));
    TRY(buffer_make_room(stream));
    size_t made = 0;
    while (made == 0 && !stream->ended)
        TRY(text_step(stream, stream->buffer + stream->got, stream->size - stream->got, &made));
    stream->has_zero = stream->has_zero || memchr(stream->buffer + stream->got, '\0', made) != NULL;
    stream->got += made;
done:
    return status;
}

fescue_status stream_peek(struct stream *stream, size_t most, const char **text, size_t *length)
{
    fescue_status status = FESCUE_OK;
    assert(stream->line == 0 && most <= BUFFER_SIZE / 2);
    while (stream->got - stream->at < most && !stream->ended)
        TRY(buffer_fill(stream));
    *text = stream->buffer + stream->at;
    *length = stream->got - stream->at < most ? stream->got - stream->at : most;
done:
    return status;
}

/* The line from `at` to `newline`, or to the end of the text when there is none. */
static void line_take(struct stream *stream, const char *newline, struct line *line)
{
    const char *after = newline != NULL ? newline + 1 : stream->buffer + stream->got;
    line->text = stream->buffer + stream->at;
    line->end = newline != NULL ? newline : after;
    if (line->end > line->text && line->end[-1] == '\r')
        line->end--;
    line->terminator = (size_t)(after - line->end);
    stream->at = (size_t)(after - stream->buffer);
    stream->line++;
}

fescue_status stream_line(struct stream *stream, struct line *line)
{
    size_t seen = 0; /* bytes from `at` on that hold no end of line */
    *line = (struct line){0};
    for (;;) {
        const char *start = stream->buffer + stream->at;
        size_t held = stream->got - stream->at;
        const char *newline = memchr(start + seen, '\n', held - seen);
        if (newline != NULL || (stream->ended && held > 0)) {
            line_take(stream, newline, line);
            break;
        }
        if (stream->ended)
            return FESCUE_OK;
        seen = held;
        fescue_status status = buffer_fill(stream);
        if (status != FESCUE_OK)
            return status;
    }
    if (stream->has_zero && memchr(line->text, '\0', (size_t)(line->end - line->text)) != NULL)
        return BAD_LINE(stream, "a zero byte was found, where text was expected");
    return FESCUE_OK;
}

/* ---- opening ---------------------------------------------------------------------------------------------------- */

/* Files that are no text, by what they begin with: what they are and what to do. */
static const struct {
    size_t offset, length;
    const char *bytes;
    const char *sentence;
} strangers[] = {
    {4, 6, "1AY&SY", "bzip2 data were found; only plain text and gzip are read"}, /* behind "BZh" and a digit */
    {1, 4, "7zXZ", "xz data were found; only plain text and gzip are read"},      /* behind 0xfd */
    {0, 4, "\x28\xb5\x2f\xfd", "zstd data were found; only plain text and gzip are read"},
    {0, 4, "PK\x03\x04", "a zip archive (or a spreadsheet) was found; save it as delimited text"},
    {0, 2, "\xff\xfe", "UTF-16 text was found, UTF-8 was expected; convert it, for instance with iconv"},
    {0, 2, "\xfe\xff", "UTF-16 text was found, UTF-8 was expected; convert it, for instance with iconv"},
};

static fescue_status strangers_refuse(const struct stream *stream)
{
    if (stream->disk_got == 0)
        return FAIL(stream->context, FESCUE_BAD_DATA, "%s: the input is empty, a table was expected", stream->name);
    for (size_t k = 0; k < sizeof strangers / sizeof strangers[0]; k++)
        if (stream->disk_got >= strangers[k].offset + strangers[k].length &&
            memcmp(stream->disk + strangers[k].offset, strangers[k].bytes, strangers[k].length) == 0)
            return BAD_LINE_AT(stream, UINT64_C(1), "%s", strangers[k].sentence);
    return FESCUE_OK;
}

static fescue_status byte_order_mark_skip(struct stream *stream)
{
    static const char mark[] = "\xef\xbb\xbf";
    const char *text;
    size_t length;
    fescue_status status = stream_peek(stream, sizeof mark - 1, &text, &length);
    if (status == FESCUE_OK && length == sizeof mark - 1 && memcmp(text, mark, length) == 0)
        stream->at += length;
    return status;
}

/* Looks at the first bytes, which may come in pieces, to see what they are. */
static fescue_status kind_find(struct stream *stream)
{
    enum { ENOUGH = 10 }; /* for the longest of the strangers */
    static const unsigned char gzip[] = {0x1f, 0x8b};
    fescue_status status = FESCUE_OK;
    while (stream->disk_got < ENOUGH && !stream->disk_ended)
        TRY(disk_read(stream));
    TRY(strangers_refuse(stream));
    if (stream->disk_got >= sizeof gzip && memcmp(stream->disk, gzip, sizeof gzip) == 0)
        TRY(gzip_open(stream));
    TRY(byte_order_mark_skip(stream));
done:
    return status;
}

fescue_status stream_open(fescue_context *context, const char *path, struct stream **out)
{
    fescue_status status;
    struct stream *stream = NULL;
    *out = NULL;
    TRY(TAKE(context, 1, &stream));
    stream->context = context;
    stream->path = path;
    stream->name = strcmp(path, "-") == 0 ? "standard input" : path;
    stream->size = BUFFER_SIZE;
    stream->descriptor = -1;
    TRY(file_open_read(context, path, &stream->descriptor));
    TRY(TAKE(context, DISK_SIZE, &stream->disk));
    TRY(TAKE(context, stream->size, &stream->buffer));
    TRY(kind_find(stream));
    *out = stream;
    stream = NULL;
done:
    stream_close(&stream);
    return status;
}

void stream_close(struct stream **out)
{
    struct stream *stream = *out;
    if (stream == NULL)
        return;
    fescue_context *context = stream->context;
    if (stream->inflate_open)
        inflateEnd(&stream->inflate);
    file_close(context, &stream->descriptor);
    GIVE(context, &stream->disk);
    GIVE(context, &stream->buffer);
    GIVE(context, out);
}
