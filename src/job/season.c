/* SPDX-License-Identifier: MIT
 *
 * Seasons in a fill: what --season asks for, and the choice with a season taken off.
 *
 *     --season 24h,7d     these, whatever the hidden cells say
 *     --season auto       a day, a week and a year, as far as they stand out of the mean of all series (season_find);
 *                         then the choice is made twice, and the one with less error on the hidden cells stays
 *
 * A season is fitted to the kept cells and taken off kept and hidden ones; everything behind (offsets, rank, noise,
 * time parts, folds) works on what it leaves, and the final model adds it again. So an error on hidden cells is that of
 * the whole estimate. The fit on all cells takes a season fitted to all cells; the folds that intervals are made of
 * fit it again to the cells that they keep. While choosing, bounds wait: they are those of the whole, not of what a
 * season leaves.
 */
#include "job/job_internal.h"

#include <math.h>
#include <stdio.h>
#include <string.h>

static const struct {
    const char *name;
    double seconds;
} units[] = {{"s", 1}, {"m", 60}, {"min", 60}, {"h", 3600}, {"d", 86400}, {"w", 604800}, {"y", 31556952}};
/* y: 365.2425 days, the year of the Gregorian calendar. */

/* ---- what is asked for ----------------------------------------------------------------------------------------------
 */

/* "24h" as a number of steps; NULL, or what is wrong with it. */
static const char *period_parse(const char *text, size_t length, const struct time_axis *axis, double *steps)
{
    size_t digits = strspn(text, "0123456789.");
    digits = digits < length ? digits : length;
    size_t unit = sizeof units / sizeof units[0];
    if (!number_parse(text, text + digits, steps) || !isfinite(*steps))
        return "is no season; a time such as 24h, 7d or 1y, or a number of steps, was expected";
    if (digits == length)
        return NULL;
    while (unit-- > 0)
        if (strlen(units[unit].name) == length - digits &&
            memcmp(units[unit].name, text + digits, length - digits) == 0)
            break;
    if (unit >= sizeof units / sizeof units[0])
        return "has a unit that is not known; s, m, h, d, w or y was expected";
    if (!isfinite(axis->step_seconds))
        return "is a time, but the steps of this table have no length; a number of steps was expected";
    *steps *= units[unit].seconds / axis->step_seconds;
    return NULL;
}

static double span_of(const struct time_axis *axis)
{
    return axis->count > 0 ? axis->at[axis->order[axis->count - 1]] : 0;
}

static const char *period_check(double steps, const struct time_axis *axis)
{
    if (steps < 2)
        return "is shorter than two steps of the clock";
    return steps > span_of(axis) ? "is longer than the whole table" : NULL;
}

static fescue_status periods_parse(fescue_fill *fill, const char *text)
{
    struct season_plan *plan = &fill->season_plan;
    for (;;) {
        size_t length = strcspn(text, ",");
        double *period = &plan->period[plan->count];
        if (plan->count == SEASON_PERIODS_MOST)
            return FAIL(fill->context, FESCUE_USAGE, "--season: at most %d are taken", (int)SEASON_PERIODS_MOST);
        const char *fault = period_parse(text, length, &fill->time, period);
        if (fault == NULL)
            fault = period_check(*period, &fill->time);
        if (fault != NULL)
            return FAIL(fill->context, FESCUE_USAGE, "--season: '%.*s' %s", (int)(length < 40 ? length : 40), text,
                        fault);
        plan->count++;
        if (text[length] == '\0')
            return FESCUE_OK;
        text += length + 1;
    }
}

/* A day, a week, a year, as far as they stand out. */
static fescue_status periods_look(fescue_fill *fill)
{
    struct season_plan *plan = &fill->season_plan;
    static const double candidates[] = {86400, 604800, 31556952};
    size_t count = sizeof candidates / sizeof candidates[0];
    if (!isfinite(fill->time.step_seconds))
        return FESCUE_OK;
    for (size_t k = 0; k < count; k++)
        plan->period[k] = candidates[k] / fill->time.step_seconds;
    return season_find(fill->context, &fill->table->cells, &fill->time, plan->period, count, &plan->count);
}

fescue_status season_plan_make(fescue_fill *fill, const char *text)
{
    struct season_plan *plan = &fill->season_plan;
    *plan = (struct season_plan){.is_auto = strcmp(text, "auto") == 0};
    if (strcmp(text, "none") == 0)
        return FESCUE_OK;
    if (plan->is_auto)
        return fill->time.along == TIME_NONE ? FESCUE_OK : periods_look(fill);
    if (fill->time.along == TIME_NONE)
        return FAIL(fill->context, FESCUE_USAGE,
                    "--season needs to know which side is in time: labels that are ISO 8601 times, or --time-axis");
    return periods_parse(fill, text);
}

/* ---- the choice -----------------------------------------------------------------------------------------------------
 */

static fescue_status season_make(fescue_fill *fill, const struct cells *cells, struct season *season)
{
    const struct season_plan *plan = &fill->season_plan;
    uint32_t series = fill->time.along == TIME_ROWS ? cells->columns : cells->rows;
    fescue_status status;
    TRY(season_create(fill->context, &fill->time, series, plan->period, plan->count, season));
    TRY(season_fit(fill->context, cells, season));
done:
    return status;
}

/* From here on the season is off: the fit on all cells sees what it leaves. */
static fescue_status season_settle(fescue_fill *fill)
{
    fescue_status status;
    TRY(season_make(fill, &fill->table->cells, &fill->season));
    TRY(season_remove(fill->context, &fill->table->cells, &fill->season, &fill->rest));
    fill->cells = &fill->rest;
    fill->fitting.bounds = (struct fescue_range){-INFINITY, INFINITY};
done:
    return status;
}

fescue_status season_choose(fescue_fill *fill, const struct holdout *holdout, const struct choose_request *plain)
{
    fescue_context *context = fill->context;
    const struct season_plan *plan = &fill->season_plan;
    struct fescue_options unbound = fill->options;
    struct choose_request request = *plain;
    struct season season = {0};
    struct holdout rest = {0};
    struct choice choice = {0};
    fescue_status status = FESCUE_OK;
    if (plan->count == 0)
        return FESCUE_OK;
    unbound.bounds = (struct fescue_range){-INFINITY, INFINITY};
    request.options = &unbound;
    TRY(season_make(fill, &holdout->kept, &season));
    TRY(season_remove(context, &holdout->kept, &season, &rest.kept));
    TRY(season_remove(context, &holdout->hidden, &season, &rest.hidden));
    TRY(choose_run(context, &rest, &request, &choice));
    if (choice.interpolation_errors.count > 0 && !choice.own_holdout)
        TRY(interpolation_measure(context, &holdout->kept, &holdout->hidden, &fill->time,
                                  &choice.interpolation_errors));
    fill->season_plan.rmse_without = plan->is_auto ? fill->choice.errors.rmse : NAN;
    if (!plan->is_auto || choice.errors.rmse < fill->choice.errors.rmse) {
        choice_free(context, &fill->choice);
        fill->choice = choice;
        choice = (struct choice){0};
        TRY(season_settle(fill));
    }
done:
    choice_free(context, &choice);
    season_free(context, &season);
    cells_free(context, &rest.kept);
    cells_free(context, &rest.hidden);
    return status;
}

void season_restore(fescue_fill *fill)
{
    struct model *model = &fill->fit.model;
    if (fill->season.along == TIME_NONE)
        return;
    model->season = fill->season;
    model->bounds = fill->options.bounds;
    fill->season = (struct season){0};
}
