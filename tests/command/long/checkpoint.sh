#!/bin/sh
# SPDX-License-Identifier: MIT
#
# Fits of every solver, stopped by signals and begun again.
SOLVERS="fixed-rank-cg grassmann-cg grassmann-trust-region recursive-least-squares grassmann-stochastic \
    grassmann-variance-reduced subgradient" exec "$(dirname "$0")/../checkpoint.sh"
