/* SPDX-License-Identifier: MIT
 *
 * The memo of a job: finished work, and the state of the work at hand, in a file that a later run of the same job goes
 * on from. It knows neither fits nor tables.
 *
 * A job is a fixed sequence of pieces of work, each a function of the job's input and options and of the pieces before
 * it. So a piece is known by its number in the sequence; a digest of what it was asked is kept beside, and where it
 * does not fit (a time limit fell elsewhere this time) nothing from there on is used. A finished piece keeps what it
 * came to; one that runs hands over its state now and then. Run again, the job does everything in the same order, and
 * each piece that finished is told what it came to, and the one that ran goes on: the end is that of an uninterrupted
 * run, bit for bit.
 *
 * The file, numbers as this machine has them:
 *
 *     magic, layout, order of bytes            what it is
 *     length, identity                         version, input and options, a line each; another one is refused
 *     seconds, seconds of processors           what the job has taken so far
 *     count, pieces: number, digest, length, bytes
 *     number, digest, length, bytes            of the piece at hand; length 0: none
 *     crc32                                    of all that
 *
 * It is written beside its name, flushed and renamed, as results are (output.c): there is always a whole one. It is
 * read once for its checksum and only then believed. The state at hand stays in the file until its piece takes it, so
 * that two of them are never held; until then the file is not written over.
 *
 * What it may cost: a write is due `every` seconds, and not before WRITES_APART times what the last one took. What a
 * piece came to is kept only when the piece took WORTH times as long as keeping it does at a disk's pace; a piece that
 * is not kept is done again. A memo that cannot be written is said in the log, and is no reason for a job to fail.
 */
#include "base/context_internal.h"

#include <assert.h>
#include <errno.h>
#include <fcntl.h>
#include <inttypes.h>
#include <stdio.h>
#include <stdlib.h>
#include <string.h>
#include <unistd.h>
#include <zlib.h>

/* 1/60: the writes of a long job then take 1.7 % of its time at most. */
enum { LAYOUT = 1, WRITES_APART = 60, WORTH = 50, PIECE = 1 << 18 };
static const char magic[8] = "fescue>";
static const uint32_t byte_order = 0x01020304;
/* Bytes a second that a plain disk takes. */
static const double disk_pace = 2e8;

struct memo_item {
    uint64_t number, digest, size, capacity;
    char *bytes;
};
struct memo {
    fescue_context *context;
    char *path, *identity;
    double every, cost;   /* seconds between writes; that the last one took */
    double opened, wrote; /* clock_wall() */
    double opened_cpu;
    double before, before_cpu; /* seconds of earlier runs */
    uint64_t next;             /* number of the piece that begins next */
    struct memo_item *items;
    size_t count, capacity;
    struct memo_item state;            /* of the piece that ran, in the file; its bytes stay there */
    uint64_t state_at;                 /* where in the file */
    bool has_state, goes_on, is_saved; /* is_saved: since it was asked to stop */
    char note[FAILURE_TEXT_SIZE];
};

/* ---- keeping quiet -------------------------------------------------------------------------------------------------
 */

/* A failure of the memo is none of the job: it is said in the log, and forgotten unless the job had one before. */
static void failure_forget(fescue_context *context, bool had_one)
{
    log_tell(context, "%s", fescue_failure_text(context));
    if (!had_one)
        fescue_failure_clear(context);
}

static bool has_failure(const fescue_context *context)
{
    return fescue_failure_text(context)[0] != '\0';
}

/* Memory for keeping, none of it the job's: a tenth of a limit stays free. */
static bool item_reserve(struct memo *memo, struct memo_item *item, uint64_t size)
{
    fescue_context *context = memo->context;
    uint64_t limit = atomic_load(&context->memory.limit), used = atomic_load(&context->memory.bytes);
    uint64_t capacity = item->capacity == 0 ? 1024 : item->capacity;
    bool had_one = has_failure(context);
    if (size <= item->capacity)
        return true;
    while (capacity < size)
        capacity *= 2;
    if (limit != 0 && used + capacity + item->capacity > limit - limit / 10)
        return false;
    if (memory_resize(context, capacity, 1, &item->bytes) != FESCUE_OK) {
        failure_forget(context, had_one);
        return false;
    }
    item->capacity = capacity;
    return true;
}

/* NULL when there is no memory. Takes over the item's number and digest. */
static struct memo_item *item_add(struct memo *memo, const struct memo_item *item)
{
    bool had_one = has_failure(memo->context);
    if (memo->count == memo->capacity) {
        if (RESIZE(memo->context, 2 * memo->capacity + 16, &memo->items) != FESCUE_OK) {
            failure_forget(memo->context, had_one);
            return NULL;
        }
        memo->capacity = 2 * memo->capacity + 16;
    }
    memo->items[memo->count] = (struct memo_item){.number = item->number, .digest = item->digest};
    return &memo->items[memo->count++];
}

/* Forgets the pieces from `number` on, and the state at hand. */
static void items_drop(struct memo *memo, uint64_t number)
{
    while (memo->count > 0 && memo->items[memo->count - 1].number >= number)
        GIVE(memo->context, &memo->items[--memo->count].bytes);
    memo->has_state = false;
}

static void memo_note_set(struct memo *memo, const char *format, ...) __attribute__((format(printf, 2, 3)));
static void memo_note_set(struct memo *memo, const char *format, ...)
{
    char why[FAILURE_TEXT_SIZE / 2];
    va_list arguments;
    va_start(arguments, format);
    vsnprintf(why, sizeof why, format, arguments);
    va_end(arguments);
    snprintf(memo->note, sizeof memo->note, "%.256s: %s; starting over", memo->path, why);
    log_tell(memo->context, "%s", memo->note);
}

/* ---- writing -------------------------------------------------------------------------------------------------------
 */

struct memo_writing {
    struct outfile *file;
    uLong crc;
};

static void put(struct memo_writing *writing, const void *bytes, size_t size)
{
    const Bytef *from = bytes;
    outfile_write(writing->file, bytes, size);
    for (size_t done = 0; done < size; done += PIECE)
        writing->crc = crc32(writing->crc, from + done, (uInt)(size - done < PIECE ? size - done : PIECE));
}

static void put_number(struct memo_writing *writing, uint64_t number)
{
    put(writing, &number, sizeof number);
}

static void put_head(struct memo_writing *writing, const struct memo *memo)
{
    uint32_t layout = LAYOUT;
    double seconds = memo->before + clock_wall() - memo->opened;
    double cpu = memo->before_cpu + clock_cpu() - memo->opened_cpu;
    put(writing, magic, sizeof magic);
    put(writing, &layout, sizeof layout);
    put(writing, &byte_order, sizeof byte_order);
    put_number(writing, strlen(memo->identity));
    put(writing, memo->identity, strlen(memo->identity));
    put(writing, &seconds, sizeof seconds);
    put(writing, &cpu, sizeof cpu);
}

static void put_item(struct memo_writing *writing, const struct memo_item *item)
{
    put_number(writing, item->number);
    put_number(writing, item->digest);
    put_number(writing, item->size);
}

static void put_all(struct memo_writing *writing, const struct memo *memo, const struct memo_item *state,
                    const struct memo_part *parts, size_t count)
{
    put_head(writing, memo);
    put_number(writing, memo->count);
    for (size_t k = 0; k < memo->count; k++) {
        put_item(writing, &memo->items[k]);
        put(writing, memo->items[k].bytes, memo->items[k].size);
    }
    put_item(writing, state);
    for (size_t k = 0; k < count; k++)
        put(writing, parts[k].bytes, parts[k].size);
    uint32_t crc = (uint32_t)writing->crc;
    outfile_write(writing->file, &crc, sizeof crc);
}

static fescue_status memo_write_all(struct memo *memo, const struct memo_item *state, const struct memo_part *parts,
                                    size_t count)
{
    struct output *output = NULL;
    struct memo_writing writing = {.crc = crc32(0, NULL, 0)};
    char *folder = NULL, *slash;
    fescue_status status;
    TRY(memory_copy_text(memo->context, memo->path, strlen(memo->path), &folder));
    slash = strrchr(folder, '/');
    const char *name = slash != NULL ? memo->path + (slash + 1 - folder) : memo->path;
    if (slash != NULL)
        slash[slash == folder] = '\0';
    TRY(output_open(memo->context, slash != NULL ? folder : ".", NULL, &output));
    TRY(output_add(output, name, &writing.file));
    put_all(&writing, memo, state, parts, count);
    TRY(output_publish(&output));
done:
    output_abandon(&output);
    GIVE(memo->context, &folder);
    return status;
}

static void memo_write(struct memo *memo, const struct memo_item *state, const struct memo_part *parts, size_t count)
{
    double began = clock_wall();
    bool had_one = has_failure(memo->context);
    if (memo->has_state)
        return; /* what lies there is further on than this run is yet */
    if (memo_write_all(memo, state, parts, count) != FESCUE_OK)
        failure_forget(memo->context, had_one);
    memo->wrote = clock_wall();
    memo->cost = memo->wrote - began;
    memo->is_saved = is_cancelled(memo->context);
}

static bool is_due(const struct memo *memo)
{
    double apart = WRITES_APART * memo->cost;
    return clock_wall() - memo->wrote >= (apart > memo->every ? apart : memo->every);
}

/* ---- reading -------------------------------------------------------------------------------------------------------
 */

struct memo_reading {
    struct memo *memo;
    int descriptor;
    uint64_t at, size;
    bool good;
};

/* All `size` bytes, or good = false. */
static void get(struct memo_reading *reading, void *bytes, size_t size)
{
    char *to = bytes;
    for (size_t done = 0, got; reading->good && done < size; done += got)
        reading->good = file_read(reading->memo->context, reading->memo->path, reading->descriptor, to + done,
                                  size - done < PIECE ? size - done : PIECE, &got) == FESCUE_OK &&
                        got > 0;
    reading->at += size;
}

static uint64_t get_number(struct memo_reading *reading)
{
    uint64_t number = 0;
    get(reading, &number, sizeof number);
    return number;
}

/* Its head; false when the file has fewer bytes than it promises. */
static bool get_item(struct memo_reading *reading, struct memo_item *item)
{
    *item = (struct memo_item){0};
    item->number = get_number(reading);
    item->digest = get_number(reading);
    item->size = get_number(reading);
    reading->good = reading->good && item->size <= reading->size - reading->at;
    return reading->good;
}

static bool reading_open(struct memo *memo, struct memo_reading *reading)
{
    *reading = (struct memo_reading){.memo = memo, .descriptor = -1, .good = true};
    return file_open_read(memo->context, memo->path, &reading->descriptor) == FESCUE_OK;
}

/* The checksum fits: every byte is as it was written. */
static bool is_whole(struct memo *memo, uint64_t *size)
{
    struct memo_reading reading;
    unsigned char piece[16384 + 4]; /* the last four bytes stay back: they may be the checksum */
    size_t held = 0, got = 0;
    uLong crc = crc32(0, NULL, 0);
    uint32_t wanted = 0;
    *size = 0;
    if (!reading_open(memo, &reading))
        return false;
    while (file_read(memo->context, memo->path, reading.descriptor, piece + held, sizeof piece - held, &got) ==
               FESCUE_OK &&
           got > 0) {
        held += got;
        *size += got;
        size_t ready = held > 4 ? held - 4 : 0;
        crc = crc32(crc, piece, (uInt)ready);
        memmove(piece, piece + ready, held - ready);
        held -= ready;
    }
    file_close(memo->context, &reading.descriptor);
    memcpy(&wanted, piece, held == 4 ? 4 : 0);
    return held == 4 && wanted == (uint32_t)crc;
}

/* The first line of `ours` that is not in the same place of `theirs`, into text. */
static void difference_find(const char *ours, const char *theirs, char *text, size_t size)
{
    while (*ours != '\0' && *theirs != '\0') {
        size_t a = strcspn(ours, "\n"), b = strcspn(theirs, "\n");
        if (a != b || memcmp(ours, theirs, a) != 0) {
            snprintf(text, size, "it has %.*s, this one %.*s", (int)(b < 200 ? b : 200), theirs,
                     (int)(a < 200 ? a : 200), ours);
            return;
        }
        ours += a + (ours[a] == '\n');
        theirs += b + (theirs[b] == '\n');
    }
    snprintf(text, size, "it has other options");
}

/* Whether what begins here is of this very job; else a note says why not. */
static bool identity_check(struct memo_reading *reading)
{
    struct memo *memo = reading->memo;
    char kind[sizeof magic] = "", *theirs = NULL, why[512];
    uint32_t layout = 0, order = 0;
    get(reading, kind, sizeof kind);
    get(reading, &layout, sizeof layout);
    get(reading, &order, sizeof order);
    if (!reading->good || memcmp(kind, magic, sizeof magic) != 0) {
        memo_note_set(memo, "not a checkpoint");
        return false;
    }
    if (layout != LAYOUT || order != byte_order) {
        memo_note_set(memo, "a checkpoint of another version of this program, or of another kind of machine");
        return false;
    }
    uint64_t length = get_number(reading);
    if (length > reading->size || TAKE(memo->context, length + 1, &theirs) != FESCUE_OK)
        return false;
    get(reading, theirs, length);
    bool is_same = reading->good && strcmp(theirs, memo->identity) == 0;
    if (!is_same) {
        difference_find(memo->identity, theirs, why, sizeof why);
        memo_note_set(memo, "a checkpoint of another run: %s", why);
    }
    GIVE(memo->context, &theirs);
    return is_same;
}

static void items_get(struct memo_reading *reading)
{
    struct memo *memo = reading->memo;
    struct memo_item item;
    get(reading, &memo->before, sizeof memo->before);
    get(reading, &memo->before_cpu, sizeof memo->before_cpu);
    uint64_t count = get_number(reading);
    for (uint64_t k = 0; k < count && get_item(reading, &item); k++) {
        struct memo_item *kept = item_add(memo, &item);
        reading->good = kept != NULL && item_reserve(memo, kept, item.size);
        if (!reading->good)
            return;
        kept->size = item.size;
        get(reading, kept->bytes, item.size);
    }
    if (get_item(reading, &memo->state) && memo->state.size > 0) {
        memo->state_at = reading->at;
        memo->has_state = true;
    }
}

static void memo_read(struct memo *memo)
{
    fescue_context *context = memo->context;
    struct memo_reading reading;
    uint64_t size;
    bool had_one = has_failure(context);
    if (access(memo->path, F_OK) != 0)
        return;
    if (!is_whole(memo, &size)) {
        memo_note_set(memo, "not a whole checkpoint: its checksum does not fit");
    } else if (reading_open(memo, &reading)) {
        reading.size = size;
        if (identity_check(&reading))
            items_get(&reading);
        file_close(context, &reading.descriptor);
        if (!reading.good && memo->note[0] == '\0')
            memo_note_set(memo, "a checkpoint that there is no memory for");
    }
    if (memo->note[0] != '\0')
        items_drop(memo, 0);
    memo->goes_on = memo->count > 0 || memo->has_state;
    if (has_failure(context) && !had_one)
        failure_forget(context, false);
}

/* ---- opening and closing -------------------------------------------------------------------------------------------
 */

fescue_status memo_open(fescue_context *context, const char *path, const char *identity, double every)
{
    struct memo *memo = NULL;
    fescue_status status;
    memo_close(context);
    TRY(TAKE(context, 1, &memo));
    context->memo = memo;
    memo->context = context;
    memo->every = every;
    memo->opened = memo->wrote = clock_wall();
    memo->opened_cpu = clock_cpu();
    TRY(memory_copy_text(context, path, strlen(path), &memo->path));
    TRY(memory_copy_text(context, identity, strlen(identity), &memo->identity));
    memo_read(memo);
done:
    if (status != FESCUE_OK)
        memo_close(context);
    return status;
}

void memo_close(fescue_context *context)
{
    struct memo *memo = context->memo;
    if (memo == NULL)
        return;
    items_drop(memo, 0);
    GIVE(context, &memo->items);
    GIVE(context, &memo->path);
    GIVE(context, &memo->identity);
    GIVE(context, &context->memo);
}

void memo_remove(fescue_context *context)
{
    if (context->memo != NULL)
        context->files->unlink(context->memo->path);
}

void memo_flush(fescue_context *context)
{
    struct memo *memo = context->memo;
    static const struct memo_item none = {0};
    if (memo != NULL && !memo->is_saved && memo->count > 0)
        memo_write(memo, &none, NULL, 0);
}

const char *memo_note(const fescue_context *context)
{
    return context->memo == NULL ? "" : context->memo->note;
}

bool memo_goes_on(const fescue_context *context)
{
    return context->memo != NULL && context->memo->goes_on;
}

double memo_seconds_before(const fescue_context *context, double *cpu)
{
    const struct memo *memo = context->memo;
    *cpu = memo == NULL ? 0 : memo->before_cpu;
    return memo == NULL ? 0 : memo->before;
}

/* ---- pieces of work ------------------------------------------------------------------------------------------------
 */

/* FNV-1a of 64 bits, eight bytes at a time: factors of a large table have many. */
uint64_t memo_digest(uint64_t digest, const void *bytes, size_t size)
{
    const unsigned char *byte = bytes;
    uint64_t word;
    if (digest == 0)
        digest = 14695981039346656037U;
    for (; size >= sizeof word; size -= sizeof word, byte += sizeof word) {
        memcpy(&word, byte, sizeof word);
        digest = (digest ^ word) * 1099511628211U;
        digest ^= digest >> 32; /* what is in high bits reaches the low ones */
    }
    for (size_t k = 0; k < size; k++)
        digest = (digest ^ byte[k]) * 1099511628211U;
    return digest;
}

struct memo_work memo_begin(fescue_context *context, uint64_t digest)
{
    struct memo *memo = context->memo;
    struct memo_work work = {.memo = memo, .digest = digest, .began = clock_wall()};
    if (memo == NULL)
        return work;
    work.number = ++memo->next;
    for (size_t k = 0; k < memo->count; k++)
        if (memo->items[k].number == work.number) {
            if (memo->items[k].digest == digest)
                work.recalls = true;
            else
                items_drop(memo, work.number); /* from here on it is another sequence */
            work.item = k;
            break;
        }
    if (memo->has_state && memo->state.number <= work.number &&
        (memo->state.number < work.number || memo->state.digest != digest))
        memo->has_state = false;
    return work;
}

bool memo_get(struct memo_work *work, void *bytes, size_t size)
{
    const struct memo_item *item = &work->memo->items[work->item];
    assert(work->recalls);
    if (size > item->size - work->at)
        return false;
    memcpy(bytes, item->bytes + work->at, size);
    work->at += size;
    return true;
}

static bool is_worth(const struct memo_work *work, size_t size)
{
    return work->memo != NULL && (double)size / disk_pace * WORTH <= clock_wall() - work->began;
}

void memo_keep(struct memo_work *work, const struct memo_part *parts, size_t count)
{
    struct memo *memo = work->memo;
    struct memo_item item = {.number = work->number, .digest = work->digest};
    static const struct memo_item none = {0};
    size_t size = 0;
    for (size_t k = 0; k < count; k++)
        size += parts[k].size;
    if (!is_worth(work, size) || is_cancelled(memo->context))
        return; /* once it was asked to stop a piece may follow one that was cut short, and is none of the sequence */
    struct memo_item *kept = item_add(memo, &item);
    if (kept == NULL || !item_reserve(memo, kept, size)) {
        memo->count -= kept != NULL;
        return;
    }
    for (size_t k = 0; k < count; k++) {
        memcpy(kept->bytes + kept->size, parts[k].bytes, parts[k].size);
        kept->size += parts[k].size;
    }
    if (is_due(memo))
        memo_write(memo, &none, NULL, 0);
}

uint64_t memo_state_size(const struct memo_work *work)
{
    const struct memo *memo = work->memo;
    return memo != NULL && memo->has_state && memo->state.number == work->number ? memo->state.size : 0;
}

fescue_status memo_resume(const struct memo_work *work, const struct memo_part *parts, size_t count, bool *resumed)
{
    struct memo *memo = work->memo;
    struct memo_reading reading;
    size_t size = 0;
    char skipped[4096];
    *resumed = false;
    if (memo == NULL || !memo->has_state || memo->state.number != work->number)
        return FESCUE_OK;
    memo->has_state = false;
    for (size_t k = 0; k < count; k++)
        size += parts[k].size;
    if (memo->state.size != size)
        return FESCUE_OK;
    if (!reading_open(memo, &reading))
        return FESCUE_NO_INPUT;
    for (uint64_t left = memo->state_at; left > 0 && reading.good;) {
        size_t piece = left < sizeof skipped ? (size_t)left : sizeof skipped;
        get(&reading, skipped, piece);
        left -= piece;
    }
    for (size_t k = 0; k < count; k++)
        get(&reading, parts[k].bytes, parts[k].size);
    file_close(memo->context, &reading.descriptor);
    *resumed = reading.good;
    return reading.good ? FESCUE_OK
                        : FAIL(memo->context, FESCUE_NO_INPUT, "%s: the checkpoint cannot be read again", memo->path);
}

void memo_tell(const struct memo_work *work, const struct memo_part *parts, size_t count)
{
    struct memo *memo = work->memo;
    struct memo_item state = {.number = work->number, .digest = work->digest};
    bool is_last = memo != NULL && is_cancelled(memo->context);
    if (memo == NULL || memo->is_saved || (!is_last && !is_due(memo)))
        return;
    for (size_t k = 0; k < count; k++)
        state.size += parts[k].size;
    memo_write(memo, &state, parts, count);
}
