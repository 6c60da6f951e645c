/* SPDX-License-Identifier: MIT
 *
 * Bytes of a plain or gzip file, or of standard input, as they come from the disk, inflated where they are compressed.
 *
 *     disk      what was read last and is not handed out: [at, got). Plain bytes that fill a whole DISK_SIZE go past
 * it.
 *
 * gunzip.c inflates.
 *
 * What is wrong with compressed data is kept and not told: text from before it may still be on its way, and may hold a
 * fault of its own, which comes first. Whoever has read all text asks source_tell for the sentence.
 */
#include "table/table_internal.h"

#include <isa-l/crc.h>
#include <stdio.h>
#include <string.h>

enum { DISK_SIZE = 1 << 18 }; /* large enough that system calls cost nothing beside the parsing */

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
    source->crc32 = crc32_gzip_refl(source->crc32, to, *got);
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

/* ---- text ------------------------------------------------------------------------------------------------------- */

/* Inflates from the disk block. At the end of the file it is empty, but there may still be text on its way. */
static void gzip_read(struct source *source, char *to, size_t room, size_t *made)
{
    struct gunzip_bytes bytes = {
        .in = source->disk + source->at, .given = source->got - source->at, .to = to, .room = room};
    bool is_last = bytes.given == 0;
    source->complaint = gunzip_step(source->gunzip, &bytes);
    source->at += bytes.taken;
    *made = bytes.made;
    if (source->complaint != NULL || !is_last || bytes.made > 0 || !gunzip_in_member(source->gunzip))
        return;
    snprintf(source->complaint_text, sizeof source->complaint_text,
             "the gzip data end in the middle: the file is truncated after %" PRIu64 " bytes", source->disk_bytes);
    source->complaint = source->complaint_text;
}

fescue_status source_read(struct source *source, char *to, size_t room, size_t *made)
{
    fescue_status status = FESCUE_OK;
    *made = 0;
    if (!source->is_gzip && source->at == source->got && room >= DISK_SIZE && !source->disk_ended) {
        TRY(bytes_read(source, to, room, made));
        return FESCUE_OK;
    }
    TRY(disk_refill(source));
    if (source->at == source->got && !(source->is_gzip && gunzip_in_member(source->gunzip))) {
        source->ended = true;
        return FESCUE_OK;
    }
    if (source->is_gzip) {
        gzip_read(source, to, room, made);
        return FESCUE_OK;
    }
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
        TRY(gunzip_open(source->context, &source->gunzip));
    source->is_gzip = source->gunzip != NULL;
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
    GIVE(source->context, &source->gunzip);
    file_close(source->context, &source->descriptor);
    GIVE(source->context, &source->disk);
}
