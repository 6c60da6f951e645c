/* SPDX-License-Identifier: MIT
 *
 * Questions to the ledger, and the ledger as text.
 */
#include "night/night_internal.h"

#include <inttypes.h>
#include <math.h>
#include <stdio.h>
#include <string.h>

/* Paces of so many of the last attempts: enough for a median, few enough to follow a change of machine. */
#define PACES "50"

static void text_take(sqlite3_stmt *row, int column, char *text, size_t size)
{
    const char *value = (const char *)sqlite3_column_text(row, column);
    snprintf(text, size, "%s", value == NULL ? "" : value);
}

static double real_take(sqlite3_stmt *row, int column)
{
    return sqlite3_column_type(row, column) == SQLITE_NULL ? NAN : sqlite3_column_double(row, column);
}

/* ---- attempts ------------------------------------------------------------------------------------------------------
 */

#define ATTEMPT_COLUMNS                                                                                                \
    "number, night, state, job, output, input_sum, record_before, options, version, input_bytes, memory, seconds,"     \
    " processor_seconds, cut"

static void attempt_take(sqlite3_stmt *row, struct attempt *attempt)
{
    *attempt = (struct attempt){.number = sqlite3_column_int64(row, 0), .night = sqlite3_column_int64(row, 1)};
    text_take(row, 3, attempt->job, sizeof attempt->job);
    text_take(row, 4, attempt->output, sizeof attempt->output);
    text_take(row, 5, attempt->input_sum, sizeof attempt->input_sum);
    text_take(row, 6, attempt->record_before, sizeof attempt->record_before);
    text_take(row, 7, attempt->options, sizeof attempt->options);
    text_take(row, 8, attempt->version, sizeof attempt->version);
    attempt->input_bytes = sqlite3_column_int64(row, 9);
    attempt->memory = sqlite3_column_int64(row, 10);
    attempt->wall = real_take(row, 11);
    attempt->cpu = real_take(row, 12);
    attempt->is_cut = sqlite3_column_int64(row, 13) != 0;
}

static void one_take(void *data, sqlite3_stmt *row)
{
    attempt_take(row, data);
}

fescue_status ledger_last_done(struct ledger *ledger, const char *job, struct attempt *attempt)
{
    *attempt = (struct attempt){0};
    return ledger_ask(ledger, one_take, attempt,
                      "SELECT " ATTEMPT_COLUMNS " FROM attempt WHERE job = ? AND state = 'done'"
                      " ORDER BY number DESC LIMIT 1",
                      "t", job);
}

struct listing {
    struct ledger *ledger;
    struct attempt *attempts;
    size_t count;
    fescue_status status;
};

static void listing_take(void *data, sqlite3_stmt *row)
{
    struct listing *listing = data;
    if (listing->status == FESCUE_OK)
        listing->status = RESIZE(listing->ledger->context, listing->count + 1, &listing->attempts);
    if (listing->status == FESCUE_OK)
        attempt_take(row, &listing->attempts[listing->count++]);
}

fescue_status ledger_left_running(struct ledger *ledger, struct attempt **attempts, size_t *count)
{
    struct listing listing = {.ledger = ledger};
    fescue_status status =
        ledger_ask(ledger, listing_take, &listing,
                   "SELECT " ATTEMPT_COLUMNS " FROM attempt WHERE state = 'running' ORDER BY number", "");
    *attempts = listing.attempts;
    *count = listing.count;
    return status != FESCUE_OK ? status : listing.status;
}

static void pace_take(void *data, sqlite3_stmt *row)
{
    *(double *)data = real_take(row, 0);
}

double ledger_pace(struct ledger *ledger)
{
    double pace = NAN;
    fescue_status status =
        ledger_ask(ledger, pace_take, &pace,
                   "WITH paces AS (SELECT processor_seconds / input_bytes AS pace FROM attempt WHERE state = 'done' AND"
                   " input_bytes > 0 AND processor_seconds > 0 ORDER BY number DESC LIMIT " PACES ")"
                   " SELECT pace FROM paces ORDER BY pace LIMIT 1 OFFSET (SELECT count(*) / 2 FROM paces)",
                   "");
    if (status != FESCUE_OK)
        fescue_failure_clear(ledger->context); /* a guess less */
    return isfinite(pace) ? pace : 0;
}

/* ---- history -------------------------------------------------------------------------------------------------------
 */

struct history {
    struct ledger *ledger;
    struct text *text;
    fescue_status status;
};

static const char *figure_text(sqlite3_stmt *row, int column, char text[32])
{
    double value = real_take(row, column);
    return isfinite(value) ? real_to_words(value, 4, text) : "-";
}

static void history_attempt(void *data, sqlite3_stmt *row)
{
    struct history *history = data;
    char job[64], state[WORD_SIZE], message[SENTENCE_SIZE], warning[SENTENCE_SIZE], flags[SENTENCE_SIZE];
    char input[16], seconds[WORD_SIZE] = "-", memory[WORD_SIZE] = "-", error[32], rank[32], missing[32], angle[32];
    text_take(row, 0, job, sizeof job);
    text_take(row, 1, state, sizeof state);
    text_take(row, 2, input, sizeof input);
    text_take(row, 9, message, sizeof message);
    text_take(row, 10, warning, sizeof warning);
    text_take(row, 11, flags, sizeof flags);
    if (isfinite(real_take(row, 3)))
        seconds_words(real_take(row, 3), seconds);
    if (sqlite3_column_int64(row, 4) > 0)
        bytes_words((double)sqlite3_column_int64(row, 4), memory);
    text_add(history->text, "  %-24s %-9s  input %-8s  rmse %-8s rank %-3s missing %-8s angle %-8s %-9s %s\n", job,
             state, input[0] == '\0' ? "-" : input, figure_text(row, 5, error), figure_text(row, 6, rank),
             figure_text(row, 7, missing), figure_text(row, 8, angle), seconds, memory);
    const char *const more[] = {message, warning, flags};
    for (size_t k = 0; k < sizeof more / sizeof *more; k++)
        if (more[k][0] != '\0')
            text_add(history->text, "      %s\n", more[k]);
}

static void history_night(void *data, sqlite3_stmt *row)
{
    struct history *history = data;
    char began[WORD_SIZE], ended[WORD_SIZE], state[WORD_SIZE], version[WORD_SIZE];
    text_take(row, 1, began, sizeof began);
    text_take(row, 2, ended, sizeof ended);
    text_take(row, 3, state, sizeof state);
    text_take(row, 4, version, sizeof version);
    text_add(history->text, "night %" PRId64 "  %s to %s  %s  (fescue %s)\n", (int64_t)sqlite3_column_int64(row, 0),
             began, ended[0] == '\0' ? "?" : ended, state, version);
    if (history->status == FESCUE_OK)
        history->status = ledger_ask(history->ledger, history_attempt, history,
                                     "SELECT job, state, input_sum, processor_seconds, memory, rmse, rank, missing,"
                                     " angle, message, warning, flags FROM attempt WHERE night = ? ORDER BY number",
                                     "i", (int64_t)sqlite3_column_int64(row, 0));
}

fescue_status ledger_history(struct ledger *ledger, struct text *text)
{
    struct history history = {.ledger = ledger, .text = text};
    fescue_status status = ledger_ask(ledger, history_night, &history,
                                      "SELECT number, began, ended, state, version FROM night ORDER BY number", "");
    if (text->length == 0)
        text_add(text, "no night yet\n");
    return status != FESCUE_OK ? status : history.status;
}
