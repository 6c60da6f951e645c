/* SPDX-License-Identifier: MIT
 *
 * A plain table: random factors of a wanted spectrum, two-way effects, noise.
 *
 *     t_ij = a_i + b_j + sum_k u_ik s_k v_jk + w_ij   the truth
 *     x_ij = t_ij + sigma e_ij                        what is observed, where it is
 *
 *   m, n    rows, columns
 *   r       rank
 *   U, V    m x r and n x r, orthonormal columns: Gaussian numbers orthonormalised, so that the spans are uniform
 *   s       singular values, in the wanted ratios, scaled so that sum s_k^2 = m n: then the root mean square of the
 *           low-rank part is 1, which is the unit ("signal size") of the effects and of the noise
 *   a, b    Gaussian with standard deviation A
 *   w       a movement of each column's own along the rows, of standard deviation W: a sum of WAVES cosines with
 *           random phases whose frequencies are Cauchy with scale 1/T, T a fortieth of the rows. Its correlation is
 *           exp(-|i - i'|/T) in the mean, that of an AR(1) process, and any cell is found without the others
 *           (Shinozuka, Deodatis 1991, "Simulation of stochastic processes by spectral representation")
 *   e       standard deviation 1: Gaussian, or Student's t with 4 degrees of freedom over the root of 2
 *
 * Orthonormalising is Gram-Schmidt done twice, which is enough for orthogonality to rounding (Giraud, Langou,
 * Rozloznik 2005, "The loss of orthogonality in the Gram-Schmidt orthogonalization process"); written out here so that
 * a table does not depend on the machine's linear algebra. Cost 4 m r^2, once. The pattern of seen cells is walked
 * twice, first to count, since the header of a Matrix Market file says how many there are; memory is that of the
 * factors.
 *
 * The error floor told in the summary: least squares with the right spans known up to first order has r (m + n - r)
 * free numbers, so that the mean square error is about sigma^2 r (m + n - r) / |seen|.
 */
#include "job/sow_internal.h"
#include "write/write.h"

#include <math.h>
#include <stdio.h>
#include <string.h>

enum { SHAPE_OPTION_MATRIX_MARKET, SHAPE_OPTION_WIDE, SHAPE_OPTION_LONG }; /* the words of --shape */
enum { TRUTH_AUTO, TRUTH_CELLS, TRUTH_FACTORS };                           /* the words of --truth */

/* Cells up to which the whole truth is written unless asked otherwise: about 100 MB of text. */
static const uint64_t truth_most = 5000000;

struct plain {
    struct sowing *sowing;
    uint64_t rows, columns;
    size_t rank;
    struct matrix left, right, spectrum;     /* m x r, n x r, r x 1 */
    struct matrix row_effect, column_effect; /* m x 1, n x 1 */
    struct arena arena;
    double *share; /* seen, by column */
};

/* ---- factors ---------------------------------------------------------------------------------------------------- */

/* Takes from column k of q its part along columns 0 .. k-1; `along` is workspace for k numbers. */
static void column_project(struct matrix q, size_t k, double *along)
{
    memset(along, 0, k * sizeof *along);
    for (size_t i = 0; i < q.rows; i++) {
        const double *row = q.data + i * q.stride;
        for (size_t l = 0; l < k; l++)
            along[l] += row[l] * row[k];
    }
    for (size_t i = 0; i < q.rows; i++) {
        double *row = q.data + i * q.stride, part = 0;
        for (size_t l = 0; l < k; l++)
            part += along[l] * row[l];
        row[k] -= part;
    }
}

static void column_normalise(struct matrix q, size_t k)
{
    double square = 0;
    for (size_t i = 0; i < q.rows; i++)
        square += MATRIX_AT(q, i, k) * MATRIX_AT(q, i, k);
    for (size_t i = 0; i < q.rows; i++)
        MATRIX_AT(q, i, k) /= sqrt(square);
}

static fescue_status factor_draw(struct plain *plain, enum sow_stream which, struct matrix q)
{
    fescue_context *context = plain->sowing->context;
    fescue_status status = FESCUE_OK;
    double *along = NULL;
    struct random_stream stream = sow_stream(plain->sowing, which, 0);
    TRY(TAKE(context, plain->rank, &along));
    for (size_t i = 0; i < q.rows; i++)
        for (size_t k = 0; k < q.columns; k++)
            MATRIX_AT(q, i, k) = random_normal(&stream);
    for (size_t k = 0; k < q.columns; k++) {
        TRY(progress_tell(context, "drawing factors", (double)k / (double)q.columns));
        column_project(q, k, along);
        column_normalise(q, k);
        column_project(q, k, along);
        column_normalise(q, k);
    }
done:
    GIVE(context, &along);
    return status;
}

/* A list such as 5,2,1: as many positive numbers as the rank. */
static bool list_parse(const char *text, struct matrix spectrum)
{
    size_t k = 0;
    for (;; text++) {
        const char *end = text + strcspn(text, ",");
        if (k == spectrum.rows || !number_parse(text, end, &MATRIX_AT(spectrum, k, 0)))
            return false;
        if (!(MATRIX_AT(spectrum, k, 0) > 0) || !(MATRIX_AT(spectrum, k, 0) <= 1e100))
            return false;
        k++;
        if (*end == '\0')
            return k == spectrum.rows;
        text = end;
    }
}

/* geometric:K, K the largest over the smallest. */
static bool geometric_parse(const char *text, struct matrix spectrum)
{
    static const char name[] = "geometric:";
    double condition;
    if (strncmp(text, name, sizeof name - 1) != 0)
        return false;
    text += sizeof name - 1;
    if (!number_parse(text, text + strlen(text), &condition) || !(condition >= 1) || !(condition <= 1e100))
        return false;
    double last = spectrum.rows > 1 ? (double)spectrum.rows - 1 : 1;
    for (size_t k = 0; k < spectrum.rows; k++)
        MATRIX_AT(spectrum, k, 0) = pow(condition, -(double)k / last);
    return true;
}

static fescue_status spectrum_set(struct plain *plain)
{
    const char *text = plain->sowing->options->spectrum;
    struct matrix spectrum = plain->spectrum;
    double square = 0;
    if (strcmp(text, "flat") == 0) {
        for (size_t k = 0; k < spectrum.rows; k++)
            MATRIX_AT(spectrum, k, 0) = 1;
    } else if (strlen(text) >= SOW_TEXT_SIZE || (!geometric_parse(text, spectrum) && !list_parse(text, spectrum))) {
        return FAIL(plain->sowing->context, FESCUE_USAGE,
                    "--spectrum: found \"%.100s\", expected flat, geometric:K with K at least 1, or as many positive "
                    "numbers as the rank (%zu) with commas between",
                    text, plain->rank);
    }
    for (size_t k = 0; k < spectrum.rows; k++)
        square += MATRIX_AT(spectrum, k, 0) * MATRIX_AT(spectrum, k, 0);
    double scale = sqrt((double)plain->rows * (double)plain->columns / square);
    for (size_t k = 0; k < spectrum.rows; k++)
        MATRIX_AT(spectrum, k, 0) *= scale;
    return FESCUE_OK;
}

static void effects_draw(struct plain *plain, enum sow_stream which, struct matrix effect)
{
    struct random_stream stream = sow_stream(plain->sowing, which, 0);
    double size = plain->sowing->options->offset_scale;
    for (size_t i = 0; i < effect.rows; i++)
        MATRIX_AT(effect, i, 0) = size > 0 ? size * random_normal(&stream) : 0;
}

static fescue_status plain_open(struct sowing *sowing, struct plain *plain)
{
    const struct fescue_sow_options *options = sowing->options;
    fescue_status status = FESCUE_OK;
    uint64_t m = (uint64_t)options->rows, n = (uint64_t)options->columns;
    size_t rank = (size_t)options->rank;
    *plain = (struct plain){.sowing = sowing, .rows = m, .columns = n, .rank = rank};
    if (rank > m || rank > n)
        return FAIL(sowing->context, FESCUE_USAGE,
                    "--rank: found \"%zu\", but the rank of a table of %llu x %llu is at most its shorter side", rank,
                    (unsigned long long)m, (unsigned long long)n);
    matrix_reserve(&plain->arena, m, rank);
    matrix_reserve(&plain->arena, n, rank);
    matrix_reserve(&plain->arena, rank, 1);
    matrix_reserve(&plain->arena, m, 1);
    matrix_reserve(&plain->arena, n, 1);
    arena_reserve(&plain->arena, n, sizeof(double));
    TRY(arena_open(sowing->context, &plain->arena));
    plain->left = matrix_carve(&plain->arena, m, rank);
    plain->right = matrix_carve(&plain->arena, n, rank);
    plain->spectrum = matrix_carve(&plain->arena, rank, 1);
    plain->row_effect = matrix_carve(&plain->arena, m, 1);
    plain->column_effect = matrix_carve(&plain->arena, n, 1);
    plain->share = arena_carve(&plain->arena, n, sizeof(double));
    TRY(spectrum_set(plain));
    TRY(factor_draw(plain, SOW_LEFT, plain->left));
    TRY(factor_draw(plain, SOW_RIGHT, plain->right));
    effects_draw(plain, SOW_ROW_OFFSETS, plain->row_effect);
    effects_draw(plain, SOW_COLUMN_OFFSETS, plain->column_effect);
    holes_shares(options, plain->share);
done:
    return status;
}

static double wander_at(const struct plain *plain, uint64_t i, uint64_t j)
{
    enum { WAVES = 32 };
    static const double pi = 3.14159265358979323846;
    struct random_stream stream = sow_stream(plain->sowing, SOW_WANDER, j << 32);
    double steps = fmax(2, (double)plain->rows / 40), sum = 0;
    for (int k = 0; k < WAVES; k++) {
        double frequency = tan(pi * (random_uniform(&stream) - 0.5)) / steps;
        sum += cos(frequency * (double)i + 2 * pi * random_uniform(&stream));
    }
    return plain->sowing->options->wander * sqrt(2. / WAVES) * sum;
}

static double truth_at(const struct plain *plain, uint64_t i, uint64_t j)
{
    const double *u = plain->left.data + i * plain->left.stride, *v = plain->right.data + j * plain->right.stride;
    double sum = MATRIX_AT(plain->row_effect, i, 0) + MATRIX_AT(plain->column_effect, j, 0);
    for (size_t k = 0; k < plain->rank; k++)
        sum += u[k] * MATRIX_AT(plain->spectrum, k, 0) * v[k];
    return plain->sowing->options->wander > 0 ? sum + wander_at(plain, i, j) : sum;
}

/* Noise of standard deviation 1. t is a normal number over the root of a quarter of a chi-square number with 4 degrees
   of freedom, which is -2 log(u u') of two uniform ones, and has variance 2. */
static double noise_at(const struct plain *plain, uint64_t i, uint64_t j)
{
    enum { HEAVY = 1 }; /* the words of --noise-shape */
    struct random_stream stream = sow_stream(plain->sowing, SOW_NOISE, (j << 32) + i);
    double normal = random_normal(&stream);
    if (plain->sowing->options->noise_shape != HEAVY)
        return normal;
    struct random_stream heavy = sow_stream(plain->sowing, SOW_HEAVY, (j << 32) + 2 * i);
    double chi = -2 * log((1 - random_uniform(&heavy)) * (1 - random_uniform(&heavy)));
    return normal / sqrt(chi / 2);
}

static double observed_at(const struct plain *plain, uint64_t i, uint64_t j)
{
    double added = faults_source(plain->sowing, &i, &j);
    double sigma = plain->sowing->options->noise;
    return truth_at(plain, i, j) + added + (sigma > 0 ? sigma * noise_at(plain, i, j) : 0);
}

/* ---- tables ----------------------------------------------------------------------------------------------------- */

static fescue_status progress_of_column(const struct plain *plain, const char *stage, uint64_t j)
{
    enum { EACH = 16 }; /* columns: often enough to stop soon, seldom enough to cost nothing */
    if (j % EACH != 0)
        return FESCUE_OK;
    return progress_tell(plain->sowing->context, stage, (double)j / (double)plain->columns);
}

static fescue_status cells_count(struct plain *plain, uint64_t *count)
{
    fescue_status status = FESCUE_OK;
    struct holes holes;
    *count = 0;
    for (uint64_t j = 0; j < plain->columns; j++) {
        TRY(progress_of_column(plain, "counting cells", j));
        for (faults_open(plain->sowing, j, plain->share, &holes); holes.next < plain->rows;
             faults_step(plain->sowing, j, &holes))
            ++*count;
    }
done:
    return status;
}

/* One line a seen cell, by columns: the coordinate form, or with labels r1.., c1.. and commas. */
static fescue_status lines_write(struct plain *plain, const char *before_row, const char *before_column,
                                 const char *before_value, struct sink *sink)
{
    fescue_status status = FESCUE_OK;
    struct holes holes;
    for (uint64_t j = 0; j < plain->columns; j++) {
        TRY(progress_of_column(plain, "writing the table", j));
        for (faults_open(plain->sowing, j, plain->share, &holes); holes.next < plain->rows;
             faults_step(plain->sowing, j, &holes)) {
            sink_text(sink, before_row);
            sink_count(sink, holes.next + 1);
            sink_text(sink, before_column);
            sink_count(sink, j + 1);
            sink_text(sink, before_value);
            sink_real(sink, observed_at(plain, holes.next, j));
            sink_text(sink, "\n");
        }
        TRY(sink->status);
    }
done:
    return status;
}

static fescue_status coordinate_write(struct plain *plain, struct sink *sink)
{
    sink_text(sink, "%%MatrixMarket matrix coordinate real general\n% sown with known truth\n");
    sink_count(sink, plain->rows);
    sink_text(sink, " ");
    sink_count(sink, plain->columns);
    sink_text(sink, " ");
    sink_count(sink, plain->sowing->observed);
    sink_text(sink, "\n");
    return lines_write(plain, "", " ", " ", sink);
}

static fescue_status long_write(struct plain *plain, struct sink *sink)
{
    sink_text(sink, "row,column,value\n");
    return lines_write(plain, "r", ",c", ",", sink);
}

/* Row by row, with one walk a column side by side. */
static fescue_status wide_write(struct plain *plain, struct sink *sink)
{
    fescue_context *context = plain->sowing->context;
    fescue_status status = FESCUE_OK;
    struct holes *holes = NULL;
    TRY(TAKE(context, plain->columns, &holes));
    sink_text(sink, "row");
    for (uint64_t j = 0; j < plain->columns; j++) {
        faults_open(plain->sowing, j, plain->share, &holes[j]);
        sink_text(sink, ",c");
        sink_count(sink, j + 1);
    }
    for (uint64_t i = 0; i < plain->rows; i++) {
        TRY(progress_tell(context, "writing the table", (double)i / (double)plain->rows));
        sink_text(sink, "\nr");
        sink_count(sink, i + 1);
        for (uint64_t j = 0; j < plain->columns; j++) {
            sink_text(sink, ",");
            if (holes[j].next != i)
                continue;
            sink_real(sink, observed_at(plain, i, j));
            faults_step(plain->sowing, j, &holes[j]);
        }
        TRY(sink->status);
    }
    sink_text(sink, "\n");
done:
    GIVE(context, &holes);
    return status;
}

static fescue_status table_sow(struct plain *plain)
{
    static const struct {
        const char *name;
        fescue_status (*write)(struct plain *plain, struct sink *sink);
    } shapes[] = {
        [SHAPE_OPTION_MATRIX_MARKET] = {"table.mtx", coordinate_write},
        [SHAPE_OPTION_WIDE] = {"table.csv", wide_write},
        [SHAPE_OPTION_LONG] = {"table.csv", long_write},
    };
    struct sowing *sowing = plain->sowing;
    const int shape = sowing->options->shape;
    struct sink sink;
    sowing->table = shapes[shape].name;
    fescue_status status = sink_open(sowing, sowing->table, &sink);
    if (status == FESCUE_OK)
        status = shapes[shape].write(plain, &sink);
    fescue_status closed = sink_close(&sink);
    return status != FESCUE_OK ? status : closed;
}

/* ---- truth ------------------------------------------------------------------------------------------------------ */

/* Every cell, column by column. */
static fescue_status every_cell_write(struct plain *plain, const char *name, const char *comment,
                                      double cell_at(const struct plain *plain, uint64_t i, uint64_t j))
{
    struct sink sink;
    fescue_status status;
    TRY(sink_open(plain->sowing, name, &sink));
    sink_text(&sink, "%%MatrixMarket matrix array real general\n% ");
    sink_text(&sink, comment);
    sink_text(&sink, ", column by column\n");
    sink_count(&sink, plain->rows);
    sink_text(&sink, " ");
    sink_count(&sink, plain->columns);
    sink_text(&sink, "\n");
    for (uint64_t j = 0; j < plain->columns; j++) {
        TRY(progress_of_column(plain, "writing the truth", j));
        for (uint64_t i = 0; i < plain->rows; i++) {
            sink_real(&sink, cell_at(plain, i, j));
            sink_text(&sink, "\n");
        }
        TRY(sink.status);
    }
done:;
    fescue_status closed = sink_close(&sink);
    return status != FESCUE_OK ? status : closed;
}

static fescue_status truth_factors_write(struct plain *plain)
{
    static const char formula[] = "cell without noise = row offset + column offset + left * diag(spectrum) * right'";
    struct output *output = plain->sowing->output;
    fescue_status status;
    TRY(write_array(output, "truth-left.mtx", plain->left, formula));
    TRY(write_array(output, "truth-spectrum.mtx", plain->spectrum, formula));
    TRY(write_array(output, "truth-right.mtx", plain->right, formula));
    TRY(write_array(output, "truth-row-offsets.mtx", plain->row_effect, formula));
    TRY(write_array(output, "truth-column-offsets.mtx", plain->column_effect, formula));
done:
    return status;
}

static fescue_status truth_sow(struct plain *plain)
{
    struct sowing *sowing = plain->sowing;
    bool is_small = plain->rows * plain->columns <= truth_most;
    bool as_cells = sowing->options->truth == TRUTH_CELLS || (sowing->options->truth == TRUTH_AUTO && is_small);
    sowing->truth = as_cells ? "truth.mtx" : "truth-*.mtx";
    if (as_cells)
        return every_cell_write(plain, "truth.mtx", "every cell without noise", truth_at);
    if (sowing->options->wander > 0)
        return FAIL(sowing->context, FESCUE_USAGE, "--wander: no factors hold such a truth; give --truth cells");
    return truth_factors_write(plain);
}

fescue_status sow_plain(struct sowing *sowing)
{
    struct plain plain = {0};
    fescue_status status;
    TRY(plain_open(sowing, &plain));
    sowing->rows = plain.rows;
    sowing->columns = plain.columns;
    bool has_labels = sowing->options->shape != SHAPE_OPTION_MATRIX_MARKET;
    sowing->row_prefix = has_labels ? "r" : "";
    sowing->column_prefix = has_labels ? "c" : "";
    TRY(faults_plan(sowing, plain.share));
    TRY(cells_count(&plain, &sowing->observed));
    TRY(table_sow(&plain));
    TRY(truth_sow(&plain));
    if (sowing->options->readings)
        TRY(every_cell_write(&plain, "readings.mtx", "every cell as it would be observed", observed_at));
    double m = (double)plain.rows, n = (double)plain.columns, r = (double)plain.rank;
    sowing->noise = sowing->options->noise;
    double share = r * (m + n - r) / (double)sowing->observed; /* of the cells that the free numbers eat up */
    if (share < 1)
        sowing->floor = sowing->noise * sqrt(share);
done:
    arena_close(sowing->context, &plain.arena);
    return status;
}
