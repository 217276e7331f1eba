"""Splines against scipy.ndimage, live: shift, zoom and free affine maps under three extensions, to 1e-11.

SciPy's 'reflect' starts its prefilter with an error of |z|^(2N) (reference/methods.md, section 2): below 1e-30 for the
64 samples and more used here.
"""
import numpy as np
from common import check, conclude, through
from scipy import ndimage as nd

rng = np.random.default_rng(20260101)
a = rng.normal(size=(67, 83))
MODES = {"half-symmetric": "reflect", "whole-symmetric": "mirror", "periodic": "grid-wrap"}

for degree in (2, 3, 4, 5):
    for extend, mode in MODES.items():
        common = ["--kernel", f"bspline:{degree}", "--extend", extend, "--outside", "extend"]
        name = f"bspline:{degree} {extend}"
        for shift in ((0.37, -1.25), (-3.5, 0.001)):
            got = through(a, "move", "--shift", f"{shift[0]},{shift[1]}", *common)
            check(f"{name} shift {shift}", got, nd.shift(a, shift, order=degree, mode=mode), 1e-11)
        # A turn of 17.3 degrees counter-clockwise as displayed about the centre, rows down.
        t = np.deg2rad(17.3)
        back = np.array([[np.cos(t), np.sin(t)], [-np.sin(t), np.cos(t)]])
        centre = (np.array(a.shape) - 1) / 2
        turned = nd.affine_transform(a, back, centre - back @ centre, order=degree, mode=mode)
        check(f"{name} turn", through(a, "move", "--turn", "17.3", *common), turned, 1e-11)
        for size in ((100, 61), (31, 200)):
            r = (np.arange(size[0]) + 0.5) * a.shape[0] / size[0] - 0.5
            c = (np.arange(size[1]) + 0.5) * a.shape[1] / size[1] - 0.5
            wanted = nd.map_coordinates(a, np.meshgrid(r, c, indexing="ij"), order=degree, mode=mode)
            got = through(
                a, "rescale", "--size", f"{size[0]}x{size[1]}", "--kernel", f"bspline:{degree}",
                "--extend", extend, "--reduce", "none",
            )
            check(f"{name} size {size}", got, wanted, 1e-11)
        if extend == "half-symmetric":
            zoomed = nd.zoom(a, (2, 3), order=degree, mode=mode, grid_mode=True)
            check(f"{name} zoom", through(a, "rescale", "--factor", "2,3", "--kernel", f"bspline:{degree}"), zoomed, 1e-11)
        corners = nd.zoom(a, 2.0, order=degree, mode=mode) if extend == "whole-symmetric" else None
        if corners is not None:
            got = through(
                a, "rescale", "--size", f"{2 * a.shape[0]}x{2 * a.shape[1]}", "--anchor", "centre",
                "--kernel", f"bspline:{degree}", "--extend", extend, "--reduce", "none",
            )
            check(f"{name} corner centres", got, corners, 1e-11)
conclude()
