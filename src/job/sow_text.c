/* SPDX-License-Identifier: MIT
 *
 * Text to a file of the output set, gzipped through zlib or not. The gzip header names no file and no time, so that the
 * same text gives the same bytes.
 */
#include "job/sow_internal.h"

#include <assert.h>
#include <math.h>
#include <stdio.h>
#include <string.h>

static void *packer_take(void *context, unsigned count, unsigned size)
{
    void *block = NULL;
    memory_take(context, count, size, &block);
    return block;
}

static void packer_give(void *context, void *block)
{
    memory_give(context, &block);
}

static fescue_status packer_open(struct sink *sink)
{
    enum { GZIP = 16, WINDOW = 15, MEMORY = 8 }; /* zlib's own standard sizes, in a gzip wrapping */
    sink->packer = (z_stream){.zalloc = packer_take, .zfree = packer_give, .opaque = sink->context};
    int result =
        deflateInit2(&sink->packer, Z_DEFAULT_COMPRESSION, Z_DEFLATED, GZIP + WINDOW, MEMORY, Z_DEFAULT_STRATEGY);
    if (result != Z_OK)
        return FAIL(sink->context, result == Z_MEM_ERROR ? FESCUE_NO_MEMORY : FESCUE_DEFECT,
                    "gzip cannot be started: %s", zError(result));
    sink->is_packed = true;
    return FESCUE_OK;
}

fescue_status sink_open(const struct sowing *sowing, const char *name, struct sink *sink)
{
    fescue_status status;
    char path[64];
    *sink = (struct sink){.context = sowing->context};
    snprintf(path, sizeof path, "%s%s", name, sowing->options->gzip ? ".gz" : "");
    TRY(output_add(sowing->output, path, &sink->file));
    TRY(TAKE(sink->context, SINK_BUFFER, &sink->buffer));
    if (sowing->options->gzip) {
        TRY(TAKE(sink->context, SINK_BUFFER, &sink->packed));
        TRY(packer_open(sink));
    }
done:
    sink->status = status;
    return status;
}

/* Hands what is in the buffer on; Z_FINISH also ends the gzip stream. */
static void sink_flush(struct sink *sink, int flush)
{
    if (sink->status != FESCUE_OK)
        return;
    if (!sink->is_packed) {
        outfile_write(sink->file, sink->buffer, sink->used);
    } else {
        z_stream *packer = &sink->packer;
        packer->next_in = (unsigned char *)sink->buffer;
        packer->avail_in = (unsigned)sink->used;
        do { /* deflate is done when it leaves room */
            packer->next_out = sink->packed;
            packer->avail_out = SINK_BUFFER;
            deflate(packer, flush);
            outfile_write(sink->file, sink->packed, SINK_BUFFER - packer->avail_out);
        } while (packer->avail_out == 0);
    }
    sink->used = 0;
    sink->status = outfile_status(sink->file);
}

void sink_write(struct sink *sink, const char *bytes, size_t count)
{
    assert(count <= SINK_BUFFER);
    if (count > SINK_BUFFER - sink->used)
        sink_flush(sink, Z_NO_FLUSH);
    if (sink->status != FESCUE_OK)
        return;
    memcpy(sink->buffer + sink->used, bytes, count);
    sink->used += count;
}

void sink_text(struct sink *sink, const char *text)
{
    sink_write(sink, text, strlen(text));
}

void sink_count(struct sink *sink, uint64_t value)
{
    char digits[20];
    size_t first = sizeof digits;
    do
        digits[--first] = (char)('0' + value % 10);
    while ((value /= 10) != 0);
    sink_write(sink, digits + first, sizeof digits - first);
}

void sink_real(struct sink *sink, double value)
{
    char text[32];
    sink_write(sink, text, real_to_text(value, FESCUE_DOUBLE, text));
}

void sink_fixed(struct sink *sink, double value, int places)
{
    static const uint64_t power[] = {1, 10, 100, 1000, 10000};
    assert(places >= 0 && places <= 4 && fabs(value) < 1e12);
    uint64_t size = (uint64_t)llround(fabs(value) * (double)power[places]), part = size % power[places];
    if (value < 0 && size > 0)
        sink_write(sink, "-", 1);
    sink_count(sink, size / power[places]);
    if (places == 0)
        return;
    sink_write(sink, ".", 1);
    while (--places > 0 && part < power[places])
        sink_write(sink, "0", 1);
    sink_count(sink, part);
}

fescue_status sink_close(struct sink *sink)
{
    sink_flush(sink, Z_FINISH);
    if (sink->is_packed)
        deflateEnd(&sink->packer);
    sink->is_packed = false;
    GIVE(sink->context, &sink->packed);
    GIVE(sink->context, &sink->buffer);
    return sink->status;
}
