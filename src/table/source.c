/* SPDX-License-Identifier: MIT
 *
 * Bytes of a plain or gzip file, or of standard input, as they come from the disk, inflated where they are compressed.
 *
 *     disk      what was read last and is not handed out: [at, got). Plain bytes that fill a whole DISK_SIZE go past
 * it.
 *
 * A gzip file is a row of members (RFC 1952, section 2.2). They are inflated one after the other with zlib; its own
 * file layer is not used because it takes a damaged or cut file for a short one, or for text.
 *
 * What is wrong with compressed data is kept and not told: text from before it may still be on its way, and may hold a
 * fault of its own, which comes first. Whoever has read all text asks source_tell for the sentence.
 */
#include "table/table_internal.h"

#include <limits.h>
#include <stdio.h>
#include <string.h>

enum {
    DISK_SIZE = 1 << 18,  /* large enough that system calls cost nothing beside the parsing */
    GZIP_WINDOW = 15 + 16 /* zlib: the largest window, and a gzip header */
};

void source_told(const struct source *source, uint32_t *crc32, uint64_t *bytes)
{
    *crc32 = source->crc32;
    *bytes = source->disk_bytes;
}

/* ---- the disk --------------------------------------------------------------------------------------------------- */

/* One read of up to `room` bytes, counted into the check sum of the run record. */
static fescue_status bytes_read(struct source *source, void *to, size_t room, size_t *got)
{
    fescue_status status = file_read(source->context, source->path, source->descriptor, to, room, got);
    if (status != FESCUE_OK)
        return status;
    source->crc32 = (uint32_t)crc32_z(source->crc32, to, *got);
    source->disk_bytes += *got;
    source->disk_ended = *got == 0;
    return FESCUE_OK;
}

fescue_status source_look(struct source *source, size_t enough)
{
    fescue_status status = FESCUE_OK;
    while (source->got < enough && !source->disk_ended) {
        size_t got;
        TRY(bytes_read(source, source->disk + source->got, DISK_SIZE - source->got, &got));
        source->got += got;
    }
done:
    return status;
}

/* Leaves at least one byte in the disk block, unless the file has ended. */
static fescue_status disk_refill(struct source *source)
{
    if (source->at < source->got || source->disk_ended)
        return FESCUE_OK;
    source->at = 0;
    return bytes_read(source, source->disk, DISK_SIZE, &source->got);
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

static fescue_status gzip_open(struct source *source)
{
    source->is_gzip = true;
    source->inflate.zalloc = zlib_take;
    source->inflate.zfree = zlib_give;
    source->inflate.opaque = source->context;
    int result = inflateInit2(&source->inflate, GZIP_WINDOW);
    if (result != Z_OK) /* zlib's version was checked when we were linked: what is left is memory */
        return FAIL(source->context, FESCUE_NO_MEMORY, "%s: no memory to inflate it", source->name);
    source->inflate_open = true;
    source->in_member = true;
    return FESCUE_OK;
}

/* What inflate's result says is wrong with the data. */
static const char *gzip_complaint(struct source *source, int result)
{
    const char *cause = source->inflate.msg != NULL ? source->inflate.msg : "";
    if (result == Z_NEED_DICT)
        cause = "a preset dictionary is asked for";
    if (strcmp(cause, "incorrect header check") == 0) /* the first member's header was seen when the file was opened */
        return "the gzip data are followed by bytes that are not gzip";
    if (strcmp(cause, "incorrect data check") == 0)
        return "the gzip check sum does not match what was inflated: the file is damaged";
    if (strcmp(cause, "incorrect length check") == 0)
        return "the gzip length does not match what was inflated: the file is damaged";
    snprintf(source->complaint_text, sizeof source->complaint_text, "the gzip data are damaged (%s)", cause);
    return source->complaint_text;
}

/* Inflates from the disk block, which is not empty, to `to`. */
static fescue_status gzip_step(struct source *source, char *to, size_t room, size_t *made)
{
    z_stream *inflating = &source->inflate;
    uInt given = (uInt)(source->got - source->at), space = room < UINT_MAX ? (uInt)room : UINT_MAX;
    if (!source->in_member)
        inflateReset(inflating);
    source->in_member = true;
    inflating->next_in = source->disk + source->at;
    inflating->avail_in = given;
    inflating->next_out = (unsigned char *)to;
    inflating->avail_out = space;
    int result = inflate(inflating, Z_NO_FLUSH);
    source->at += given - inflating->avail_in;
    *made = space - inflating->avail_out;
    if (result == Z_MEM_ERROR)
        return FAIL(source->context, FESCUE_NO_MEMORY, "%s: no memory to inflate it", source->name);
    if (result == Z_STREAM_END)
        source->in_member = false;
    else if (result != Z_OK && result != Z_BUF_ERROR) /* Z_BUF_ERROR: more input or room is needed, as usual */
        source->complaint = gzip_complaint(source, result);
    return FESCUE_OK;
}

/* ---- text ------------------------------------------------------------------------------------------------------- */

fescue_status source_read(struct source *source, char *to, size_t room, size_t *made)
{
    fescue_status status = FESCUE_OK;
    *made = 0;
    if (!source->is_gzip && source->at == source->got && room >= DISK_SIZE && !source->disk_ended) {
        TRY(bytes_read(source, to, room, made));
        return FESCUE_OK;
    }
    TRY(disk_refill(source));
    if (source->at == source->got) {
        if (source->is_gzip && source->in_member) {
            snprintf(source->complaint_text, sizeof source->complaint_text,
                     "the gzip data end in the middle: the file is truncated after %" PRIu64 " bytes",
                     source->disk_bytes);
            source->complaint = source->complaint_text;
        }
        source->ended = true;
        return FESCUE_OK;
    }
    if (source->is_gzip)
        return gzip_step(source, to, room, made);
    *made = source->got - source->at < room ? source->got - source->at : room;
    memcpy(to, source->disk + source->at, *made);
    source->at += *made;
done:
    return status;
}

bool source_has_ended(const struct source *source)
{
    return source->ended || source->complaint != NULL;
}

fescue_status source_tell(const struct source *source, uint64_t line)
{
    return FAIL(source->context, FESCUE_BAD_DATA, "%s: line %" PRIu64 ": %s", source->name, line, source->complaint);
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

static fescue_status strangers_refuse(const struct source *source)
{
    if (source->got == 0)
        return FAIL(source->context, FESCUE_BAD_DATA, "%s: the input is empty, a table was expected", source->name);
    for (size_t k = 0; k < sizeof strangers / sizeof strangers[0]; k++)
        if (source->got >= strangers[k].offset + strangers[k].length &&
            memcmp(source->disk + strangers[k].offset, strangers[k].bytes, strangers[k].length) == 0)
            return FAIL(source->context, FESCUE_BAD_DATA, "%s: line 1: %s", source->name, strangers[k].sentence);
    return FESCUE_OK;
}

/* Looks at the first bytes, which may come in pieces, to see what they are. */
static fescue_status kind_find(struct source *source)
{
    enum { ENOUGH = 10 }; /* for the longest of the strangers */
    static const unsigned char gzip[] = {0x1f, 0x8b};
    fescue_status status;
    TRY(source_look(source, ENOUGH));
    TRY(strangers_refuse(source));
    if (source->got >= sizeof gzip && memcmp(source->disk, gzip, sizeof gzip) == 0)
        TRY(gzip_open(source));
done:
    return status;
}

fescue_status source_open(fescue_context *context, const char *path, struct source *source)
{
    fescue_status status;
    *source = (struct source){
        .context = context, .path = path, .name = strcmp(path, "-") == 0 ? "standard input" : path, .descriptor = -1};
    TRY(file_open_read(context, path, &source->descriptor));
    TRY(TAKE(context, DISK_SIZE, &source->disk));
    TRY(kind_find(source));
done:
    return status;
}

void source_close(struct source *source)
{
    if (source->inflate_open)
        inflateEnd(&source->inflate);
    source->inflate_open = false;
    file_close(source->context, &source->descriptor);
    GIVE(source->context, &source->disk);
}
