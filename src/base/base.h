/* SPDX-License-Identifier: MIT
 *
 * The ground floor: what every other folder stands on.
 *
 *   failures    a function returns its status, outputs come last; the context keeps the first failure's sentence
 *   memory      one replaceable, counting allocator; sizes only by checked products
 *   files       one small table of system calls for every open, read, write, flush and rename
 *   lock        one holder of a name at a time, among processes
 *   output      files that appear whole under their final name, or not at all
 *   memo        finished work and the state of work at hand, which a later run goes on from
 *   random      counter-based numbers: a draw depends on (seed, stream, index) and on nothing else
 *   team        the workers: who am I, how many are we, sum these numbers in a fixed order
 *   clock       wall and processor time
 *
 * Nothing here knows of tables. Nothing here prints, exits or aborts.
 */
#ifndef FESCUE_BASE_H
#define FESCUE_BASE_H

#include "fescue.h"

#include <stdarg.h>
#include <stdbool.h>
#include <stddef.h>
#include <stdint.h>

/* ---- failures ------------------------------------------------------------------------------------------------- */

/* Records the sentence for the user (no trailing newline, no "error:") unless an earlier one is kept, and returns
   `status`. `where` is "file.c:line" of our source. Safe from any worker. Borrows everything. */
fescue_status failure_record(fescue_context *context, fescue_status status, const char *where, const char *format, ...)
    __attribute__((format(printf, 4, 5)));

#define BASE_TEXT_(x) #x
#define BASE_TEXT(x) BASE_TEXT_(x)
#define FAIL(context, status, ...) failure_record((context), (status), __FILE__ ":" BASE_TEXT(__LINE__), __VA_ARGS__)

/* Evaluates a call; on anything but FESCUE_OK leaves through the function's one label `done:`, with `status` set. */
#define TRY(call)                                                                                                      \
    do {                                                                                                               \
        status = (call);                                                                                               \
        if (status != FESCUE_OK)                                                                                       \
            goto done;                                                                                                 \
    } while (0)

/* ---- memory --------------------------------------------------------------------------------------------------- */

enum { MEMORY_LARGE_PAGE = 1 << 21 }; /* bytes of the larger kind of page, where the system has them */

/* *out (the address of a pointer of any object type) becomes a new zeroed block of count * size bytes, aligned to 64;
   a size of 0 gives NULL and FESCUE_OK. FESCUE_NO_MEMORY when the product overflows, the memory limit would be passed
   or the system refuses; *out is then NULL. The caller owns the block. Safe from any worker. */
fescue_status memory_take(fescue_context *context, size_t count, size_t size, void *out);

/* As memory_take, but keeps the first min(old, new) bytes of *block; the new tail is zeroed. On failure *block stays.
   A size that is not larger never fails: where there is no room for the copy, *block stays as large as it was. */
fescue_status memory_resize(fescue_context *context, size_t count, size_t size, void *block);

/* Takes back the block *block points at (NULL is fine) and nulls it. */
void memory_give(fescue_context *context, void *block);

/* TAKE(ctx, n, &p): a typed memory_take. GIVE(ctx, &p). */
#define TAKE(context, count, pointer) memory_take((context), (count), sizeof **(pointer), (pointer))
#define RESIZE(context, count, pointer) memory_resize((context), (count), sizeof **(pointer), (pointer))
#define GIVE(context, pointer) memory_give((context), (pointer))

/* No more than `bytes` may be alive from now on (0: no limit); what is alive already stays. */
void memory_limit_set(fescue_context *context, uint64_t bytes);

/* New NUL-terminated copy of `length` bytes of text. The caller owns it. */
fescue_status memory_copy_text(fescue_context *context, const char *text, size_t length, char **out);

/* *product = a * b, or false when that overflows. */
bool size_product(size_t a, size_t b, size_t *product);

/* One aligned workspace carved in declared pieces: first every piece is reserved, then the arena is opened once, then
   the same pieces are carved in the same order. Usage: arena_reserve xN, arena_open, arena_carve xN, arena_close. */
struct arena {
    char *base;
    size_t reserved, carved;
    bool overflow;
};
void arena_reserve(struct arena *arena, size_t count, size_t size);
fescue_status arena_open(fescue_context *context, struct arena *arena); /* zeroed; FESCUE_NO_MEMORY */
void *arena_carve(struct arena *arena, size_t count, size_t size); /* aligned to 64; zeros; asserts on over-carving */
void arena_close(fescue_context *context, struct arena *arena);    /* NULL-safe, idempotent */

/* ---- files ---------------------------------------------------------------------------------------------------- */

/* Every touch of the disk goes through this table; each entry behaves as the POSIX call of its name and sets errno.
   Tests put their own in place with file_calls_set. */
struct file_calls {
    int (*open)(const char *path, int flags, unsigned mode);
    ptrdiff_t (*read)(int descriptor, void *bytes, size_t count);
    ptrdiff_t (*write)(int descriptor, const void *bytes, size_t count);
    int (*sync)(int descriptor);
    int (*close)(int descriptor);
    int (*rename)(const char *from, const char *to);
    int (*unlink)(const char *path);
    int (*make_directory)(const char *path, unsigned mode);
    int64_t (*size)(int descriptor);           /* of a regular file; -1 when it is none or an error */
    void *(*map)(int descriptor, size_t size); /* its first bytes, to be read alone; NULL on an error */
    int (*unmap)(void *bytes, size_t size);
    int (*rest)(void *bytes, size_t size); /* lets mapped bytes go from memory until they are read again */
};
extern const struct file_calls posix_file_calls;
void file_calls_set(fescue_context *context, const struct file_calls *calls); /* borrowed; NULL: POSIX */

/* Opens for reading; "-" is standard input. FESCUE_NO_INPUT with a sentence naming path and cause; FESCUE_STOPPED when
   a signal interrupts the wait and fescue_context_cancel was called. */
fescue_status file_open_read(fescue_context *context, const char *path, int *descriptor);
/* Reads up to count bytes (retries EINTR); *got = 0 at the end. FESCUE_NO_INPUT on a read error, FESCUE_STOPPED as
   above. */
fescue_status file_read(fescue_context *context, const char *path, int descriptor, void *bytes, size_t count,
                        size_t *got);
/* Bytes of a regular file; 0 for anything else, such as a pipe. */
uint64_t file_size(fescue_context *context, int descriptor);
/* The first `size` bytes (at least one) as memory that may be read and not written, *bytes; NULL where the system
   cannot do that, and then they are to be read. */
void file_map(fescue_context *context, int descriptor, size_t size, const void **bytes);
void file_unmap(fescue_context *context, const void **bytes, size_t size); /* NULL-safe; nulls the pointer */
/* The mapped bytes will not be read for a while: what they take of memory is given back until then. */
void file_rest(fescue_context *context, const void *bytes, size_t size);
void file_close(fescue_context *context, int *descriptor); /* -1 and standard input are left alone; sets -1 */

/* ---- locks ----------------------------------------------------------------------------------------------------- */

/* One holder of a name at a time, among all processes; a holder that dies lets go. A zero lock holds nothing. */
struct lock {
    char *path;
    int descriptor;
};
/* Takes the lock whose file is `path` on `what` (for people), waiting up to `patience` seconds for another holder.
   FESCUE_CANNOT_CREATE: held all that time, and the sentence says by whom; or no file can be made there. */
fescue_status lock_take(fescue_context *context, const char *path, const char *what, double patience,
                        struct lock *lock);
void lock_give(fescue_context *context, struct lock *lock); /* idempotent; nothing happens to a lock not taken */
/* Makes a directory and its missing parents; FESCUE_CANNOT_CREATE. */
fescue_status directory_make(fescue_context *context, const char *path);

/* ---- output: whole under the final name, or not at all ---------------------------------------------------------- */

/* A set of files of one directory that appear together. Each is written beside its final name under a temporary one;
   output_publish flushes all to disk, removes an older `seal` (the file whose presence says "complete"), renames
   every file, the seal last, and flushes the directory. output_abandon (or a failed publish) removes what is temporary;
   directories that were made stay.
   FESCUE_CANNOT_CREATE (directory, temporary file), FESCUE_CANNOT_WRITE (write, flush, rename). */
struct output;  /* the set */
struct outfile; /* one file of it, buffered */

fescue_status output_open(fescue_context *context, const char *directory, const char *seal, struct output **out);
/* New file `name` in the set; owned by the set. */
fescue_status output_add(struct output *output, const char *name, struct outfile **out);
/* Publishing also removes what an older run may have left under this name, unless the set has a file of it: so that all
   results in the directory belong to the new seal. FESCUE_NO_MEMORY. */
fescue_status output_retire(struct output *output, const char *name);
fescue_status output_publish(struct output **output); /* takes the set, also when it fails; nulls the pointer */
void output_abandon(struct output **output);          /* NULL-safe; nulls the pointer */
/* Removes the temporary files that processes which died left in a directory. FESCUE_NO_MEMORY. */
fescue_status output_sweep(fescue_context *context, const char *directory);

/* Appending to one file. Failures are sticky: after one, further calls do nothing and outfile_status tells; publish
   fails too. So a writer may check once, at its end. */
void outfile_write(struct outfile *file, const void *bytes, size_t count);
/* A buffer of so many bytes at least, before anything is written: the system then gets the file in pieces that begin
   at multiples of it. */
fescue_status outfile_widen(struct outfile *file, size_t size);
void outfile_text(struct outfile *file, const char *text);
void outfile_format(struct outfile *file, const char *format, ...) __attribute__((format(printf, 2, 3)));
/* The shortest decimal that reads back as the same double (or float); "nan" for a hole; never depends on the locale. */
void outfile_real(struct outfile *file, double value, enum fescue_precision precision);
void outfile_count(struct outfile *file, uint64_t value);
fescue_status outfile_status(const struct outfile *file);
/* Text that the team makes: calls the task for every piece 0 .. pieces-1, some of them at the same time, and what each
   appends to its own sink follows in the file in the order of the pieces. */
typedef void outfile_task(void *job, size_t piece, struct outfile *sink);
void outfile_share(struct outfile *file, size_t pieces, outfile_task *task, void *job);

/* The shortest round-trip decimal of value into text (at least 32 bytes), NUL-terminated; returns its length. */
size_t real_to_text(double value, enum fescue_precision precision, char text[32]);

/* ---- memo: what a later run of the same job need not do again ------------------------------------------------------
 */

/* A job is a fixed sequence of pieces of work (memo.c). Without memo_open all of this does nothing and costs nothing.
   Used by the thread that uses the context. */
struct memo;
struct memo_part { /* a stretch of bytes, of a result or of a state; no pointers in it */
    void *bytes;
    size_t size;
};
/* Attaches the memo in the file `path`; what it holds counts only when it was made under the same identity, a text of
   lines. Written every so many seconds and when the context is cancelled. FESCUE_NO_MEMORY; anything else that is wrong
   with the file is a note, and the job starts over. */
fescue_status memo_open(fescue_context *context, const char *path, const char *identity, double every);
void memo_close(fescue_context *context);  /* the file stays */
void memo_remove(fescue_context *context); /* removes the file: the job is done */
void memo_flush(fescue_context *context);  /* writes what is finished, unless that was done on being cancelled */
const char *memo_note(const fescue_context *context); /* why a checkpoint was not used, one sentence; or "" */
bool memo_goes_on(const fescue_context *context);     /* whether one was */
/* What earlier runs of the job took, seconds and seconds of processors. */
double memo_seconds_before(const fescue_context *context, double *cpu);

struct memo_work { /* one piece; a value, needs no closing */
    struct memo *memo;
    uint64_t number, digest;
    size_t item, at;
    double began;
    bool recalls; /* it was finished in an earlier run: memo_get what it came to, and do nothing */
};
/* digest: of what the piece is asked. */
struct memo_work memo_begin(fescue_context *context, uint64_t digest);
uint64_t memo_digest(uint64_t digest, const void *bytes, size_t size); /* 0 begins one */
/* The next bytes of what it came to; false when there are fewer. */
bool memo_get(struct memo_work *work, void *bytes, size_t size);
/* It is finished and came to this; copied, unless doing it again is cheaper. */
void memo_keep(struct memo_work *work, const struct memo_part *parts, size_t count);
/* Whether the piece ran when the last checkpoint was written; then its state then is in the parts. FESCUE_NO_INPUT when
   it cannot be read any more. */
fescue_status memo_resume(const struct memo_work *work, const struct memo_part *parts, size_t count, bool *resumed);
/* How many bytes such a state has; 0: there is none. */
uint64_t memo_state_size(const struct memo_work *work);
/* It runs, and this is its state: written when that is due, or the context was cancelled. */
void memo_tell(const struct memo_work *work, const struct memo_part *parts, size_t count);

/* ---- random numbers -------------------------------------------------------------------------------------------- */

/* Philox4x32-10 (Salmon, Moraes, Dror, Shaw 2011, "Parallel random numbers: as easy as 1, 2, 3"): the key is the
   seed, the counter is (index, stream). A draw depends on nothing else, so the order of work does not matter. */
struct random_stream {
    uint64_t seed, stream, index; /* index counts 128-bit blocks already used */
};
enum random_purpose { /* the high half of `stream`, so that no two uses share numbers */
                      RANDOM_HOLDOUT = 1,
                      RANDOM_START,
                      RANDOM_SOW,
                      RANDOM_FOLD,
                      RANDOM_PROBE,
                      RANDOM_BATCH,
                      RANDOM_TEST
};
void philox4x32(const uint32_t counter[4], const uint32_t key[2], uint32_t out[4]);
struct random_stream random_open(uint64_t seed, enum random_purpose purpose, uint32_t which);
uint64_t random_bits(struct random_stream *stream);
double random_uniform(struct random_stream *stream);                 /* [0, 1), 53 bits */
double random_normal(struct random_stream *stream);                  /* N(0, 1), Box-Muller */
uint64_t random_below(struct random_stream *stream, uint64_t bound); /* 0 .. bound-1, unbiased */
double random_uniform_at(uint64_t seed, enum random_purpose purpose, uint32_t which, uint64_t index); /* stateless */

/* ---- the team --------------------------------------------------------------------------------------------------- */

/* Work is cut into blocks whose number and bounds never depend on the number of workers; what a block computes goes
   to its own place; sums over blocks run in block order. So the bits are the same for any number of threads. Only one
   team_run at a time on a context; a task must not call team_run, and in a fit must not allocate. */
typedef void team_task(void *job, size_t block, size_t worker);

size_t team_workers(const fescue_context *context); /* threads; worker numbers are 0 .. workers-1 */
/* From one worker's room to the next, in numbers of `size` bytes, where each has room for so many: TEAM_APART bytes
   more. A processor that goes through its room again and again reads ahead, beyond its end, and what it finds there
   another has to fetch back before it can write. Side by side, two workers' normal equations took up to 1.2 times as
   long. */
enum { TEAM_APART = 1024 };
static inline size_t team_room(size_t numbers, size_t size)
{
    return ((numbers * size + 63) / 64 * 64 + TEAM_APART) / size;
}
/* Calls task(job, block, worker) once for every block in 0 .. blocks-1, in any order, and returns when all are done. */
void team_run(fescue_context *context, size_t blocks, team_task *task, void *job);
/* out[k] = sum over blocks, in order, of partial[block*width + k]; then over ranks where there are several. */
void team_sum(fescue_context *context, const double *partial, size_t blocks, size_t width, double *out);
/* Starts (or changes to) `workers` threads; 0 = the processors this process may use. FESCUE_NO_MEMORY. */
fescue_status team_resize(fescue_context *context, size_t workers);

/* ---- vector instructions ----------------------------------------------------------------------------------------- */

/* What this processor has: AVX2 with FMA, BMI and BMI2; beside it AVX-512 F, VL, DQ. */
enum vectors { VECTORS_NONE, VECTORS_AVX2, VECTORS_AVX512 };
enum vectors vectors_there(void);
enum vectors vectors_choose(void); /* and FESCUE_KERNEL does not forbid */

/* ---- OpenBLAS --------------------------------------------------------------------------------------------------- */

/* One thread inside OpenBLAS from here on: it picks how to split a product by the number of its threads, so that the
   order of sums, and with it the last bits, would depend on the machine. Our own team works on whole blocks instead. */
void openblas_hold(void);
/* Which of its sets of kernels it took for this processor, by its own names, such as "Haswell". */
const char *openblas_kernels(void);

/* ---- clock, progress, cancel --------------------------------------------------------------------------------------
 */

double clock_wall(void); /* seconds, monotonic */
double clock_cpu(void);  /* seconds of this process, all threads */

/* Tells the user's callback, if any: what is being done, how far (0..1, or negative when unknown). FESCUE_STOPPED
   when the callback asks to stop or fescue_context_cancel was called; else FESCUE_OK. */
fescue_status progress_tell(fescue_context *context, const char *stage, double share);
/* The same while bytes are read: `done` of `total` (0: not known) after `seconds`; the callback is told the rate too.
 */
fescue_status progress_tell_bytes(fescue_context *context, const char *stage, uint64_t done, uint64_t total,
                                  double seconds);
/* Whether fescue_context_cancel was called. Safe from any thread. */
bool is_cancelled(const fescue_context *context);
/* A sentence for the log callback, if any (--verbose and the run record's notes). */
void log_tell(fescue_context *context, const char *format, ...) __attribute__((format(printf, 2, 3)));

#endif
