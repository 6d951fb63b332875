#!/bin/sh
# The detection statistic against numpy and scipy: generalised least squares by
# QR of the whitened baseline, and the
# templates of a point source from scipy's Fresnel integrals (edge of Born & Wolf 8.7), averaged by quadrature.
. tests/support/tap.sh
plan 3
make -s BUILD="$build" "$build/tests/bench/bench_detector" >"$work/make" 2>&1
run "$build/tests/bench/bench_detector" dump
ok "$status" "the bank gives its numbers"
cp "$work/out" "$work/dump.json"
cat > "$work/check.py" <<'PY'
import json, sys
import numpy as np
from scipy.linalg import solve_triangular, cholesky, toeplitz
from scipy.special import fresnel
d = json.load(open(sys.argv[1]))
N = 256
x, wx = np.polynomial.legendre.leggauss(24)
j = np.arange(N)

def edge(w):
    s, c = fresnel(w)
    return 0.5 * ((0.5 + c) ** 2 + (0.5 + s) ** 2)

def template(t):
    """Point source or disc, one wavelength, a point of an aperture; the sample's mean by quadrature."""
    sign = 1 if t["kind"] == "emersion" else -1
    unit = np.sqrt(d["wavelength_m"] * d["distance_m"] / 2)
    tt = (j[:, None] + 0.5 - t["contact"] + 0.5 * x[None, :]) / d["rate"]
    w = sign * tt * d["speed_mps"] / t["scale"] / unit
    if t["size"] == 0:
        return edge(w) @ wx / 2
    u = np.cos(np.pi * np.arange(1, 65) / 65)       # strips of a uniform disc
    return sum(2 / 65 * (1 - v * v) * (edge(w + v * t["size"] / 2) @ wx / 2) for v in u)

C = toeplitz(d["covariance"])
L = cholesky(C, lower=True)
B = np.stack([np.ones(N), j / N, np.sin(2 * np.pi * d["line"] * j), np.cos(2 * np.pi * d["line"] * j)], 1)
WB = solve_triangular(L, B, lower=True)
Q, _ = np.linalg.qr(WB)
worst = 0
points = [k for k, t in enumerate(d["templates"]) if t["size"] == 0]+ [9, 26]
for k in points:
    s = solve_triangular(L, template(d["templates"][k]), lower=True)
    s -= Q @ (Q.T @ s)
    s /= np.linalg.norm(s)
    for window in d["windows"]:
        rho = s @ solve_triangular(L, np.array(window["x"]), lower=True)
        worst = max(worst, abs(rho - window["rho"][k]) / max(1, abs(rho)))
print("# %d templates, %d windows: largest difference %.2g" % (len(points), len(d["windows"]), worst))
best = max(d["windows"][3]["rho"])
print("# largest rho of the window with an emersion: %.2f" % best)
sys.exit(0 if worst < float(sys.argv[2]) else 1)
PY
run "$python" "$work/check.py" "$work/dump.json" 2e-6
cat "$work/out"
ok "$status" "rho agrees with scipy's, templates and all, to 2e-6 (weights in single precision, curves to 1e-6)"
"$python" - "$work/dump.json" <<'PY'
import json, sys
d = json.load(open(sys.argv[1]))
k = max(range(len(d["templates"])), key=lambda k: d["windows"][3]["rho"][k])
sys.exit(0 if d["templates"][k]["kind"] == "emersion" else 1)
PY
ok $? "the window with an emersion is best told by an emersion's template"
