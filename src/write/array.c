/* SPDX-License-Identifier: MIT
 *
 * A dense matrix as a Matrix Market array file: column after column, one number a line (Boisvert, Pozo, Remington 1996,
 * "The Matrix Market exchange formats", NISTIR 5935).
 */
#include "write/write_internal.h"

enum { PIECE = 4096 }; /* numbers */

static void piece_put(void *job, size_t piece, struct outfile *sink)
{
    const struct matrix *matrix = job;
    size_t first = piece * PIECE, count = matrix->rows * matrix->columns;
    size_t end = first + PIECE < count ? first + PIECE : count;
    for (size_t k = first; k < end; k++) {
        outfile_real(sink, MATRIX_AT(*matrix, k % matrix->rows, k / matrix->rows), FESCUE_DOUBLE);
        outfile_write(sink, "\n", 1);
    }
}

fescue_status write_array(struct output *output, const char *name, struct matrix matrix, const char *comment)
{
    struct outfile *file;
    fescue_status status = output_add(output, name, &file);
    if (status != FESCUE_OK)
        return status;
    outfile_text(file, "%%MatrixMarket matrix array real general\n");
    if (comment != NULL)
        outfile_format(file, "%% %s\n", comment);
    outfile_format(file, "%zu %zu\n", matrix.rows, matrix.columns);
    outfile_share(file, (matrix.rows * matrix.columns + PIECE - 1) / PIECE, piece_put, &matrix);
    return outfile_status(file);
}
