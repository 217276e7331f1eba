"""FITS to and from astropy: every BITPIX, scaling, BLANK, extensions, carried cards, and the sky position of the same content
before and after a resampling (Greisen and Calabretta 2002), to 1e-9 pixels."""
import warnings

import numpy as np
from astropy.io import fits
from astropy.wcs import WCS
from common import check, conclude, path, regauge, true

rng = np.random.default_rng(11)
ROWS, COLUMNS = 37, 53
warnings.simplefilter("error")


def sample(dtype, shape=(ROWS, COLUMNS)):
    dtype = np.dtype(dtype)
    if dtype.kind == "f":
        return rng.normal(size=shape).astype(dtype)
    info = np.iinfo(dtype)
    return rng.integers(info.min, info.max, shape, dtype=dtype, endpoint=True)


def read(name):
    with fits.open(path(name)) as f:
        f.verify("exception")
        return f[0].data, f[0].header.copy()


def copied(name, out, *options):
    regauge("move", path(name), path(out), "--shift", "0,0", "--overwrite", "--quiet", *options)


# Every type, there and back, one band and three.
for dtype in ("u1", "i1", "u2", "i2", "u4", "i4", "f4", "f8"):
    for shape in ((ROWS, COLUMNS), (3, ROWS, COLUMNS)):
        a = sample(dtype, shape)
        fits.PrimaryHDU(a).writeto(path("a.fits"), overwrite=True)
        copied("a.fits", "b.npy")
        b = np.load(path("b.npy"))
        true(f"read {dtype} {shape}", b.dtype == a.dtype and np.array_equal(a, b))
        copied("b.npy", "c.fits")
        c, _ = read("c.fits")
        true(f"write {dtype} {shape}", np.array_equal(a, c) and c.dtype.newbyteorder("=") == a.dtype)
        copied("a.fits", "d.fits")
        true(f"FITS to FITS {dtype} {shape}", np.array_equal(read("d.fits")[0], a))

# Scaled whole numbers, with BLANK.
stored = sample("i2")
stored[3, 4] = -7
for scale, zero, wanted in ((0.25, 100.0, "f4"), (0.1, -3.0, "f8")):
    hdu = fits.PrimaryHDU(stored)
    hdu.header["BSCALE"], hdu.header["BZERO"], hdu.header["BLANK"] = scale, zero, -7
    with open(path("s.fits"), "wb") as f:
        f.write(hdu.header.tostring(padding=True).encode())
        raw = stored.astype(">i2").tobytes()
        f.write(raw + b"\0" * (-len(raw) % 2880))
    copied("s.fits", "s.npy")
    got = np.load(path("s.npy"))
    true(f"scaled by {scale}: type", got.dtype == np.dtype(wanted))
    true(f"scaled by {scale}: blank", np.isnan(got[3, 4]) and np.isnan(got).sum() == (stored == -7).sum())
    physical = np.where(stored == -7, 0, stored * scale + zero)
    check(f"scaled by {scale}", np.nan_to_num(got), physical, 1e-15 if wanted == "f8" else 1e-7)
hdu = fits.PrimaryHDU(stored)
hdu.header["BLANK"] = -7
hdu.writeto(path("k.fits"), overwrite=True, output_verify="ignore")
regauge("rescale", path("k.fits"), path("k2.fits"), "--factor", "0.5", "--kernel", "nearest", "--overwrite", "--quiet")
true("BLANK is carried", fits.getheader(path("k2.fits"))["BLANK"] == -7)

# An image in an extension; other cards travel, those of the data's own layout are written anew.
header = fits.Header()
header["OBJECT"] = ("invented field", "what was looked at")
header["EXPTIME"] = 12.5
header["HISTORY"] = "flat field of the third night"
header["COMMENT"] = "nothing is real here"
header["LONGTEXT"] = "a text of more than a card's length " * 4
header["CHECKSUM"] = "0000000000000000"
fits.HDUList([fits.PrimaryHDU(), fits.ImageHDU(sample("f4"), header, name="SCI")]).writeto(path("e.fits"), overwrite=True)
copied("e.fits", "e2.fits")
data, got = read("e2.fits")
true("extension read", np.array_equal(data, fits.getdata(path("e.fits"), 1)))
true("cards carried", got["OBJECT"] == "invented field" and got["EXPTIME"] == 12.5 and "third night" in str(got["HISTORY"]))
true("long text carried", got["LONGTEXT"] == header["LONGTEXT"])
true("no stale checksum", "CHECKSUM" not in got)
true("said", "extension 1" in regauge("describe", path("e.fits"), "--json").stdout or "extension 1" in regauge(
    "move", path("e.fits"), path("e3.fits"), "--shift", "0,0", "--overwrite").stderr)


def sky_header(form):
    h = fits.Header()
    h["CTYPE1"], h["CTYPE2"] = "RA---TAN", "DEC--TAN"
    h["CRVAL1"], h["CRVAL2"] = 83.633, 22.0145
    h["CRPIX1"], h["CRPIX2"] = 20.25, 17.5
    d = 2.0 / 3600
    t = np.deg2rad(12)
    if form == "cd":
        h["CD1_1"], h["CD1_2"], h["CD2_1"], h["CD2_2"] = -d * np.cos(t), d * np.sin(t), d * np.sin(t), d * np.cos(t)
    else:
        h["CDELT1"], h["CDELT2"] = -d, 1.5 * d
        if form == "pc":
            h["PC1_1"], h["PC1_2"], h["PC2_1"], h["PC2_2"] = np.cos(t), -np.sin(t), np.sin(t), np.cos(t)
        if form == "crota":
            h["CROTA2"] = 12.0
    # A second description, of the detector's own millimetres.
    h["CTYPE1D"], h["CTYPE2D"], h["CRPIX1D"], h["CRPIX2D"] = "X", "Y", 1.0, 1.0
    h["CDELT1D"], h["CDELT2D"], h["CRVAL1D"], h["CRVAL2D"] = 0.015, 0.015, 3.0, 4.0
    return h


at = rng.uniform(0, 1, (100, 2)) * (ROWS - 1, COLUMNS - 1)
for form in ("cd", "pc", "crota", "delta"):
    fits.PrimaryHDU(sample("f4"), sky_header(form)).writeto(path("w.fits"), overwrite=True)
    before = fits.getheader(path("w.fits"))
    for options, new in (
        (("rescale", "--factor", "0.4,0.8"), lambda p: ((p + 0.5) * (0.4, 0.8) - 0.5)),
        (("rescale", "--factor", "1.7"), lambda p: ((p + 0.5) * 1.7 - 0.5)),
    ):
        command, *rest = options
        regauge(command, path("w.fits"), path("w2.fits"), *rest, "--overwrite", "--quiet")
        after = fits.getheader(path("w2.fits"))
        for key in (" ", "D"):
            a = WCS(before, key=key).all_pix2world(at[:, 1], at[:, 0], 0)
            moved = new(at)
            there = WCS(after, key=key).all_pix2world(moved[:, 1], moved[:, 0], 0)
            scale = 2.0 / 3600 if key == " " else 0.015
            off = max(np.abs(np.subtract(a, there)).max() / scale, 0)
            true(f"{form}{key} {rest}: sky within 1e-9 px ({off:.1e})", off < 1e-8 if key == " " else off < 1e-9)
        true(f"{form}: CRVAL stays", after["CRVAL1"] == before["CRVAL1"])
# Cropped by a grid of its own: the world places it.
fits.PrimaryHDU(sample("f4"), sky_header("cd")).writeto(path("w.fits"), overwrite=True)
fits.PrimaryHDU(sample("f4"), sky_header("cd")).writeto(path("v.fits"), overwrite=True)
with fits.open(path("v.fits"), mode="update") as f:
    f[0].header["CRPIX1"] += 3.3
    f[0].header["CRPIX2"] -= 2.6
regauge("unify", path("v.fits"), "--onto", path("w.fits"), "--out", path("onto"), "--overwrite", "--quiet")
onto, base = fits.getheader(path("onto/v.fits")), fits.getheader(path("w.fits"))
check("unified CRPIX", [onto["CRPIX1"], onto["CRPIX2"]], [base["CRPIX1"], base["CRPIX2"]], 1e-12)
# Another pointing is another reference system.
with fits.open(path("v.fits"), mode="update") as f:
    f[0].header["CRVAL1"] = 84.0
done = regauge("unify", path("v.fits"), "--onto", path("w.fits"), "--out", path("onto"), "--overwrite", expect=1)
true("other pointing refused", "TAN" in done.stderr)
# Linear coordinates, and those of a grid that no FITS file gave.
h = fits.Header()
h["CTYPE1"], h["CTYPE2"], h["CRPIX1"], h["CRPIX2"] = "X", "Y", 1.0, 1.0
h["CRVAL1"], h["CRVAL2"], h["CDELT1"], h["CDELT2"], h["CUNIT1"], h["CUNIT2"] = 100.0, 200.0, 0.5, 0.25, "mm", "mm"
fits.PrimaryHDU(sample("f4"), h).writeto(path("l.fits"), overwrite=True)
regauge("move", path("l.fits"), path("l.tif"), "--shift", "0,0", "--overwrite", "--quiet")
regauge("rescale", path("l.tif"), path("l2.fits"), "--factor", "0.5", "--overwrite", "--quiet")
p, q = WCS(fits.getheader(path("l.fits"))), WCS(fits.getheader(path("l2.fits")))
check("linear by way of TIFF", np.array(q.all_pix2world(3, 4, 0)), np.array(p.all_pix2world(6.5, 8.5, 0)), 1e-12)

# Descriptions of more kinds: the sky by astropy, SIP and projection parameters included, before and after.
def sky_of(header, at):
    with warnings.catch_warnings():
        # A slit has one axis more in the world than in the image.
        warnings.simplefilter("ignore")
        w = WCS(header)
    at = np.asarray(at, float)
    rest = [np.zeros(len(at))] * (w.naxis - 2)
    return np.array(w.all_pix2world(at[:, 1], at[:, 0], *rest, 0))


def tpv():
    h = sky_header("cd")
    h["CTYPE1"], h["CTYPE2"] = "RA---TPV", "DEC--TPV"
    h["PV1_1"], h["PV1_2"], h["PV1_4"], h["PV2_1"], h["PV2_5"] = 1.001, 0.002, 0.3, 0.999, -0.2
    return h


def sip():
    h = sky_header("cd")
    h["CTYPE1"], h["CTYPE2"] = "RA---TAN-SIP", "DEC--TAN-SIP"
    h["A_ORDER"], h["A_2_0"], h["A_0_2"], h["A_1_2"] = 3, 2e-4, -1e-4, 3e-6
    h["B_ORDER"], h["B_1_1"], h["B_3_0"] = 3, 1e-4, -2e-6
    return h


def galactic():
    h = sky_header("pc")
    h["CTYPE1"], h["CTYPE2"], h["CRVAL1"], h["CRVAL2"] = "GLON-CAR", "GLAT-CAR", 30.0, 0.0
    h["CUNIT1"], h["CUNIT2"] = "deg", "deg"
    return h


def swapped():
    h = sky_header("delta")
    h["CTYPE1"], h["CTYPE2"], h["CRVAL1"], h["CRVAL2"], h["CROTA1"] = "DEC--SIN", "RA---SIN", 22.0145, 83.633, 7.0
    h["CDELT1"], h["CDELT2"] = 5e-4, -7e-4
    return h


def slit():
    h = fits.Header()
    h["WCSAXES"] = 3
    h["CTYPE1"], h["CTYPE2"], h["CTYPE3"] = "WAVE", "RA---TAN", "DEC--TAN"
    h["CUNIT1"], h["CUNIT2"], h["CUNIT3"] = "nm", "deg", "deg"
    h["CRVAL1"], h["CRVAL2"], h["CRVAL3"] = 500.0, 83.6, 22.0
    h["CRPIX1"], h["CRPIX2"], h["CRPIX3"] = 20.0, 15.0, 1.0
    h["CDELT1"], h["CDELT2"], h["CDELT3"] = 0.1, 5e-4, 5e-4
    h["PC2_2"], h["PC2_3"], h["PC3_2"], h["PC3_3"] = 0.8, -0.6, 0.6, 0.8
    return h


PIXEL = 5e-4
for name, h in (("tpv", tpv()), ("sip", sip()), ("galactic", galactic()), ("swapped", swapped()), ("slit", slit())):
    fits.PrimaryHDU(sample("f4"), h).writeto(path("w.fits"), overwrite=True)
    before = fits.getheader(path("w.fits"))
    for factors in ((0.4, 0.4), (0.4, 0.8), (1.7, 0.9)):
        regauge("rescale", path("w.fits"), path("w2.fits"), "--factor", f"{factors[0]},{factors[1]}", "--overwrite", "--quiet")
        after = read("w2.fits")[1]
        a, b = sky_of(before, at), sky_of(after, (at + 0.5) * factors - 0.5)
        # The slit's wavelengths are in nanometres there and metres here, and 0.1 of them a pixel.
        off = np.abs(a - b).max() / PIXEL
        true(f"{name} {factors}: within 1e-8 px ({off:.1e})", off < 1e-8)
# A shift moves the content and leaves the lattice; a frame that grows keeps its place in the sky.
fits.PrimaryHDU(sample("f4"), sky_header("pc")).writeto(path("w.fits"), overwrite=True)
before = fits.getheader(path("w.fits"))
regauge("move", path("w.fits"), path("w2.fits"), "--shift", "1.25,-0.75", "--overwrite", "--quiet")
true("a kept frame keeps its sky", np.array_equal(sky_of(before, at), sky_of(read("w2.fits")[1], at)))
regauge("move", path("w.fits"), path("w2.fits"), "--shift=-5.5,-3.5", "--frame", "fit", "--overwrite", "--quiet")
after = read("w2.fits")[1]
a, b = sky_of(before, at), sky_of(after, at - (-6, -4))
true("a fitted frame lies where it was", np.abs(a - b).max() / PIXEL < 1e-9)
# Moved by a map onto another pointing: the sky of the reference.
other = tpv()
other["CRVAL1"], other["CRVAL2"], other["RADESYS"], other["EQUINOX"] = 10.0, -41.0, "FK5", 2000.0
fits.PrimaryHDU(sample("f4"), other).writeto(path("r.fits"), overwrite=True)
with open(path("map.json"), "w", encoding="utf-8") as f:
    size = f'{{"rows": {ROWS}, "columns": {COLUMNS}}}'
    f.write(f'{{"model": "shift", "matrix": [[1,0,2],[0,1,-3],[0,0,1]], "moving": {size}, "reference": {size}}}')
regauge("unify", path("w.fits"), "--onto", path("r.fits"), "--map", path("map.json"), "--out", path("bymap"), "--overwrite", "--quiet")
got = read("bymap/w.fits")[1]
true("by a map: the reference's sky", np.abs(sky_of(got, at) - sky_of(fits.getheader(path("r.fits")), at)).max() / PIXEL < 1e-9)
true("by a map: its equinox", got["RADESYS"] == "FK5" and got["EQUINOX"] == 2000.0)
# Cubes of four axes keep them.
h = sky_header("cd")
h["CTYPE3"], h["CRVAL3"], h["CRPIX3"], h["CD3_3"] = "FREQ", 1.4e9, 1.0, 1e6
h["CTYPE4"], h["CRVAL4"], h["CRPIX4"], h["CD4_4"] = "STOKES", 1.0, 1.0, 1.0
cube = sample("f4", (4, 1, ROWS, COLUMNS))
fits.PrimaryHDU(cube, h).writeto(path("q.fits"), overwrite=True)
copied("q.fits", "q2.fits")
data, got = read("q2.fits")
true("cube of four axes", np.array_equal(data, cube) and WCS(got).wcs.ctype[3] == "STOKES")
# A code of floating point becomes NaN; whole numbers keep theirs, as stored numbers.
a = sample("f4")
a[4, 5] = -9999
np.save(path("g.npy"), a)
regauge("move", path("g.npy"), path("g.fits"), "--shift", "0,0", "--missing=-9999", "--overwrite", "--quiet")
got = read("g.fits")[0]
true("a code becomes NaN", np.isnan(got[4, 5]) and np.array_equal(np.delete(got.ravel(), 4 * COLUMNS + 5), np.delete(a.ravel(), 4 * COLUMNS + 5)))
np.save(path("g.npy"), sample("u2"))
regauge("move", path("g.npy"), path("g.fits"), "--shift", "3,0", "--missing", "65535", "--overwrite", "--quiet")
with fits.open(path("g.fits"), do_not_scale_image_data=True) as f:
    true("BLANK is a stored number", f[0].header["BLANK"] == 32767 and (f[0].data[:3] == 32767).all())
# The primary header speaks for its extension; a tail that is no HDU harms nothing.
p = fits.PrimaryHDU()
p.header["TELESCOP"], p.header["OBJECT"] = "invented", "elsewhere"
i = fits.ImageHDU(sample("f4"), sky_header("cd"), name="SCI")
i.header["OBJECT"], i.header["LTV1"] = "field", 3.0
fits.HDUList([p, i]).writeto(path("p.fits"), overwrite=True)
with open(path("p.fits"), "ab") as f:
    f.write(b"\0" * 1000)
done = regauge("rescale", path("p.fits"), path("p2.fits"), "--factor", "0.5", "--overwrite")
got = read("p2.fits")[1]
true("primary's cards", got["TELESCOP"] == "invented" and got["OBJECT"] == "field" and "LTV1" not in got and "LTV1" in done.stderr)

# Damage is told by the card.
with open(path("l.fits"), "rb") as f:
    good = f.read()
for name, bad, word in (
    ("cut", good[:2880], "END"), ("no end", good[: 2880 - 80] , "END"),
    ("naxis", good.replace(b"NAXIS1  =                   53", b"NAXIS1  =  9223372036854775807"), "NAXIS1"),
    ("text", good.replace(b"NAXIS2  =                   37", b"NAXIS2  =                 'no'"), "NAXIS2"),
    ("bits", good.replace(b"BITPIX  =                  -32", b"BITPIX  =                   12"), "BITPIX"),
    ("binary", good[:100] + b"\xff" + good[101:], "ASCII"), ("short", good[:-2880], "bytes"),
):
    with open(path("bad.fits"), "wb") as f:
        f.write(bad)
    done = regauge("describe", path("bad.fits"), expect=1)
    true(f"damage: {name}", "bad.fits" in done.stderr and (word in done.stderr or name in ("cut", "no end")))
fits.PrimaryHDU(np.zeros((4, 4), "i8")).writeto(path("i8.fits"), overwrite=True)
true("64-bit refused", "64-bit" in regauge("describe", path("i8.fits"), expect=1).stderr)
fits.HDUList([fits.PrimaryHDU(), fits.CompImageHDU(sample("i2"))]).writeto(path("z.fits"), overwrite=True)
true("compressed refused", "compressed" in regauge("describe", path("z.fits"), expect=1).stderr)
conclude()
