/* SPDX-License-Identifier: MIT
 *
 * The kernels on tall matrices for any processor.
 */
#include "numeric/tall_internal.h"

#define LANES 2
#define TILE_ROWS 4
#define MADD(a, b, c) ((a) * (b) + (c))
#define TALL_KERNEL tall_portable
#include "numeric/tall_kernel.h"
