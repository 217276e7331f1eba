"""What comes in is brought to (bands, rows, columns); what goes out looks like what came in."""

from __future__ import annotations

import numpy as np

from ._regauge import Grid

_FLOAT_FOR = {"u1": "f4", "i1": "f4", "u2": "f4", "i2": "f4", "u4": "f8", "i4": "f8"}


def _is_xarray(a):
    return type(a).__module__.partition(".")[0] == "xarray" and hasattr(a, "dims")


def _even(values, what):
    """First value and step of evenly spaced coordinates."""
    values = np.asarray(values, dtype="f8")
    if values.size == 1:
        return float(values[0]), None
    step = (values[-1] - values[0]) / (values.size - 1)
    even = values[0] + step * np.arange(values.size)
    if not (step != 0 and np.abs(values - even).max() <= 1e-3 * abs(step)):
        raise ValueError(f"the coordinate \"{what}\" is not evenly spaced; drop it, or give an evenly spaced one")
    return float(values[0]), float(step)


class Incoming:
    """An array on its way in.

    Attributes
    ----------
    samples : contiguous array of (bands, rows, columns), native byte order, NaN where a masked array hides samples
    grid : Grid
    sample_type : the type that the output has unless another is asked for
    """

    def __init__(self, a, grid=None, name="array"):
        self.kind, self.template = "numpy", None
        if _is_xarray(a):
            self.kind, self.template = "xarray", a
            if grid is None:
                grid = _grid_of(a)
            a = a.values
        array = np.ma.asarray(a) if np.ma.isMaskedArray(a) else np.asarray(a)
        if self.kind == "numpy" and np.ma.isMaskedArray(a):
            self.kind = "masked"
        if array.ndim < 2 or (array.ndim > 3 and self.kind != "xarray"):
            raise ValueError(f"{name} has {array.ndim} dimensions; give (rows, columns) or (bands, rows, columns)")
        self.lead = array.shape[:-2]
        rows, columns = array.shape[-2:]
        if array.size == 0:
            raise ValueError(f"{name} of shape {array.shape} has no samples")
        self.sample_type = array.dtype.name
        if np.ma.isMaskedArray(array):
            hidden = np.ma.getmaskarray(array)
            data = array.data
            if hidden.any():
                floats = _FLOAT_FOR.get(array.dtype.str[1:])
                # Whole numbers have no NaN: floats that hold them all stand in on the way.
                data = data.astype(floats) if floats else data.copy()
                data[hidden] = np.nan
            array = data
        if not array.dtype.isnative:
            array = array.astype(array.dtype.newbyteorder("="))
        self.samples = np.ascontiguousarray(array).reshape(-1, rows, columns)
        if grid is None:
            grid = Grid(rows, columns)
        if grid.shape != (rows, columns):
            raise ValueError(f"{name} has {rows} x {columns} pixels, its grid {grid.rows} x {grid.columns}")
        self.grid = grid

    @property
    def bands(self):
        return self.samples.shape[0]

    def outgoing(self, values, missing, target):
        """An array like the one that came in, on the grid ``target``."""
        values = values.reshape(self.lead + values.shape[1:])
        if missing is not None:
            missing = missing.reshape(values.shape).astype(bool)
        elif self.kind == "masked":
            missing = np.isnan(values) if values.dtype.kind == "f" else np.zeros(values.shape, bool)
        if self.kind == "xarray":
            if missing is not None and missing.any():
                raise ValueError(
                    "some outputs are missing, and a DataArray of whole numbers cannot say so; "
                    "give missing=CODE, type=\"float32\" or outside=\"extend\""
                )
            return _labelled(self.template, values, target)
        if missing is not None and (self.kind == "masked" or missing.any()):
            return np.ma.MaskedArray(values, mask=missing)
        return values

    def plane(self, values, target):
        """A plane of floats beside the output: NaN stays NaN."""
        values = values.reshape(self.lead + values.shape[1:])
        return _labelled(self.template, values, target) if self.kind == "xarray" else values


def _grid_of(a):
    """The grid that a DataArray's coordinates tell of."""
    rows, columns = a.shape[-2:]
    y, x = a.dims[-2:]
    if y not in a.coords or x not in a.coords:
        return Grid(rows, columns)
    (y0, dy), (x0, dx) = _even(a.coords[y].values, y), _even(a.coords[x].values, x)
    dy = dy if dy is not None else (dx if dx is not None else 1.0)
    dx = dx if dx is not None else abs(dy)
    return Grid(rows, columns, world=((dx, 0.0, x0), (0.0, dy, y0)), unit=a.coords[x].attrs.get("units"))


def _labelled(template, values, target):
    """A DataArray with the coordinates of the grid ``target``."""
    import xarray

    y, x = template.dims[-2:]
    coords = {k: v for k, v in template.coords.items() if y not in v.dims and x not in v.dims}
    if target.world is not None and y in template.coords and x in template.coords:
        (a, b, c), (d, e, f) = target.world
        if b == 0 and d == 0:
            coords[y] = (y, f + e * np.arange(target.rows), template.coords[y].attrs)
            coords[x] = (x, c + a * np.arange(target.columns), template.coords[x].attrs)
    return xarray.DataArray(values, dims=template.dims, coords=coords, name=template.name, attrs=template.attrs)


def noise_of(sigma, incoming):
    """What the extension module takes for ``sigma``: keyword arguments."""
    if sigma is None:
        return {}
    if isinstance(sigma, str):
        kind, _, numbers = sigma.partition(":")
        parts = numbers.split(",")
        if kind != "poisson" or len(parts) != 2:
            raise ValueError(f"sigma={sigma!r}: give a number, an array, or \"poisson:GAIN,READ\"")
        try:
            return {"poisson": (float(parts[0]), float(parts[1]))}
        except ValueError:
            raise ValueError(f"sigma={sigma!r}: two numbers are needed, such as \"poisson:2.2,5\"") from None
    if np.ndim(sigma) == 0:
        return {"even": float(sigma)}
    plane = Incoming(sigma, name="sigma")
    samples = plane.samples
    if samples.dtype.kind != "f":
        samples = samples.astype("f8")
    if samples.shape[1:] != incoming.samples.shape[1:] or samples.shape[0] not in (1, incoming.bands):
        raise ValueError(f"sigma of shape {np.shape(sigma)} does not fit an array of {incoming.lead + incoming.grid.shape}")
    return {"sigma": samples}
