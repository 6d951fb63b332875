#!/bin/sh
# The table that test_fresnel checks the Fresnel integrals against, itself against an independent library: scipy.special.fresnel
# (Cephes).  Only below |w| = 12: beyond, scipy rounds the phase before it takes the sine.
. tests/support/tap.sh
plan 1
"$python" - 2> "$work/err" <<'END'
import csv
import numpy as np
from scipy.special import fresnel
rows = [r for r in csv.reader(open("tests/data/fresnel_reference.csv")) if r and not r[0].startswith("#")]
rows = [[float.fromhex(r[0]), float(r[1]), float(r[2])] for r in rows]
w, c, s = np.array(rows).T
near = np.abs(w) < 12
by_s, by_c = fresnel(w[near])
worst = max(np.max(np.abs(by_s - s[near])), np.max(np.abs(by_c - c[near])))
print("# %d arguments, largest difference %.1e" % (near.sum(), worst))
assert near.sum() > 100 and worst < 1e-14
END
ok $? "the reference table agrees with scipy within 1e-14"
