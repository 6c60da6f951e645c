/* SPDX-License-Identifier: MIT
 *
 * The text of a source, in chunks of whole lines, and the pipeline that reads and parses them side by side.
 *
 *     source --fill--> chunk --parse--> block of entries --finish--> pile, or --settle--> cells in order
 *              one after the other  |  any order, any worker  |  one after the other, in the order of the text
 *
 * A chunk ends with the last end of line that fits; what is left, less than a line, is carried over to the next one. A
 * line that fills a chunk makes it double: a line may be as long as memory allows.
 *
 * Chunks lie in a ring, chunk n in slot n mod ring_size, and three counters say where the work stands:
 *
 *     finished <= taken <= filled <= finished + ring_size
 *
 * so that memory is bounded however far one worker gets ahead. Worker 0, the caller, does all reading, since signals
 * come to it alone and must be able to end a wait for a slow pipe; while the ring is full it parses like the others.
 * With one worker the same loop fills and parses in turn. What a chunk holds, and in which order chunks are finished,
 * does not depend on the number of workers; nor do line numbers, which are counted as chunks are finished.
 *
 * Readers whose lines depend on one another take lines, with stream_line, on one worker, while worker 0 fills.
 */
#include "table/table_internal.h"

#include <assert.h>
#include <pthread.h>
#include <string.h>

enum { SPARE_CHUNKS = 2 }; /* beyond one a worker: filled while all are busy */

struct stream {
    fescue_context *context;
    struct source source;
    double opened;      /* when, by the clock */
    uint64_t disk_size; /* of the file; 0: not known */
    uint64_t line;      /* delivered, or counted behind a finished chunk */
    struct chunk *ring;
    size_t ring_size;
    char *carry; /* the beginning of the line that the last chunk filled cut off */
    size_t carry_length, carry_size;
    struct chunk *current; /* whose lines stream_line delivers */

    pthread_mutex_t lock; /* guards what follows, while workers run */
    pthread_cond_t changed;
    uint64_t filled, taken, finished; /* chunks */
    bool ended;                       /* no chunk follows the last one filled */
    bool stopped;                     /* by a failure, or since nothing is wanted any more */
    bool is_left;                     /* the next chunk to be finished is to be read by lines */
    bool is_shared;                   /* worker 0 fills; otherwise whoever wants a chunk does it himself */
    bool has_reader;
    fescue_status status; /* of the failure that stopped us */
};

uint64_t stream_line_number(const struct stream *stream)
{
    return stream->line;
}

uint64_t stream_text_size(const struct stream *stream)
{
    return stream->source.is_gzip ? 0 : stream->disk_size;
}

const char *stream_name(const struct stream *stream)
{
    return stream->source.name;
}

fescue_context *stream_context(const struct stream *stream)
{
    return stream->context;
}

struct source *stream_source(struct stream *stream)
{
    return &stream->source;
}

void stream_lines_skip(struct stream *stream, uint64_t lines)
{
    stream->line += lines;
}

/* By stretches short enough to count in bytes, so that the compiler adds sixteen at a time. */
size_t lines_count(const char *text, const char *end)
{
    enum { STRETCH = 128 };
    size_t lines = 0;
    for (; end - text >= STRETCH; text += STRETCH) {
        unsigned char feeds = 0;
        for (int k = 0; k < STRETCH; k++)
            feeds = (unsigned char)(feeds + (text[k] == '\n'));
        lines += feeds;
    }
    for (; text < end; text++)
        lines += *text == '\n';
    return lines;
}

static struct chunk *chunk_at(const struct stream *stream, uint64_t number)
{
    return &stream->ring[number % stream->ring_size];
}

/* ---- filling ---------------------------------------------------------------------------------------------------- */

static fescue_status chunk_grow(struct stream *stream, struct chunk *chunk, size_t least)
{
    size_t size = chunk->size < CHUNK_SIZE ? CHUNK_SIZE : chunk->size;
    while (size < least)
        if (!size_product(size, 2, &size))
            return FAIL(stream->context, FESCUE_NO_MEMORY, "%s: a line is longer than can be addressed",
                        stream->source.name);
    if (size == chunk->size)
        return FESCUE_OK;
    fescue_status status = RESIZE(stream->context, size + CHUNK_SLACK, &chunk->text);
    if (status == FESCUE_OK)
        chunk->size = size;
    return status;
}

/* Keeps what follows the last whole line. */
static fescue_status carry_keep(struct stream *stream, const struct chunk *chunk)
{
    size_t length = chunk->got - chunk->end;
    if (length > stream->carry_size) {
        size_t size = length + length / 2; /* lengths of lines vary: not every longer one is to cost a new block */
        fescue_status status = RESIZE(stream->context, size, &stream->carry);
        if (status != FESCUE_OK)
            return status;
        stream->carry_size = size;
    }
    if (length > 0)
        memcpy(stream->carry, chunk->text + chunk->end, length);
    stream->carry_length = length;
    return FESCUE_OK;
}

/* Reads until the chunk is full or the text ends. */
static fescue_status chunk_read(struct stream *stream, struct chunk *chunk)
{
    fescue_status status;
    struct source *source = &stream->source;
    TRY(progress_tell_bytes(stream->context, "reading", source->disk_bytes, stream->disk_size,
                            clock_wall() - stream->opened));
    while (chunk->got < chunk->size && !source_has_ended(source)) {
        size_t made;
        TRY(source_read(source, chunk->text + chunk->got, chunk->size - chunk->got, &made));
        chunk->got += made;
    }
done:
    return status;
}

/* The next chunk of the text into the slot where it belongs; *ended tells whether it is the last. */
static fescue_status chunk_fill(struct stream *stream, struct chunk *chunk, bool *ended)
{
    fescue_status status;
    chunk->at = chunk->end = chunk->got = 0;
    TRY(chunk_grow(stream, chunk, stream->carry_length));
    if (stream->carry_length > 0)
        memcpy(chunk->text, stream->carry, stream->carry_length);
    chunk->got = stream->carry_length;
    for (size_t seen = chunk->got;; seen = chunk->got) { /* what is carried over holds no end of line */
        TRY(chunk_read(stream, chunk));
        *ended = source_has_ended(&stream->source);
        const char *newline = memrchr(chunk->text + seen, '\n', chunk->got - seen);
        chunk->end = *ended ? chunk->got : newline != NULL ? (size_t)(newline + 1 - chunk->text) : 0;
        if (*ended || newline != NULL)
            break;
        TRY(chunk_grow(stream, chunk, chunk->size + 1));
    }
    chunk->number = stream->filled;
    chunk->complaint = stream->source.complaint;
    chunk->has_zero = memchr(chunk->text, '\0', chunk->end) != NULL;
    TRY(carry_keep(stream, chunk));
done:
    return status;
}

/* ---- sharing ---------------------------------------------------------------------------------------------------- */

static void stream_stop(struct stream *stream, fescue_status status)
{
    pthread_mutex_lock(&stream->lock);
    if (!stream->stopped || (stream->is_left && stream->status == FESCUE_OK))
        stream->status = status;
    stream->stopped = true;
    pthread_cond_broadcast(&stream->changed);
    pthread_mutex_unlock(&stream->lock);
}

/* Fills the next slot, which is free, and shows the chunk to all. */
static void chunk_supply(struct stream *stream)
{
    bool ended;
    fescue_status status = chunk_fill(stream, chunk_at(stream, stream->filled), &ended);
    if (status != FESCUE_OK) {
        stream_stop(stream, status);
        return;
    }
    pthread_mutex_lock(&stream->lock);
    stream->filled++;
    stream->ended = ended;
    pthread_cond_broadcast(&stream->changed);
    pthread_mutex_unlock(&stream->lock);
}

/* What a worker does next. */
enum task { TASK_NONE, TASK_FILL, TASK_PARSE };

static enum task task_choose(const struct stream *stream, bool may_fill)
{
    if (may_fill && !stream->ended && stream->filled - stream->finished < stream->ring_size)
        return TASK_FILL;
    return stream->taken < stream->filled ? TASK_PARSE : TASK_NONE;
}

/* Waits for something to do; TASK_NONE when there will be nothing more. TASK_PARSE takes *chunk. */
static enum task task_await(struct stream *stream, bool may_fill, bool may_parse, struct chunk **chunk)
{
    enum task task = TASK_NONE;
    pthread_mutex_lock(&stream->lock);
    while (!stream->stopped && !(stream->ended && stream->taken == stream->filled)) {
        task = task_choose(stream, may_fill);
        if (task == TASK_FILL || (task == TASK_PARSE && may_parse))
            break;
        task = TASK_NONE;
        if (stream->ended && !may_parse)
            break;
        pthread_cond_wait(&stream->changed, &stream->lock);
    }
    if (task == TASK_PARSE)
        *chunk = chunk_at(stream, stream->taken++);
    pthread_mutex_unlock(&stream->lock);
    return task;
}

/* ---- lines ------------------------------------------------------------------------------------------------------ */

/* The line of damaged data: whole lines are counted up to where the damage showed. */
static fescue_status complaint_tell(const struct stream *stream, const struct chunk *chunk)
{
    uint64_t line = stream->line + 1;
    for (const char *c = chunk->text + chunk->at; c < chunk->text + chunk->end; c++)
        line += *c == '\n';
    return source_tell(&stream->source, line);
}

fescue_status chunk_line(struct stream *stream, struct chunk *chunk, struct line *line)
{
    *line = (struct line){0};
    if (chunk->at == chunk->end)
        return FESCUE_OK;
    line->text = chunk->text + chunk->at;
    const char *newline = memchr(line->text, '\n', chunk->end - chunk->at);
    const char *after = newline != NULL ? newline + 1 : chunk->text + chunk->end;
    line->end = newline != NULL ? newline : after;
    if (line->end > line->text && line->end[-1] == '\r')
        line->end--;
    line->terminator = (size_t)(after - line->end);
    chunk->at = (size_t)(after - chunk->text);
    stream->line++;
    if (chunk->has_zero && memchr(line->text, '\0', (size_t)(line->end - line->text)) != NULL)
        return BAD_LINE(stream, "a zero byte was found, where text was expected");
    return FESCUE_OK;
}

/* Makes the next chunk the current one, or leaves none. */
static fescue_status chunk_next(struct stream *stream)
{
    fescue_status status = FESCUE_OK;
    stream->current = NULL;
    pthread_mutex_lock(&stream->lock);
    stream->finished = stream->taken;
    pthread_cond_broadcast(&stream->changed);
    pthread_mutex_unlock(&stream->lock);
    if (!stream->is_shared && !stream->ended && !stream->stopped)
        chunk_supply(stream);
    if (task_await(stream, false, true, &stream->current) == TASK_NONE && stream->stopped)
        status = stream->status;
    else if (stream->current != NULL && stream->current->complaint != NULL)
        status = complaint_tell(stream, stream->current);
    return status;
}

fescue_status stream_line(struct stream *stream, struct line *line)
{
    fescue_status status;
    do {
        *line = (struct line){0};
        if (stream->current == NULL)
            return FESCUE_OK;
        TRY(chunk_line(stream, stream->current, line));
        if (line->text == NULL)
            TRY(chunk_next(stream));
    } while (line->text == NULL);
done:
    return status;
}

uint64_t stream_chunk_number(const struct stream *stream)
{
    return stream->current != NULL ? stream->current->number : UINT64_MAX;
}

bool stream_chunk_is_read(const struct stream *stream)
{
    return stream->current == NULL || stream->current->at == stream->current->end;
}

void stream_peek(const struct stream *stream, size_t most, const char **text, size_t *length)
{
    const struct chunk *chunk = stream->current;
    assert(stream->line == 0);
    *text = chunk->text + chunk->at;
    *length = chunk->got - chunk->at < most ? chunk->got - chunk->at : most;
}

/* ---- reading by lines ------------------------------------------------------------------------------------------- */

struct line_reading {
    struct stream *stream;
    fescue_status (*read)(void *data);
    void *data;
};

/* Whether we are the one who reads lines. */
static bool reader_claim(struct stream *stream)
{
    pthread_mutex_lock(&stream->lock);
    bool first = !stream->has_reader;
    stream->has_reader = true;
    pthread_mutex_unlock(&stream->lock);
    return first;
}

static void stop_await(struct stream *stream)
{
    pthread_mutex_lock(&stream->lock);
    while (!stream->stopped)
        pthread_cond_wait(&stream->changed, &stream->lock);
    pthread_mutex_unlock(&stream->lock);
}

/* There are as many blocks as workers, and whoever has one keeps it to the end: so each worker gets one. */
static void line_worker(void *job, size_t block, size_t worker)
{
    const struct line_reading *reading = job;
    struct stream *stream = reading->stream;
    struct chunk *none;
    (void)block;
    while (worker == 0 && task_await(stream, true, false, &none) == TASK_FILL)
        chunk_supply(stream);
    if (worker > 0 && reader_claim(stream))
        stream_stop(stream, reading->read(reading->data));
    stop_await(stream);
}

fescue_status stream_read(struct stream *stream, fescue_status (*read)(void *data), void *data)
{
    struct line_reading reading = {stream, read, data};
    size_t workers = team_workers(stream->context);
    if (workers == 1)
        return read(data);
    stream->is_shared = true;
    team_run(stream->context, workers, line_worker, &reading);
    return stream->status;
}

/* ---- reading by chunks ------------------------------------------------------------------------------------------ */

struct chunk_reading {
    struct stream *stream;
    const struct chunk_reader *reader;
};

/* Waits until all chunks before this one are finished; false when that will never be. */
static bool turn_await(struct stream *stream, const struct chunk *chunk)
{
    pthread_mutex_lock(&stream->lock);
    while (!stream->stopped && stream->finished != chunk->number)
        pthread_cond_wait(&stream->changed, &stream->lock);
    bool is_ours = !stream->stopped;
    pthread_mutex_unlock(&stream->lock);
    return is_ours;
}

/* The chunk is finished, or left to whoever reads lines; then nothing behind it is wanted either. */
static void turn_pass(struct stream *stream, bool is_left)
{
    pthread_mutex_lock(&stream->lock);
    stream->finished += !is_left;
    stream->is_left = is_left;
    stream->stopped = stream->stopped || is_left;
    pthread_cond_broadcast(&stream->changed);
    pthread_mutex_unlock(&stream->lock);
}

static void chunk_parse(struct stream *stream, const struct chunk_reader *reader, size_t worker, struct chunk *chunk)
{
    fescue_status status = FESCUE_OK;
    struct pile_block *block = NULL;
    bool is_left = false;
    if (chunk->complaint == NULL)
        TRY(reader->parse(reader->data, worker, chunk, &block));
    if (turn_await(stream, chunk)) {
        TRY(chunk->complaint != NULL ? complaint_tell(stream, chunk)
                                     : reader->finish(reader->data, worker, chunk, &block, &is_left));
        turn_pass(stream, is_left);
        if (block != NULL && reader->settle != NULL)
            reader->settle(reader->data, block);
    }
done:
    pile_block_free(stream->context, &block);
    if (status != FESCUE_OK)
        stream_stop(stream, status);
}

static void chunk_worker(void *job, size_t block, size_t worker)
{
    const struct chunk_reading *reading = job;
    struct stream *stream = reading->stream;
    struct chunk *chunk;
    enum task task;
    (void)block;
    while ((task = task_await(stream, worker == 0, true, &chunk)) != TASK_NONE)
        if (task == TASK_FILL)
            chunk_supply(stream);
        else
            chunk_parse(stream, reading->reader, worker, chunk);
}

/* The chunk that was left becomes the current one; those behind it, filled already, will be taken again. */
static void lines_resume(struct stream *stream)
{
    stream->stopped = stream->is_shared = false;
    stream->current = chunk_at(stream, stream->finished);
    stream->taken = stream->finished + 1;
}

fescue_status stream_parse(struct stream *stream, const struct chunk_reader *reader)
{
    struct chunk_reading reading = {stream, reader};
    size_t workers = team_workers(stream->context);
    if (stream->current == NULL)
        return FESCUE_OK;
    stream->current = NULL; /* it is the first to be parsed: what is left of it */
    stream->finished = --stream->taken;
    stream->is_shared = true;
    stream->is_left = false;
    team_run(stream->context, workers, chunk_worker, &reading);
    if (stream->is_left && stream->status == FESCUE_OK)
        lines_resume(stream);
    return stream->status;
}

/* ---- opening ---------------------------------------------------------------------------------------------------- */

static void byte_order_mark_skip(struct chunk *chunk)
{
    static const char mark[] = "\xef\xbb\xbf";
    const size_t length = sizeof mark - 1;
    if (chunk->end >= length && memcmp(chunk->text, mark, length) == 0)
        chunk->at += length;
}

fescue_status stream_open(fescue_context *context, const char *path, struct stream **out)
{
    fescue_status status;
    struct stream *stream = NULL;
    size_t workers = team_workers(context);
    *out = NULL;
    TRY(TAKE(context, 1, &stream));
    stream->context = context;
    stream->opened = clock_wall();
    pthread_mutex_init(&stream->lock, NULL);
    pthread_cond_init(&stream->changed, NULL);
    TRY(source_open(context, path, &stream->source));
    stream->disk_size = file_size(context, stream->source.descriptor);
    stream->ring_size = workers == 1 ? 1 : workers + SPARE_CHUNKS;
    TRY(TAKE(context, stream->ring_size, &stream->ring));
    TRY(chunk_next(stream));
    byte_order_mark_skip(stream->current);
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
    source_close(&stream->source);
    for (size_t k = 0; stream->ring != NULL && k < stream->ring_size; k++)
        GIVE(context, &stream->ring[k].text);
    GIVE(context, &stream->ring);
    GIVE(context, &stream->carry);
    pthread_cond_destroy(&stream->changed);
    pthread_mutex_destroy(&stream->lock);
    GIVE(context, out);
}
