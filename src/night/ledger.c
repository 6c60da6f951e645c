/* SPDX-License-Identifier: MIT
 *
 * The ledger: an SQLite database beside the plan, with every night and every attempt at a job.
 *
 *     night     number, began, ended, state, again, version, process
 *     attempt   number, night, job, input, output, what was known before (checksums, options, version, seed), state,
 *               times, memory, exit, message, what came of it (figures), warning, flags
 *     basis     the last subspace of every job, for the angle to the next one
 *
 * It is written ahead (WAL), by one process: the night that holds the plan's lock. A statement is a transaction of its
 * own, which is on disk when ledger_do returns (synchronous = FULL): an attempt is there before its process is, and its
 * end before the next one begins, so whatever moment the machine dies at, what was running is known. Of attempts left
 * running night.c finds out what became of them.
 *
 * SQLite opens its files itself and takes memory from malloc.
 */
#include "night/night_internal.h"

#include <inttypes.h>
#include <math.h>
#include <stdio.h>
#include <string.h>
#include <unistd.h>

/* Of the tables below, in the database's user_version. */
enum { LEDGER_LAYOUT = 1, BUSY_MILLISECONDS = 10000 };

const char *const state_words[] = {
    [STATE_WAITING] = "waiting",     [STATE_RUNNING] = "running", [STATE_DONE] = "done",
    [STATE_UNCHANGED] = "unchanged", [STATE_STOPPED] = "stopped", [STATE_FAILED] = "failed",
    [STATE_SKIPPED] = "skipped",     [STATE_LOST] = "lost"};
const char *const figure_words[FIGURES] = {[FIGURE_ERROR] = "error on hidden cells",
                                           [FIGURE_MISSING] = "share missing",
                                           [FIGURE_RANK] = "rank",
                                           [FIGURE_MEAN] = "mean",
                                           [FIGURE_ROWS] = "row offsets",
                                           [FIGURE_COLUMNS] = "column offsets",
                                           [FIGURE_ANGLE] = "angle to the last subspace"};
const char *const figure_columns[FIGURES] = {
    [FIGURE_ERROR] = "rmse", [FIGURE_MISSING] = "missing",      [FIGURE_RANK] = "rank",
    [FIGURE_MEAN] = "mean",  [FIGURE_ROWS] = "row_offsets_rms", [FIGURE_COLUMNS] = "column_offsets_rms",
    [FIGURE_ANGLE] = "angle"};

static const char tables[] =
    "CREATE TABLE night (number INTEGER PRIMARY KEY, began TEXT NOT NULL, ended TEXT, state TEXT NOT NULL,"
    " again INTEGER NOT NULL, version TEXT NOT NULL, process INTEGER NOT NULL);"
    "CREATE TABLE attempt (number INTEGER PRIMARY KEY, night INTEGER NOT NULL REFERENCES night,"
    " job TEXT NOT NULL, input TEXT NOT NULL, output TEXT NOT NULL, state TEXT NOT NULL,"
    " input_sum TEXT, input_bytes INTEGER, record_before TEXT, options TEXT, version TEXT, seed INTEGER,"
    " threads INTEGER, shrunk TEXT, went_on INTEGER, began TEXT, ended TEXT, seconds REAL, processor_seconds REAL,"
    " memory INTEGER, exit INTEGER, message TEXT, warning TEXT, cut INTEGER,"
    " rows INTEGER, columns INTEGER, observed INTEGER, offsets TEXT, rmse REAL, mae REAL, missing REAL, rank REAL,"
    " mean REAL, row_offsets_rms REAL, column_offsets_rms REAL, angle REAL, distance REAL, flags TEXT);"
    "CREATE INDEX attempt_of_job ON attempt (job, state, number);"
    "CREATE TABLE basis (job TEXT PRIMARY KEY, by_rows INTEGER NOT NULL, labels TEXT NOT NULL,"
    " lines INTEGER NOT NULL, rank INTEGER NOT NULL, numbers BLOB NOT NULL);";

/* ---- statements ----------------------------------------------------------------------------------------------------
 */

static fescue_status ledger_fail(struct ledger *ledger)
{
    int code = sqlite3_errcode(ledger->database);
    fescue_status status = code == SQLITE_NOMEM ? FESCUE_NO_MEMORY : FESCUE_CANNOT_WRITE;
    int error = code == SQLITE_IOERR || code == SQLITE_CANTOPEN ? sqlite3_system_errno(ledger->database) : 0;
    return FAIL(ledger->context, status, "%s: the ledger cannot be used: %s%s%s", ledger->path,
                sqlite3_errmsg(ledger->database), error != 0 ? ": " : "", error != 0 ? strerror(error) : "");
}

static int argument_bind(sqlite3_stmt *statement, int place, char kind, va_list *arguments)
{
    if (kind == 'i')
        return sqlite3_bind_int64(statement, place, va_arg(*arguments, int64_t));
    if (kind == 't')
        return sqlite3_bind_text(statement, place, va_arg(*arguments, const char *), -1, SQLITE_TRANSIENT);
    if (kind == 'b') {
        const void *bytes = va_arg(*arguments, const void *);
        return sqlite3_bind_blob64(statement, place, bytes, (sqlite3_uint64)va_arg(*arguments, int64_t), SQLITE_STATIC);
    }
    double real = va_arg(*arguments, double);
    return isfinite(real) ? sqlite3_bind_double(statement, place, real) : sqlite3_bind_null(statement, place);
}

static fescue_status statement_run(struct ledger *ledger, ledger_row *take, void *data, const char *sql,
                                   const char *kinds, va_list *arguments)
{
    sqlite3_stmt *statement = NULL;
    int code = sqlite3_prepare_v2(ledger->database, sql, -1, &statement, NULL);
    for (int k = 0; kinds[k] != '\0' && code == SQLITE_OK; k++)
        code = argument_bind(statement, k + 1, kinds[k], arguments);
    if (code == SQLITE_OK)
        while ((code = sqlite3_step(statement)) == SQLITE_ROW)
            if (take != NULL)
                take(data, statement);
    fescue_status status = code == SQLITE_DONE ? FESCUE_OK : ledger_fail(ledger);
    sqlite3_finalize(statement);
    return status;
}

fescue_status ledger_do(struct ledger *ledger, const char *sql, const char *kinds, ...)
{
    va_list arguments;
    va_start(arguments, kinds);
    fescue_status status = statement_run(ledger, NULL, NULL, sql, kinds, &arguments);
    va_end(arguments);
    return status;
}

fescue_status ledger_ask(struct ledger *ledger, ledger_row *take, void *data, const char *sql, const char *kinds, ...)
{
    va_list arguments;
    va_start(arguments, kinds);
    fescue_status status = statement_run(ledger, take, data, sql, kinds, &arguments);
    va_end(arguments);
    return status;
}

/* ---- opening -------------------------------------------------------------------------------------------------------
 */

static void integer_take(void *data, sqlite3_stmt *row)
{
    *(int64_t *)data = sqlite3_column_int64(row, 0);
}

static fescue_status layout_check(struct ledger *ledger)
{
    int64_t layout = 0, objects = 0;
    fescue_status status;
    TRY(ledger_ask(ledger, integer_take, &layout, "PRAGMA user_version", ""));
    TRY(ledger_ask(ledger, integer_take, &objects, "SELECT count(*) FROM sqlite_master", ""));
    if (layout == LEDGER_LAYOUT)
        return FESCUE_OK;
    if (layout != 0 || objects != 0)
        return FAIL(ledger->context, FESCUE_BAD_DATA,
                    "%s: a database, but no ledger of this version (its layout is %" PRId64 ", expected %d)",
                    ledger->path, layout, LEDGER_LAYOUT);
    char *sql = sqlite3_mprintf("BEGIN;%s PRAGMA user_version=%d; COMMIT;", tables, LEDGER_LAYOUT);
    int code = sql == NULL ? SQLITE_NOMEM : sqlite3_exec(ledger->database, sql, NULL, NULL, NULL);
    sqlite3_free(sql);
    if (code != SQLITE_OK)
        status = ledger_fail(ledger);
done:
    return status;
}

fescue_status ledger_open(fescue_context *context, const char *path, struct ledger *ledger)
{
    fescue_status status = FESCUE_OK;
    *ledger = (struct ledger){.context = context, .path = path};
    if (sqlite3_open_v2(path, &ledger->database, SQLITE_OPEN_READWRITE | SQLITE_OPEN_CREATE, NULL) != SQLITE_OK)
        TRY(ledger_fail(ledger));
    sqlite3_busy_timeout(ledger->database, BUSY_MILLISECONDS); /* somebody may be reading it */
    if (sqlite3_exec(ledger->database, "PRAGMA journal_mode=WAL; PRAGMA synchronous=FULL", NULL, NULL, NULL) !=
        SQLITE_OK)
        TRY(ledger_fail(ledger));
    TRY(layout_check(ledger));
done:
    if (status != FESCUE_OK)
        ledger_close(ledger);
    return status;
}

void ledger_close(struct ledger *ledger)
{
    sqlite3_close(ledger->database);
    ledger->database = NULL;
}

/* ---- nights and attempts -------------------------------------------------------------------------------------------
 */

fescue_status ledger_night_begin(struct ledger *ledger, bool again)
{
    char now[WORD_SIZE];
    time_words(now);
    fescue_status status =
        ledger_do(ledger, "INSERT INTO night (began, state, again, version, process) VALUES (?, 'running', ?, ?, ?)",
                  "titi", now, (int64_t)again, FESCUE_VERSION, (int64_t)getpid());
    ledger->night = sqlite3_last_insert_rowid(ledger->database);
    return status;
}

fescue_status ledger_night_end(struct ledger *ledger, const char *state)
{
    char now[WORD_SIZE];
    time_words(now);
    return ledger_do(ledger, "UPDATE night SET ended = ?, state = ? WHERE number = ?", "tti", now, state,
                     ledger->night);
}

fescue_status ledger_attempt_begin(struct ledger *ledger, struct task *task)
{
    char now[WORD_SIZE];
    time_words(now);
    fescue_status status = ledger_do(
        ledger,
        "INSERT INTO attempt (night, job, input, output, state, input_sum, input_bytes, record_before, options,"
        " version, seed, threads, shrunk, went_on, began) VALUES (?,?,?,?,?,?,?,?,?,?,?,?,?,?,?)",
        "itttttitttiitit", ledger->night, task->job->name, task->job->input, task->job->output,
        state_words[task->state], task->input_sum, task->input_bytes, task->record_before, task->as_run, FESCUE_VERSION,
        task->options.seed, (int64_t)task->threads, task->shrunk, (int64_t)task->goes_on, now);
    if (status == FESCUE_OK)
        task->attempt = sqlite3_last_insert_rowid(ledger->database);
    return status;
}

fescue_status ledger_attempt_end(struct ledger *ledger, const struct task *task)
{
    const struct outcome *outcome = &task->outcome;
    const double *figure = outcome->figure;
    char now[WORD_SIZE];
    time_words(now);
    return ledger_do(
        ledger,
        "UPDATE attempt SET ended=?, state=?, seconds=?, processor_seconds=?, memory=?, exit=?, message=?, warning=?,"
        " cut=?, rows=?, columns=?, observed=?, offsets=?, rmse=?, mae=?, missing=?, rank=?, mean=?,"
        " row_offsets_rms=?, column_offsets_rms=?, angle=?, distance=?, flags=?,"
        " input_sum=coalesce(nullif(?, ''), input_sum), input_bytes=coalesce(nullif(?, 0), input_bytes)"
        " WHERE number=?",
        "ttrriittiiiitrrrrrrrrrttii", now, state_words[task->state], task->seconds, task->cpu, task->memory,
        (int64_t)fescue_status_exit_code(task->status), task->message, task->warning, (int64_t)outcome->is_cut,
        outcome->rows, outcome->columns, outcome->observed, outcome->offsets, figure[FIGURE_ERROR], outcome->mae,
        figure[FIGURE_MISSING], figure[FIGURE_RANK], figure[FIGURE_MEAN], figure[FIGURE_ROWS], figure[FIGURE_COLUMNS],
        figure[FIGURE_ANGLE], outcome->distance, task->flags, outcome->input_sum, outcome->input_bytes, task->attempt);
}
