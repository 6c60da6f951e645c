/* SPDX-License-Identifier: MIT
 *
 * A stand for the writers: a small table read from text, and a model made by hand, so that every number that is written
 * is known beforehand. With i, j from 0 and the effects that the kind of offsets has,
 *
 *     estimate = 10 + (i + 1) + (j + 1)/2 + 2 (i + 1)(j + 1) [rank 1 only]
 *
 * all of it exact in binary.
 */
#ifndef FESCUE_TESTS_STAND_H
#define FESCUE_TESTS_STAND_H

#include "support.h"
#include "write/write.h"

#include <math.h>

struct stand {
    fescue_context *context;
    const char *folder; /* of the bench; results go to folder/out */
    fescue_table *table;
    struct fescue_options options;
    struct time_axis time; /* none */
    struct nearness near;
    struct model model;
    struct choice choice;
    struct judgement judgement;
    struct hole_shape shape;
    struct solve_result fit;
    struct determined determined;
    struct run run;
};

static void stand_offsets(struct stand *stand, enum fescue_offsets kind)
{
    struct offsets *offsets = &stand->model.offsets;
    bool of_rows = kind == FESCUE_OFFSETS_BOTH || kind == FESCUE_OFFSETS_ROWS;
    bool of_columns = kind == FESCUE_OFFSETS_BOTH || kind == FESCUE_OFFSETS_COLUMNS;
    offsets->kind = kind;
    offsets->mean = 10;
    assert_status(stand->context, TAKE(stand->context, stand->model.rows, &offsets->row), FESCUE_OK);
    assert_status(stand->context, TAKE(stand->context, stand->model.columns, &offsets->column), FESCUE_OK);
    for (uint32_t i = 0; i < stand->model.rows; i++)
        offsets->row[i] = of_rows ? i + 1 : 0;
    for (uint32_t j = 0; j < stand->model.columns; j++)
        offsets->column[j] = of_columns ? (j + 1) * 0.5 : 0;
}

static void stand_low_rank(struct stand *stand, size_t rank)
{
    struct low_rank *point = &stand->model.low_rank;
    assert_status(stand->context, low_rank_create(stand->context, stand->model.rows, stand->model.columns, rank, point),
                  FESCUE_OK);
    for (size_t k = 0; k < rank; k++) {
        point->spectrum[k] = k == 0 ? 2 : 0;
        for (size_t i = 0; i < point->rows; i++)
            MATRIX_AT(point->left, i, k) = (double)(i + 1);
        for (size_t j = 0; j < point->columns; j++)
            MATRIX_AT(point->right, j, k) = (double)(j + 1);
    }
}

/* What the writers are told, once table and options are there. */
static void stand_run(struct stand *stand, enum fescue_offsets kind, size_t rank)
{
    const struct cells *cells = &stand->table->cells;
    stand->model.rows = cells->rows;
    stand->model.columns = cells->columns;
    stand->model.bounds = stand->options.bounds;
    stand_offsets(stand, kind);
    stand_low_rank(stand, rank);
    /* Tables as small as these determine no component beside effects: let those be known. */
    assert_status(stand->context,
                  determined_create(stand->context, cells, rank, FESCUE_OFFSETS_MEAN, &stand->determined), FESCUE_OK);
    stand->determined.offsets = kind;
    stand->choice = (struct choice){.offsets = kind, .rank = (uint32_t)rank, .ridge = 0.5, .halfwidth = 1.25};
    stand->judgement = (struct judgement){.halfwidth = 1.25, .level = 0.9};
    stand->shape = (struct hole_shape){.shape = FESCUE_HOLDOUT_CELLS, .why = "holes lie here and there"};
    stand->fit = (struct solve_result){.solver = "grassmann-cg", .stop = STOP_GRADIENT};
    stand->run = (struct run){.context = stand->context,
                              .table = stand->table,
                              .options = &stand->options,
                              .time = &stand->time,
                              .near = &stand->near,
                              .model = &stand->model,
                              .choice = &stand->choice,
                              .fit = &stand->fit,
                              .start = "grown",
                              .scale = 2,
                              .determined = &stand->determined,
                              .judgement = &stand->judgement,
                              .shape = &stand->shape,
                              .writes_filled = true,
                              .writes_cells = true,
                              .writes_factors = true};
    run_count(&stand->run);
}

static void stand_begin(void **state, struct stand *stand)
{
    *stand = (struct stand){.context = bench_of(state)->context, .folder = bench_of(state)->folder};
    fescue_options_standard(&stand->options);
}

static void stand_read(struct stand *stand, const char *text)
{
    char path[PATH_SIZE];
    const struct table_reading reading = {.format = (enum fescue_format)stand->options.format};
    file_put_text(path_in(stand->folder, "table", path), text);
    assert_status(stand->context, table_read(stand->context, path, &reading, &stand->table), FESCUE_OK);
}

static void stand_end(struct stand *stand)
{
    solve_result_free(stand->context, &stand->fit);
    determined_free(stand->context, &stand->determined);
    model_free(stand->context, &stand->model);
    table_destroy(&stand->table);
}

typedef fescue_status writer(const struct run *run, struct output *output);

static fescue_status stand_try(const struct stand *stand, writer *write)
{
    char directory[PATH_SIZE];
    struct output *output = NULL;
    fescue_status status;
    TRY(output_open(stand->context, path_in(stand->folder, "out", directory), "run.json", &output));
    TRY(write(&stand->run, output));
    TRY(output_publish(&output));
done:
    output_abandon(&output);
    return status;
}

static void stand_write(const struct stand *stand, writer *write)
{
    assert_status(stand->context, stand_try(stand, write), FESCUE_OK);
}

static const char *stand_path(const struct stand *stand, const char *name, char path[PATH_SIZE])
{
    char directory[PATH_SIZE];
    return path_in(path_in(stand->folder, "out", directory), name, path);
}

#endif
