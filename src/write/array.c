/* SPDX-License-Identifier: MIT
 *
 * A dense matrix as a Matrix Market array file: column after column, one number a line (Boisvert, Pozo, Remington 1996,
 * "The Matrix Market exchange formats", NISTIR 5935).
 */
#include "write/write.h"

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
    for (size_t j = 0; j < matrix.columns; j++)
        for (size_t i = 0; i < matrix.rows; i++) {
            outfile_real(file, MATRIX_AT(matrix, i, j), FESCUE_DOUBLE);
            outfile_write(file, "\n", 1);
        }
    return outfile_status(file);
}
