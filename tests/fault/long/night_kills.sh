#!/bin/sh
# SPDX-License-Identifier: MIT
#
# Fifty kills of a night of larger tables.
KILLS=50 ROWS=250 exec "$(dirname "$0")/../../command/night_kills.sh"
