"""Regauge puts rasters of measurements on a common grid and says what that cost.

Arrays are (rows, columns) or (bands, rows, columns). Positions are (row, column); the centre of the first pixel is (0, 0). A
positive shift moves content down and right, a positive turn is counter-clockwise as displayed.

>>> import numpy as np, regauge
>>> a = np.add.outer(np.arange(6.0), np.arange(8.0))
>>> regauge.rescale(a, factor=0.5, kernel="area")
array([[ 1.,  3.,  5.,  7.],
       [ 3.,  5.,  7.,  9.],
       [ 5.,  7.,  9., 11.]])

NaN and masked samples are missing and stay out of every sum. Outputs have the input's type; where whole numbers cannot say
"missing" a masked array comes back. Not a certified instrument; follow local codes and licensed practice.
"""

from __future__ import annotations

import json as _json
import os as _os

import numpy as _np

from . import _regauge
from ._arrays import Incoming as _Incoming
from ._arrays import noise_of as _noise_of
from ._regauge import Grid, __version__
from ._regauge import Kernel as _Kernel

__all__ = ["Grid", "Kernel", "audit", "move", "rescale", "span", "unify", "__version__"]


class Kernel(_Kernel):
    """A kernel by name, such as ``bspline:3``, ``keys`` or ``lanczos:3``.

    >>> Kernel("linear").weight([0, 0.25, 1])
    array([1.  , 0.75, 0.  ])
    """

    def weight(self, t):
        """The basis function at ``t`` samples from its middle; an array of the shape of ``t``."""
        return self._of(self._weight, t)

    def cardinal(self, t):
        """The cardinal function at ``t``, prefilter included: 1 at 0 and 0 at all other whole numbers for kernels that interpolate."""
        return self._of(self._cardinal, t)

    @staticmethod
    def _of(function, t):
        t = _np.asarray(t, dtype="f8")
        return _np.array(function(t.ravel().tolist())).reshape(t.shape)[()]


def _options(options):
    """Options by name as they stand in a signature; the type in NumPy's words."""
    if options.get("type") is not None:
        options = {**options, "type": _np.dtype(options["type"]).name}
    return options


def _work(incoming, target, back, options, fit=False):
    options = _options(options)
    if options.get("type") is None and incoming.samples.dtype.name != incoming.sample_type and options["values"] != "total":
        # Masked whole numbers travel as floats and come back as what they were.
        options = {**options, "type": incoming.sample_type}
    return _regauge.Work(incoming.grid, incoming.bands, incoming.samples.dtype.name, target, back, options, fit)


def _run(incoming, work, sigma, coverage, ledger):
    values, missing, noise, share, told = work.run(
        incoming.samples, coverage=coverage, ledger=ledger, **_noise_of(sigma, incoming)
    )
    made = [incoming.outgoing(values, missing, work.target)]
    if noise is not None:
        made.append(incoming.plane(noise, work.target))
    if share is not None:
        made.append(incoming.plane(share, work.target))
    if ledger:
        made.append(_json.loads(told))
    return made[0] if len(made) == 1 else tuple(made)


def _pair(v, what):
    if v is None:
        return None
    pair = (v, v) if _np.ndim(v) == 0 else tuple(v)
    if len(pair) != 2:
        raise ValueError(f"{what}={v!r}: give one number, or two, rows first")
    return pair


def _matrix(m, what="map"):
    m = _np.asarray(m, dtype="f8")
    if m.shape != (3, 3):
        raise ValueError(f"{what} of shape {m.shape}: a 3 x 3 matrix on (row, column, 1) is needed")
    return m.tolist()


def rescale(
    a,
    *,
    factor=None,
    pixel=None,
    size=None,
    anchor="edge",
    kernel="bspline:3",
    extend="half-symmetric",
    outside="extend",
    values="density",
    reduce="auto",
    missing=None,
    min_coverage=0.5,
    sigma=None,
    limit=None,
    type=None,
    tolerance=None,
    memory=None,
    threads=None,
    grid=None,
    coverage=False,
    ledger=False,
):
    """A new pixel size. Outer edges stay where they are unless ``anchor="centre"``.

    Parameters
    ----------
    a : array of (rows, columns) or (bands, rows, columns), masked array, or xarray.DataArray
    factor : output pixels per input pixel, one number or (rows, columns); keeps the pixel exact
    pixel : pixel size in the world units of ``grid`` (or of a DataArray's coordinates); keeps the pixel exact
    size : (rows, columns) of the output; keeps the extent exact
    kernel, extend, outside, values, reduce, missing, min_coverage, limit, tolerance, threads
        as on the command line; ``regauge kernels`` lists the kernels
    sigma : standard uncertainty of the samples: a number, an array, or ``"poisson:GAIN,READ"``
    type : NumPy type of the output; the input's if None (float64 for totals)
    memory : bytes to work in beside the arrays, default 512 MiB
    grid : Grid of ``a``
    coverage, ledger : whether these come as well

    Returns
    -------
    The array; a tuple ``(array, sigma, coverage, ledger)`` of what was asked for beside it.

    >>> import numpy as np
    >>> rescale(np.array([[1, 2], [3, 4]], "u2"), size=(1, 1), kernel="area", values="total")
    array([[10.]])
    """
    incoming = _Incoming(a, grid)
    size = None if size is None else tuple(int(n) for n in _pair(size, "size"))
    target, back = _regauge.rescaled(incoming.grid, _pair(factor, "factor"), _pair(pixel, "pixel"), size, anchor)
    options = dict(
        kernel=kernel, extend=extend, outside=outside, values=values, reduce=reduce, missing=missing,
        min_coverage=min_coverage, limit=limit, type=type, tolerance=tolerance, memory=memory, threads=threads,
    )
    return _run(incoming, _work(incoming, target, back, options), sigma, coverage, ledger)


def move(
    a,
    *,
    shift=(0.0, 0.0),
    turn=0.0,
    scale=1.0,
    shear=0.0,
    about=None,
    map=None,
    frame="keep",
    kernel="bspline:3",
    extend="half-symmetric",
    outside="missing",
    values="density",
    reduce="auto",
    missing=None,
    min_coverage=0.5,
    sigma=None,
    limit=None,
    type=None,
    tolerance=None,
    memory=None,
    threads=None,
    grid=None,
    coverage=False,
    ledger=False,
):
    """Shifts, turns, scales or shears the content, or applies a map; all that is asked for is resampled once.

    out = about + turn(scale(shear(in - about))) + shift. ``map`` (3 x 3 on (row, column, 1), moving to reference positions) comes
    first.

    Parameters
    ----------
    a : array of (rows, columns) or (bands, rows, columns), masked array, or xarray.DataArray
    shift : pixels down and right
    turn : degrees, counter-clockwise as displayed
    scale : content grows by this factor
    shear : content moves right by this many pixels per row
    about : the place (row, column) that stays; the centre if None
    frame : ``"keep"``, or ``"fit"`` so that nothing is cut off
    others : as :func:`rescale`

    Returns
    -------
    As :func:`rescale`. Pixels that lie outside the input are NaN or masked; ``outside="extend"`` continues the signal.

    >>> import numpy as np
    >>> move(np.eye(3), shift=(1, 0))
    array([[nan, nan, nan],
           [ 1.,  0.,  0.],
           [ 0.,  1.,  0.]])
    """
    incoming = _Incoming(a, grid)
    if frame not in ("keep", "fit"):
        raise ValueError(f"frame={frame!r}; use \"keep\" or \"fit\"")
    target, back = _regauge.moved(
        incoming.grid, _pair(shift, "shift"), turn, scale, shear, about,
        None if map is None else _matrix(map), frame == "fit",
    )
    options = dict(
        kernel=kernel, extend=extend, outside=outside, values=values, reduce=reduce, missing=missing,
        min_coverage=min_coverage, limit=limit, type=type, tolerance=tolerance, memory=memory, threads=threads,
    )
    return _run(incoming, _work(incoming, target, back, options, frame == "fit"), sigma, coverage, ledger)


def span(grids, how="union", pixel=None):
    """The common grid of several: axes of the first; ``how`` is ``"union"`` or ``"overlap"``, ``pixel`` a size in world units."""
    return _regauge.span(list(grids), how, _pair(pixel, "pixel"))


def _ways_back(incoming, target, maps):
    """From the common grid to each input."""
    maps = [None] * len(incoming) if maps is None else list(maps)
    if len(maps) != len(incoming):
        raise ValueError(f"{len(maps)} maps for {len(incoming)} arrays; give one for each, None where there is none")
    backs = []
    for i, (one, m) in enumerate(zip(incoming, maps)):
        if m is None or isinstance(m, (str, _os.PathLike)):
            backs.append(_regauge.way_back(one.grid, target, m, f"array {i + 1}"))
        else:
            backs.append(_np.linalg.inv(_np.array(_matrix(m))).tolist())
    return backs


def unify(
    arrays,
    *,
    onto=None,
    span=None,
    pixel=None,
    grids=None,
    maps=None,
    kernel="bspline:3",
    extend="half-symmetric",
    outside="missing",
    values="density",
    reduce="auto",
    missing=None,
    min_coverage=0.5,
    sigma=None,
    limit=None,
    type=None,
    tolerance=None,
    memory=None,
    threads=None,
    coverage=False,
    ledger=False,
):
    """Brings several rasters onto one grid: the main job. Each is resampled once.

    Parameters
    ----------
    arrays : sequence of arrays as for :func:`rescale`
    onto : Grid, or a DataArray whose grid is taken; the first array's grid if neither it nor ``span`` is given
    span, pixel : a grid that spans all (``"union"``) or what all share (``"overlap"``), with pixels of this size
    grids : a Grid for each array, for plain arrays that have a place in the world
    maps : for each array None, a 3 x 3 map from its positions to positions on ``onto``, or a map file
    sigma : one for all, or a list with one for each
    others : as :func:`rescale`

    Returns
    -------
    ``(results, grid)``: a list with what :func:`rescale` would return for each, and the common Grid.
    """
    arrays = list(arrays)
    if not arrays:
        raise ValueError("no arrays to unify; give at least one")
    grids = [None] * len(arrays) if grids is None else list(grids)
    if len(grids) != len(arrays):
        raise ValueError(f"{len(grids)} grids for {len(arrays)} arrays; give one for each, None where there is none")
    incoming = [_Incoming(a, g, f"array {i + 1}") for i, (a, g) in enumerate(zip(arrays, grids))]
    if onto is not None and span is not None:
        raise ValueError("onto and span exclude each other; give one")
    if span is not None:
        target = _regauge.span([i.grid for i in incoming], span, _pair(pixel, "pixel"))
    elif onto is None:
        target = incoming[0].grid
    else:
        target = onto if isinstance(onto, Grid) else _Incoming(onto, name="onto").grid
    options = dict(
        kernel=kernel, extend=extend, outside=outside, values=values, reduce=reduce, missing=missing,
        min_coverage=min_coverage, limit=limit, type=type, tolerance=tolerance, memory=memory, threads=threads,
    )
    sigmas = list(sigma) if isinstance(sigma, (list, tuple)) else [sigma] * len(arrays)
    if len(sigmas) != len(arrays):
        raise ValueError(f"{len(sigmas)} sigmas for {len(arrays)} arrays; give one for all, or one for each")
    results = [
        _run(one, _work(one, target, back, options), s, coverage, ledger)
        for one, back, s in zip(incoming, _ways_back(incoming, target, maps), sigmas)
    ]
    return results, target


def audit(
    before,
    after,
    *,
    grids=(None, None),
    back=None,
    values="density",
    missing=None,
    tolerance=None,
    max_displacement=None,
    min_mtf50=None,
    band=None,
):
    """Checks a resampling done by anyone: signal, displacement, blur, gaps.

    Parameters
    ----------
    before, after : arrays as for :func:`rescale`
    grids : their Grids; laid on each other by their worlds, else by their outer edges
    back : 3 x 3 map from positions in ``after`` to positions in ``before``, instead
    values : ``"density"`` or ``"total"``
    tolerance, max_displacement, min_mtf50 : bounds that ``result["failed"]`` is judged by
    band : counted from 0

    Returns
    -------
    dict with the keys of the command's JSON, ``summary`` (lines in words) and ``failed``.
    """
    b, a = _Incoming(before, grids[0], "before"), _Incoming(after, grids[1], "after")
    return _json.loads(
        _regauge.audit(
            b.samples, a.samples, (b.grid, a.grid), None if back is None else _matrix(back, "back"), values, missing,
            tolerance, max_displacement, min_mtf50, band,
        )
    )
