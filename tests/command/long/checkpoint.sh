#!/bin/sh
# SPDX-License-Identifier: MIT
#
# Fits of every solver, stopped by signals and begun again.
here=$(dirname "$0")
SOLVERS=$(sed -n 's/^OPTION(solver,.*"auto|evidence|\([^"]*\)".*/\1/p' "$here/../../../src/include/fescue_options.def" |
    tr '|' ' ') exec "$here/../checkpoint.sh"
