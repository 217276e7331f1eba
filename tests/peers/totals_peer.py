"""Totals against SciPy: differences of the cumulative sum's interpolating spline (scipy.interpolate), to 1e-10.

The cumulative sum is point-symmetric about both ends of a line (design: half-symmetric cells), so the spline is drawn
through 40 cells more on either side; what lies beyond has an influence of |z|^40 < 1e-14 (poles of bspline_poles.csv).
"""
import numpy as np
from common import check, conclude, path, regauge
from scipy.interpolate import make_interp_spline

rng = np.random.default_rng(7)
a = rng.poisson(200, size=(53, 71)).astype(float)
PAD = 40


def totals(a, edges, degree):
    """Totals along axis 0 of the cells between `edges` (from the outer edge of the first cell), clamped to the line."""
    n = a.shape[0]
    wide = np.concatenate([a[:PAD][::-1], a, a[::-1][:PAD]])
    cumulative = np.concatenate([np.zeros((1, a.shape[1])), np.cumsum(wide, axis=0)])
    spline = make_interp_spline(np.arange(len(cumulative)) - PAD, cumulative, k=degree)
    at = spline(np.clip(edges, 0, n))
    return np.diff(at, axis=0)


def run(command, *options):
    np.save(path("in.npy"), a)
    out = path("out.npy")
    regauge(command, path("in.npy"), out, "--values", "total", *options, "--overwrite", "--quiet")
    return np.load(out)


for degree in (3, 5):
    kernel = ["--kernel", f"bspline:{degree}"]
    for rows, columns in ((20, 26), (91, 120), (48, 93)):
        got = run("rescale", "--size", f"{rows}x{columns}", *kernel)
        r = np.arange(rows + 1) * a.shape[0] / rows
        c = np.arange(columns + 1) * a.shape[1] / columns
        wanted = totals(totals(a, r, degree).T, c, degree).T
        check(f"bspline:{degree} {rows}x{columns}", got, wanted, 1e-10)
        check(f"bspline:{degree} {rows}x{columns} sum", got.sum(), a.sum(), 1e-12)
    got = run("move", "--shift", "0.37,-1.25", *kernel, "--outside", "extend")
    r = np.arange(a.shape[0] + 1) - 0.37
    c = np.arange(a.shape[1] + 1) + 1.25
    check(f"bspline:{degree} shift", got, totals(totals(a, r, degree).T, c, degree).T, 1e-10)
conclude()
