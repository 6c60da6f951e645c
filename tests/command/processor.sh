#!/bin/sh
# SPDX-License-Identifier: MIT
#
# Instructions: the record of a run names those that were used; OpenBLAS gets kernels for this processor where it does
# not know its model and would take the plainest (Prescott: SSE3), and those that the user names where he does.
. "$(dirname "$0")/library"

printf 'a,b,c,d\n1,2,3,4\n2,4,,8\n3,,9,12\n4,8,12,\n' >levels.csv
instructions() { # FOLDER
    "$PYTHON" -c '
import json, sys
print(*json.load(open(sys.argv[1] + "/run.json"))["instructions"].values())' "$1"
}

try 0 fill -q levels.csv -o own
check "instructions are named" test "$(instructions own | wc -w)" = 2
if grep -qw avx2 /proc/cpuinfo; then
    denied "not the plainest products, as the processor has AVX2" grep -qw Prescott <<-END
	$(instructions own)
	END
fi
if [ "$(uname -m)" = x86_64 ]; then
    OPENBLAS_CORETYPE=Prescott FESCUE_KERNEL=portable try 0 fill -q levels.csv -o plain
    check "the plainest when asked for" test "$(instructions plain)" = "portable Prescott"
fi
finish
