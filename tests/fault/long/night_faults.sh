#!/bin/sh
# SPDX-License-Identifier: MIT
#
# Every allocation and every file call of a night fails in turn, where the suite takes a sample.
SWEEP=all exec "${BUILD:-build}/tests/fault/test_night_faults"
