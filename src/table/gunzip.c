/* SPDX-License-Identifier: MIT
 *
 * A gzip file (RFC 1952), a row of members, inflated as its bytes come.
 *
 *     member  =  1f 8b 08 flags time(4) xfl os  [length(2) extra]  [name 0]  [comment 0]  [check(2)]   header
 *                deflate data  crc32(4)  length(4)                                                     body
 *
 * The headers are read here, byte by byte, since a block of input may end anywhere in them. The body is inflated by
 * ISA-L, which takes a third of zlib's time and sums on the way; it compares check sum and length, and gives back the
 * bytes behind them. (Its own reader of headers refuses those with a check sum that two blocks of input share.)
 *
 * zlib's file layer would take a damaged or cut file for a short one, or for text; here either is a complaint.
 */
#include "table/table_internal.h"

#include <isa-l/crc.h>
#include <isa-l/igzip_lib.h>
#include <limits.h>

enum { FIXED_BYTES = 10, METHOD_DEFLATE = 8 };
enum { FLAG_CHECK = 2, FLAG_EXTRA = 4, FLAG_NAME = 8, FLAG_COMMENT = 16, FLAGS_KNOWN = 31 }; /* 1: it is a text */

/* What the next byte belongs to. */
enum part { PART_FIXED, PART_EXTRA_LENGTH, PART_EXTRA, PART_NAME, PART_COMMENT, PART_CHECK, PART_BODY };

struct gunzip {
    enum part part;
    unsigned flags, seen, extra; /* seen: bytes of the part; extra: how many there are, or the check sum */
    uint32_t sum;                /* of the header so far */
    bool in_member;
    struct inflate_state inflate;
};

fescue_status gunzip_open(fescue_context *context, struct gunzip **out)
{
    return TAKE(context, 1, out);
}

bool gunzip_in_member(const struct gunzip *gunzip)
{
    return gunzip->in_member;
}

/* ---- header ----------------------------------------------------------------------------------------------------- */

static void member_begin(struct gunzip *gunzip)
{
    gunzip->in_member = true;
    gunzip->part = PART_FIXED;
    gunzip->seen = 0;
    gunzip->sum = 0;
    isal_inflate_init(&gunzip->inflate);
    gunzip->inflate.crc_flag = ISAL_GZIP_NO_HDR_VER;
}

/* The first part from this one on that the header has. */
static void part_begin(struct gunzip *gunzip, enum part part)
{
    static const unsigned needs[PART_BODY] = {[PART_EXTRA_LENGTH] = FLAG_EXTRA,
                                              [PART_EXTRA] = FLAG_EXTRA,
                                              [PART_NAME] = FLAG_NAME,
                                              [PART_COMMENT] = FLAG_COMMENT,
                                              [PART_CHECK] = FLAG_CHECK};
    while (part < PART_BODY && (gunzip->flags & needs[part]) == 0)
        part++;
    if (part == PART_EXTRA && gunzip->extra == 0) {
        part_begin(gunzip, PART_NAME);
        return;
    }
    gunzip->part = part;
    gunzip->seen = 0;
    if (part == PART_EXTRA_LENGTH || part == PART_CHECK)
        gunzip->extra = 0;
}

static const char *fixed_take(struct gunzip *gunzip, unsigned char byte)
{
    static const unsigned char magic[2] = {0x1f, 0x8b};
    unsigned at = gunzip->seen++;
    if (at < sizeof magic && byte != magic[at])
        return "the gzip data are followed by bytes that are not gzip"; /* the first member's were seen before */
    if (at == 2 && byte != METHOD_DEFLATE)
        return "the gzip data are damaged (unknown compression method)";
    if (at == 3 && byte > FLAGS_KNOWN)
        return "the gzip data are damaged (unknown header flags)";
    if (at == 3)
        gunzip->flags = byte;
    if (gunzip->seen == FIXED_BYTES)
        part_begin(gunzip, PART_EXTRA_LENGTH);
    return NULL;
}

/* Two bytes, the lower one first; true when they are complete. */
static bool pair_take(struct gunzip *gunzip, unsigned char byte)
{
    gunzip->extra |= (unsigned)byte << 8 * gunzip->seen++;
    return gunzip->seen == 2;
}

static const char *header_take(struct gunzip *gunzip, unsigned char byte)
{
    const char *complaint = NULL;
    const uint32_t sum = gunzip->sum;
    gunzip->sum = crc32_gzip_refl(sum, &byte, 1);
    switch (gunzip->part) {
    case PART_FIXED:
        complaint = fixed_take(gunzip, byte);
        break;
    case PART_EXTRA_LENGTH:
        if (pair_take(gunzip, byte))
            part_begin(gunzip, PART_EXTRA);
        break;
    case PART_EXTRA:
        if (++gunzip->seen == gunzip->extra)
            part_begin(gunzip, PART_NAME);
        break;
    case PART_NAME:
    case PART_COMMENT:
        if (byte == 0)
            part_begin(gunzip, gunzip->part + 1);
        break;
    default:
        gunzip->sum = sum; /* it is the sum of what stands before it */
        if (pair_take(gunzip, byte)) {
            complaint = gunzip->extra != (sum & 0xffff) ? "the gzip data are damaged (header check)" : NULL;
            part_begin(gunzip, PART_BODY);
        }
    }
    return complaint;
}

/* ---- body ------------------------------------------------------------------------------------------------------- */

static const char *body_complaint(int result)
{
    switch (result) {
    case ISAL_INCORRECT_CHECKSUM:
        return "the gzip check sum or length does not match what was inflated: the file is damaged";
    case ISAL_INVALID_SYMBOL:
        return "the gzip data are damaged (invalid code)";
    case ISAL_INVALID_LOOKBACK:
        return "the gzip data are damaged (invalid distance)";
    default:
        return "the gzip data are damaged (invalid block)";
    }
}

static const char *body_inflate(struct gunzip *gunzip, struct gunzip_bytes *bytes)
{
    struct inflate_state *inflate = &gunzip->inflate;
    const uint32_t given = bytes->given < INT_MAX ? (uint32_t)bytes->given : INT_MAX;
    const uint32_t room = bytes->room < INT_MAX ? (uint32_t)bytes->room : INT_MAX;
    inflate->next_in = (unsigned char *)(uintptr_t)bytes->in; /* which it only reads */
    inflate->avail_in = given;
    inflate->next_out = (unsigned char *)bytes->to;
    inflate->avail_out = room;
    int result = isal_inflate(inflate);
    bytes->taken += given - inflate->avail_in;
    bytes->made = room - inflate->avail_out;
    if (result != ISAL_DECOMP_OK)
        return body_complaint(result);
    gunzip->in_member = inflate->block_state != ISAL_BLOCK_FINISH;
    return NULL;
}

const char *gunzip_step(struct gunzip *gunzip, struct gunzip_bytes *bytes)
{
    bytes->taken = bytes->made = 0;
    if (!gunzip->in_member && bytes->given == 0)
        return NULL;
    if (!gunzip->in_member)
        member_begin(gunzip);
    while (gunzip->part != PART_BODY && bytes->given > 0) {
        const char *complaint = header_take(gunzip, *bytes->in);
        if (complaint != NULL)
            return complaint;
        bytes->in++;
        bytes->given--;
        bytes->taken++;
    }
    return gunzip->part == PART_BODY ? body_inflate(gunzip, bytes) : NULL;
}
