"""Real files nobody here made: pictures and an elevation model that ship inside scikit-image and matplotlib."""
import os

import matplotlib.cbook
import numpy as np
import skimage.data
import tifffile
from common import check, conclude, path, regauge, through, true
from scipy import ndimage as nd


def reflect(a, r, c, order):
    return nd.map_coordinates(a.astype(float), np.meshgrid(r, c, indexing="ij"), order=order, mode="reflect")


pictures = {"camera": skimage.data.camera(), "coins": skimage.data.coins(), "moon": skimage.data.moon(), "page": skimage.data.page()}
for name, picture in pictures.items():
    true(f"{name} ships with the package", picture.ndim == 2 and picture.dtype == np.uint8)
    # u8 in, f64 out: the passes against SciPy.
    got = through(picture, "move", "--shift", "0.3,-0.7", "--type", "f64", "--outside", "extend")
    check(f"{name} shift", got, nd.shift(picture.astype(float), (0.3, -0.7), order=3, mode="reflect"), 1e-11)
    h, w = picture.shape
    size = (h * 3 // 2, w * 2)
    r, c = (np.arange(size[0]) + 0.5) * h / size[0] - 0.5, (np.arange(size[1]) + 0.5) * w / size[1] - 0.5
    wanted = reflect(picture, r, c, 3)
    got = through(picture, "rescale", "--size", f"{size[0]}x{size[1]}")
    # u8 out: half to even and saturation, but for values that stand within f32's rounding of a half.
    exact = np.clip(np.round(wanted), 0, 255)
    sure = np.abs(wanted - np.floor(wanted) - 0.5) > 1e-4
    true(f"{name} rescaled as u8", got.dtype == np.uint8 and np.array_equal(got[sure], exact[sure]))

dem = np.load(matplotlib.cbook.get_sample_data("jacksboro_fault_dem.npz", asfileobj=False))
elevation, dx, dy = dem["elevation"], float(dem["dx"]), float(dem["dy"])
xmin, ymax = float(dem["xmin"]), float(dem["ymax"])
true("the elevation model ships with matplotlib", elevation.dtype == np.int16 and elevation.shape == (344, 403))


def geotiff(name, a, x, y, sx, sy, kind):
    tifffile.imwrite(
        path(name), a, photometric="minisblack", metadata=None,
        extratags=[
            (33550, "d", 3, (sx, sy, 0.0)), (33922, "d", 6, (0, 0, 0, x, y, 0)),
            (34735, "H", 16, (1, 1, 0, 3, 1024, 0, 1, 2, 1025, 0, 1, kind, 2048, 0, 1, 4326)), (42113, "s", 0, "-32768"),
        ],
    )


# The same terrain as area and as point: pixel centres coincide if the point file's tie is half a pixel in.
geotiff("area.tif", elevation, xmin, ymax, dx, dy, 1)
geotiff("point.tif", elevation, xmin + dx / 2, ymax - dy / 2, dx, dy, 2)
regauge("rescale", path("area.tif"), path("onto.tif"), "--factor", "0.8", "--overwrite", "--quiet")
onto = tifffile.imread(path("onto.tif"))
regauge("unify", path("area.tif"), path("point.tif"), "--onto", path("onto.tif"), "--type", "f64", "--reduce", "none",
        "--out", path("common"), "--overwrite", "--quiet")
area, point = (tifffile.imread(os.path.join(path("common"), n)) for n in ("area.tif", "point.tif"))
true("area and point give identical values", np.array_equal(area, point))
h, w = elevation.shape
r, c = (np.arange(onto.shape[0]) + 0.5) * 1.25 - 0.5, (np.arange(onto.shape[1]) + 0.5) * 1.25 - 0.5
inside = np.ix_((r >= -0.5) & (r <= h - 0.5), (c >= -0.5) & (c <= w - 0.5))
check("elevation model unified", area[inside], reflect(elevation, r, c, 3)[inside], 1e-11)
with tifffile.TiffFile(path("onto.tif")) as t:
    tags = t.pages[0].geotiff_tags
    true("pixel scale follows", np.allclose(tags["ModelPixelScale"][:2], (dx * 1.25, dy * 1.25), rtol=1e-12))
    true("outer corner stays", np.allclose(tags["ModelTiepoint"], (0, 0, 0, xmin, ymax, 0), rtol=1e-12))
    true("CRS stays", int(tags["GeographicTypeGeoKey"]) == 4326)
    true("no-data stays", t.pages[0].tags[42113].value == "-32768")
turn = nd.affine_transform
t = np.deg2rad(8.0)
# Pixels are wider than high: turned in world units a circle stays one.
q = dy / dx
back = np.array([[np.cos(t), np.sin(t) / q], [-np.sin(t) * q, np.cos(t)]])
centre = (np.array(elevation.shape) - 1) / 2
wanted = turn(elevation.astype(float), back, centre - back @ centre, order=3, mode="reflect")
regauge("move", path("area.tif"), path("turned.tif"), "--turn", "8", "--type", "f64", "--outside", "extend", "--overwrite", "--quiet")
check("elevation model turned in world units", tifffile.imread(path("turned.tif")), wanted, 1e-11)
conclude()
