"""TIFF files by tifffile read here, and ours read by tifffile: bit for bit, with what they carry."""
import itertools

import numpy as np
import tifffile
from common import conclude, path, regauge, true

rng = np.random.default_rng(7)
COMPRESSIONS = [None, "lzw", "deflate", "packbits", "zstd"]
TYPES = ["u1", "i1", "u2", "i2", "u4", "i4", "f4", "f8"]


def sample(shape, dtype):
    if dtype[0] == "f":
        return rng.normal(size=shape).astype(dtype)
    info = np.iinfo(dtype)
    return rng.integers(info.min, info.max, shape, dtype=dtype, endpoint=True)


def bands(a, layout):
    return a if layout != "chunky" else np.moveaxis(a, -1, 0)


count = 0
for n, (dtype, compression, layout, tiled, order) in enumerate(
    itertools.product(TYPES, COMPRESSIONS, ["one", "chunky", "planar", "pages"], [False, True], "<>")
):
    predictors = [1] + ([2] if compression not in (None, "packbits") and dtype[0] != "f" else [])
    predictors += [3] if compression not in (None, "packbits") and dtype[0] == "f" else []
    predictor = predictors[n % len(predictors)]
    shape = {"one": (37, 83), "chunky": (37, 83, 3), "planar": (3, 37, 83), "pages": (2, 37, 83)}[layout]
    a = sample(shape, dtype)
    options = dict(byteorder=order, compression=compression, bigtiff=n % 3 == 0, metadata=None)
    options["photometric"] = "minisblack"
    if predictor > 1:
        options["predictor"] = predictor
    if layout in ("chunky", "planar"):
        options["planarconfig"] = "contig" if layout == "chunky" else "separate"
        options["extrasamples"] = ["unspecified"] * 2
    options.update(tile=(16, 32)) if tiled else options.update(rowsperstrip=5)
    source, target = path("in.tif"), path("out.tif")
    tifffile.imwrite(source, a, **options)
    what = f"{dtype} {compression} {layout} tiled={tiled} {order} predictor={predictor}"
    npy = path("read.npy")
    regauge("move", source, npy, "--shift", "0,0", "--overwrite", "--quiet")
    read = np.load(npy)
    wanted = bands(a, layout)
    true(f"read {what}", read.dtype == np.dtype(dtype) and np.array_equal(read, wanted))
    regauge("move", source, target, "--shift", "0,0", "--overwrite", "--quiet")
    with tifffile.TiffFile(target) as t:
        back = t.asarray()
        page = t.pages[0]
        true(f"written {what}", back.dtype == np.dtype(dtype) and np.array_equal(back, a))
        true(f"compression kept {what}", int(page.compression) == {None: 1, "lzw": 5, "deflate": 8, "packbits": 32773, "zstd": 50000}[compression])
        true(f"tiled {what}", page.is_tiled)
    count += 1
true("the matrix was run", count == 640)

# OME-TIFF: pixel size, unit and channel names follow; the rest of the XML stays.
a = sample((3, 80, 90), "u2")
tifffile.imwrite(path("c.ome.tif"), a, photometric="minisblack", metadata={
    "axes": "CYX", "PhysicalSizeX": 0.325, "PhysicalSizeXUnit": "µm", "PhysicalSizeY": 0.65, "PhysicalSizeYUnit": "µm",
    "Channel": {"Name": ["nuclei", "membrane <2>", "Fluß"]},
})
regauge("rescale", path("c.ome.tif"), path("d.ome.tif"), "--factor", "2,0.5", "--overwrite", "--quiet")
with tifffile.TiffFile(path("d.ome.tif")) as t:
    true("OME shape", t.series[0].shape == (3, 160, 45) and t.is_ome)
    pixels = tifffile.xml2dict(t.ome_metadata)["OME"]["Image"]["Pixels"]
    true("OME pixel size", (pixels["PhysicalSizeX"], pixels["PhysicalSizeY"]) == (0.65, 0.325))
    true("OME unit", pixels["PhysicalSizeXUnit"] == "µm")
    true("OME channels", [c["Name"] for c in pixels["Channel"]] == ["nuclei", "membrane <2>", "Fluß"])

# The matrix form of the georeference, read and written.
m = (1.5, 0.5, 0, 1000.0, 0.5, -1.5, 0, 2000.0, 0, 0, 0, 0, 0, 0, 0, 1.0)
tifffile.imwrite(path("m.tif"), sample((20, 30), "f4"), metadata=None, extratags=[
    (34264, "d", 16, m), (34735, "H", 16, (1, 1, 0, 3, 1024, 0, 1, 1, 1025, 0, 1, 1, 3072, 0, 1, 32633))])
regauge("rescale", path("m.tif"), path("m2.tif"), "--factor", "0.5", "--overwrite", "--quiet")
with tifffile.TiffFile(path("m2.tif")) as t:
    got = np.array(t.pages[0].geotiff_tags["ModelTransformation"]).ravel()
    true("matrix form", np.allclose(got[[0, 1, 3, 4, 5, 7]], (3, 1, 1000, 1, -3, 2000)))
    true("matrix CRS", int(t.pages[0].geotiff_tags["ProjectedCSTypeGeoKey"]) == 32633)

# A mask page is read by itself: 1 where a sample is there (TIFF 6.0, PhotometricInterpretation 4).
a, there = sample((40, 37), "u2"), np.random.default_rng(1).random((40, 37)) > 0.2
for tile in (None, (16, 16)):
    with tifffile.TiffWriter(path("masked.tif")) as w:
        w.write(a, tile=tile, compression="deflate")
        w.write(there, photometric=4, subfiletype=4, tile=tile)
    regauge("move", path("masked.tif"), path("masked.npy"), "--shift", "0,0", "--overwrite", "--quiet")
    got = np.load(path("masked.npy"))
    true(f"mask page {tile}", got.dtype == np.float32 and np.array_equal(np.isnan(got), ~there) and np.array_equal(got[there], a[there]))

# What is not read is refused by name.
for bad, word in ((np.zeros((8, 8), "c8"), "complex"), (np.zeros((8, 8), "u8"), "64 bits"), (np.zeros((8, 8), "f2"), "16 bits")):
    tifffile.imwrite(path("bad.tif"), bad)
    done = regauge("describe", path("bad.tif"), expect=1)
    true(f"refuses {bad.dtype}", word in done.stderr and "bad.tif" in done.stderr and "help:" in done.stderr)
with tifffile.TiffWriter(path("mixed.tif")) as w:
    w.write(sample((8, 8), "u1"))
    w.write(sample((9, 8), "u1"))
true("refuses unlike pages", "page 2" in regauge("describe", path("mixed.tif"), expect=1).stderr)
conclude()
