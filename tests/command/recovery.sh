#!/bin/sh
# SPDX-License-Identifier: MIT
#
# How near filling comes to a known truth: 2000 x 1500, rank 5, a tenth of the cells seen, all choices left to the
# program. With noise sigma, least squares leaves an error of about sigma sqrt(r (m + n - r) / seen) on the cells that were
# not seen, to first order; 1.05 times that is allowed. Without noise, 1e-8 of the size of the cells.
. "$(dirname "$0")/library"

cat >look.py <<'END'
import json, sys
import numpy as np, scipy.io as io
sown, place, what, most = sys.argv[1:]
def total(start):
    left, right, s, a, b = (np.asarray(io.mmread(start + name + ".mtx"))
                            for name in ("left", "right", "spectrum", "row-offsets", "column-offsets"))
    return a + b.T + (left * s.ravel()) @ right.T
seen, truth = io.mmread(sown + "/table.mtx"), total(sown + "/truth-")
estimate = json.load(open(place + "/run.json"))["model"]["mean"] + total(place + "/")
unseen = np.ones(truth.shape, bool)
unseen[seen.row, seen.col] = False
error = np.sqrt(((estimate - truth)[unseen] ** 2).mean())
m, n = truth.shape
unit = (0.1 * np.sqrt(5 * (m + n - 5) / seen.nnz) if what == "noise" else np.sqrt((truth[unseen] ** 2).mean()))
print("error %g, in its unit %g" % (error, error / unit))
sys.exit(not error <= float(most) * unit)
END
for case in noise:0.1:1.05 none:0:1e-8; do
    what=${case%%:*} most=${case##*:} size=${case#*:}
    "$FESCUE" sow -q --rows 2000 --columns 1500 --rank 5 --seen 0.1 --noise "${size%:*}" \
        --truth factors -o "$what"
    for solver in fixed-rank-cg grassmann-cg; do
        try 0 fill -q --solver $solver --write factors "$what/table.mtx" -o "$what-$solver"
        check "$solver: it finds rank 5" grep -q '^5 1$' "$what-$solver/spectrum.mtx"
        check "$solver: the error on unseen cells is at most $most units" \
            "$PYTHON" look.py "$what" "$what-$solver" "$what" "$most"
    done
done
finish
