"""Audits of resamplings by SciPy and OpenCV, live: what their conventions do is known, and must be found and named.

scipy.ndimage.zoom aligns the centres of the corner pixels unless grid_mode is set (its documentation, `grid_mode`);
cv2.resize aligns outer edges.
"""
import json
import subprocess

import cv2
import numpy as np
from common import BINARY, conclude, path, true
from scipy import ndimage as nd

rng = np.random.default_rng(20260202)
H, W = 180, 220
blobs = np.column_stack([rng.uniform(-8, H + 8, 600), rng.uniform(-8, W + 8, 600), rng.uniform(1.3, 3.5, 600), rng.uniform(0.2, 1, 600)])


def scene(rows, columns, blur=0.0):
    """Sums of Gaussian blobs on a ground of 1, in closed form at any position, blurred by a Gaussian."""
    out = np.ones((len(rows), len(columns)))
    for r, c, s, h in blobs:
        wide = s * s + blur * blur
        out += h * s * s / wide * np.outer(np.exp(-0.5 * (rows - r) ** 2 / wide), np.exp(-0.5 * (columns - c) ** 2 / wide))
    return out


def audit(before, after, *options):
    np.save(path("before.npy"), before)
    np.save(path("after.npy"), after)
    done = subprocess.run(
        [BINARY, "audit", path("before.npy"), path("after.npy"), "--json", *options], capture_output=True, text=True, check=False
    )
    return done.returncode, json.loads(done.stdout), done.stderr


a = scene(np.arange(H), np.arange(W))
STRICT = ("--max-displacement", "0.02", "--tolerance", "2e-3")

# The corner-aligned zoom: a scale error, its size at the edges right to 0.02 px.
for factor in (2, 1.5, 0.5):
    code, told, words = audit(a, nd.zoom(a, factor, order=3, mode="nearest"))
    name = f"zoom {factor}"
    true(f"{name} does not pass", code == 3)
    true(f"{name} is a scale error", told["displacement_field"]["verdict"]["kind"] == "scale" and "a scale error" in words)
    true(f"{name} has its cause", "corner pixels were aligned" in words)
    true(f"{name} runs through zero", max(abs(told["displacement"]["rows"]), abs(told["displacement"]["columns"])) < 0.02)
    field, extent = told["displacement_field"]["field"], told["displacement_field"]["extent"]
    for axis, n in enumerate((H, W)):
        m = round(n * factor)
        for o in (0, m - 1):
            lies, shows = (o + 0.5) * n / m - 0.5, o * (n - 1) / (m - 1)
            u = (lies - extent["middle"][axis]) / extent["half"][axis]
            found = field["at_centre"][axis] + field["gradient"][axis][axis] * u
            true(f"{name} axis {axis} pixel {o}: {found:.4f} for {lies - shows:.4f}", abs(found - (lies - shows)) < 0.02)

# Clean resamplings pass.
clean = {
    "zoom grid_mode grid-constant": nd.zoom(a, 2, grid_mode=True, mode="grid-constant", cval=a.mean()),
    "zoom grid_mode reflect": nd.zoom(a, 1.5, grid_mode=True, mode="reflect"),
    "map_coordinates": nd.map_coordinates(
        a, np.meshgrid((np.arange(234) + 0.5) * H / 234 - 0.5, (np.arange(176) + 0.5) * W / 176 - 0.5, indexing="ij"), order=3, mode="reflect"
    ),
    "INTER_AREA 0.5": cv2.resize(a, (W // 2, H // 2), interpolation=cv2.INTER_AREA),
    "INTER_AREA 0.5 of f32": cv2.resize(a.astype("f4"), (W // 2, H // 2), interpolation=cv2.INTER_AREA),
    "INTER_CUBIC 2": cv2.resize(a, (2 * W, 2 * H), interpolation=cv2.INTER_CUBIC),
}
for name, after in clean.items():
    code, told, words = audit(a, after, *STRICT, "--min-mtf50", "0.2")
    true(f"{name} passes\n{words}", code == 0 and "no displacement" in words)
u8 = np.round(40 * a).clip(0, 255).astype("u1")
code, told, words = audit(u8, cv2.resize(u8, (W // 2, H // 2), interpolation=cv2.INTER_AREA), "--max-displacement", "0.02")
true(f"INTER_AREA 0.5 of u8 passes\n{words}", code == 0)

# Blurs are seen as such, by SciPy's filter and in closed form.
for sigma in (0.8, 1.5, 2.5):
    for after in (nd.gaussian_filter(a, sigma, mode="reflect"), scene(np.arange(H), np.arange(W), sigma)):
        code, told, words = audit(a, after)
        sharp = told["spectra"]["sharpness"]
        true(f"blur {sigma}: {sharp['gaussian_sigma']:.3f}", sharp["is_gaussian"] and abs(sharp["gaussian_sigma"] / sigma - 1) < 0.05)
        true(f"blur {sigma} does not displace", code == 0)

# Shifts: half a pixel, and any other, by splines of SciPy.
for shift in ((0.5, 0.0), (0.0, -0.5), (0.5, 0.5), (0.23, -0.71)):
    code, told, words = audit(a, nd.shift(a, shift, order=3, mode="reflect"))
    d = told["displacement"]
    true(f"shift {shift}: {d}", code == 3 and abs(d["rows"] - shift[0]) < 0.02 and abs(d["columns"] - shift[1]) < 0.02)
    true(f"shift {shift} is named", ("half an input pixel" in words) == all(abs(v) in (0.0, 0.5) for v in shift))

# A reduction by nearest neighbours looks at the first of two pixels, and folds.
noise = nd.gaussian_filter(rng.normal(size=(300, 320)), 0.5)
code, told, words = audit(noise, cv2.resize(noise, (160, 150), interpolation=cv2.INTER_NEAREST))
d = told["displacement"]
true(f"INTER_NEAREST slips\n{words}", code == 3 and abs(d["rows"] - 0.5) < 0.02 and abs(d["columns"] - 0.5) < 0.02)
true("INTER_NEAREST folds", "without anti-aliasing" in words)

# The no-data code averaged into numbers.
coded = a.copy()
coded[41:72, 61:92] = -9999
code, told, words = audit(coded, cv2.resize(coded, (W // 2, H // 2), interpolation=cv2.INTER_AREA), "--missing", "-9999")
true(f"the code is found in numbers\n{words}", told["gaps"]["mixed_with_code"] == 31 and "averaged into them" in words)
conclude()
