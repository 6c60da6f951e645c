#!/bin/sh
# SPDX-License-Identifier: MIT
#
# Ten million seen cells in a gzipped file are read and filled at rank 16 in single precision within 1 GiB.
. "$(dirname "$0")/../library"

"$FESCUE" sow -q --rows 100000 --columns 20000 --rank 16 --seen 0.005 --popularity 0.5 --gzip -o sown
cat >run.py <<'END'
import resource, subprocess, sys
status = subprocess.run(sys.argv[1:]).returncode
peak = resource.getrusage(resource.RUSAGE_CHILDREN).ru_maxrss
print("status %d, %d KiB at most" % (status, peak))
sys.exit(status or peak > 1 << 20)
END
check "within 1 GiB" "$PYTHON" run.py "$FESCUE" fill sown/table.mtx.gz -r 16 --precision single --iterations 30 -o filled
cat check.out | sed 's/^/# /'
check "sixteen components" grep -q '^16 1$' filled/spectrum.mtx
finish
