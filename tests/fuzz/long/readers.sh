#!/bin/sh
# SPDX-License-Identifier: MIT
#
# Many changed files and packs through the readers, and many numbers against strtod: the ordinary tests with more trials.
set -u
cd "$(dirname "$0")/../../.." || exit 70
status=0
FESCUE_TRIALS=50000 "${BUILD:-build}/tests/unit/test_reader_mutations" || status=1
FESCUE_TRIALS=10000000 "${BUILD:-build}/tests/unit/test_number" || status=1
FESCUE_TRIALS=100000 "${BUILD:-build}/tests/unit/test_pack" || status=1
exit $status
