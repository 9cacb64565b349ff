"""The power spectrum of a region: slow trend removed, edges tapered, one real FFT.

The taper is a Kaiser window, so that neither the edges of the region nor a strong peak hide a weak one. It serves
detection and the estimate of the noise; the positions of the peaks come from the untapered pixels (`fringespan.peaks`).
"""

from __future__ import annotations

import threading
from dataclasses import dataclass
from functools import lru_cache

import numba
import numpy as np
import scipy.fft
import scipy.ndimage
from numpy.typing import NDArray

from fringespan.region import Footprint

__all__ = ["PowerSpectrum", "RegionPixels", "Taper", "power_spectrum", "prepare_pixels", "taper"]

_KAISER_BETA = 4.0
_OBLIQUE_TAPER = 0.22
"""Width of the raised-cosine edge of an oblique region, in units of the square root of its area."""

_TREND_ROWS = 128
_TREND_CELLS = 16
_OUTLIER_SIGMA = 14.0
"""Pixels further from the slow trend than this many standard deviations are defects, not electron counts."""

_FAST = {"reassoc", "contract", "nsz", "arcp"}


@dataclass(frozen=True, eq=False, slots=True)
class Taper:
    """The detection window of a footprint.

    Attributes
    ----------
    rows, columns : ndarray of float32
        Its factors along the two axes; all ones where `oblique` carries the window.
    oblique : ndarray of float32, shape (rows, columns), or None
        The window of a region that is no upright rectangle.
    coarse : tuple of two ndarrays
        Sums of an oblique window and of its square over blocks of a few pixels; empty for a rectangle.
    coarse_y, coarse_x : ndarray
        Middles of these blocks, in pixels from the first.
    power, total : float
        Sum of the squared window; sum of the window.
    transform_shape : (int, int)
        Shape of the zero-padded real picture that is transformed.
    """

    rows: NDArray[np.float32]
    columns: NDArray[np.float32]
    oblique: NDArray[np.float32] | None
    coarse: tuple[NDArray[np.float64], NDArray[np.float64]]
    coarse_y: NDArray[np.float64]
    coarse_x: NDArray[np.float64]
    power: float
    total: float
    transform_shape: tuple[int, int]


@dataclass(frozen=True, eq=False, slots=True)
class RegionPixels:
    """The pixels of a region, ready to be transformed and fitted.

    Attributes
    ----------
    values : ndarray, shape (rows, columns)
        Pixels of the region's rectangle as they are in memory; where there are defects, a copy with these on the trend.
    footprint : Footprint
        Which of them belong to the region.
    trend : ndarray, shape (10,)
        Slow trend, a cubic polynomial that is subtracted wherever the pixels are used (`trend_row`).
    sigma : float
        Standard deviation about the trend.
    unit : float
        What the values are in units of: 1, except where they were so large or small that squares would not do.
    defect_count, saturated_count : int
        Pixels left out because they are not finite or stand far off; because they are at the end of the range.
    """

    values: NDArray[np.generic]
    footprint: Footprint
    trend: NDArray[np.float64]
    sigma: float
    unit: float
    defect_count: int
    saturated_count: int


@dataclass(frozen=True, eq=False, slots=True)
class PowerSpectrum:
    """Power density of a region on its frequency grid.

    Attributes
    ----------
    power : ndarray of float32, shape (rows, columns // 2 + 1)
        Power density, scaled so that white noise of variance s^2 has density s^2; row 0, column 0 is the origin, the
        second half of the rows holds the negative row frequencies (the order of a real FFT).
    transform : ndarray of complex64, same shape
        The transform it came from.
    shape : (int, int)
        Rows and columns of the transformed picture: bin (i, j) lies at (i / rows, j / columns) cycles per pixel.
    block_maxima : ndarray of float32, shape (ceil(rows / 8), ceil((columns // 2 + 1) / 8))
        Largest power in each block of 8 x 8 bins.
    """

    power: NDArray[np.float32]
    transform: NDArray[np.complex64]
    shape: tuple[int, int]
    block_maxima: NDArray[np.float32]


# --- the window ----------------------------------------------------------------------------------------------------


@lru_cache(maxsize=32)
def taper(footprint: Footprint) -> Taper:
    """Return the detection window of a footprint: Kaiser for a rectangle, a raised-cosine edge for another outline."""
    ny, nx = footprint.shape
    transform_shape = (scipy.fft.next_fast_len(ny, real=False), scipy.fft.next_fast_len(nx, real=True))
    if footprint.mask is None:
        rows = np.kaiser(ny + 2, _KAISER_BETA)[1:-1]
        columns = np.kaiser(nx + 2, _KAISER_BETA)[1:-1]
        power = float((rows**2).sum() * (columns**2).sum())
        total = float(rows.sum() * columns.sum())
        none = np.empty((0, 0))
        return Taper(
            rows.astype(np.float32),
            columns.astype(np.float32),
            None,
            (none, none),
            np.empty(0),
            np.empty(0),
            power,
            total,
            transform_shape,
        )
    window, coarse, coarse_y, coarse_x = _oblique_window(footprint)
    ones = np.ones(ny, np.float32), np.ones(nx, np.float32)
    power, total = float(coarse[1].sum()), float(coarse[0].sum())
    return Taper(*ones, window, coarse, coarse_y, coarse_x, power, total, transform_shape)


def _oblique_window(
    footprint: Footprint,
) -> tuple[
    NDArray[np.float32], tuple[NDArray[np.float64], NDArray[np.float64]], NDArray[np.float64], NDArray[np.float64]
]:
    """Return a window that rises as sin^2 from the outline inwards, and the sums of it and its square over blocks.

    The distance to the outline is taken on a grid of some hundred points and interpolated: the window's edge is many
    pixels wide, and its exact shape does not matter, only its smoothness.
    """
    ny, nx = footprint.shape
    step = max(1, round(np.sqrt(footprint.count) / 160))
    edges = [np.arange(0, n, step) for n in (ny, nx)]
    filled = cell_counts(
        footprint.spans, *(np.append(e, n).astype(np.int32) for e, n in zip(edges, (ny, nx), strict=True))
    )
    inside = np.pad(filled >= 0.5 * step * step, 1)
    distance = (scipy.ndimage.distance_transform_edt(inside)[1:-1, 1:-1] - 0.5) * step
    rise = np.clip(distance / (_OBLIQUE_TAPER * np.sqrt(footprint.count)), 0, 1)
    window = np.zeros((ny, nx), np.float32)
    sums, squares = np.zeros(filled.shape), np.zeros(filled.shape)
    _interpolate_window(
        (np.sin(np.pi / 2 * rise) ** 2).astype(np.float32), step, footprint.spans, window, sums, squares
    )
    middle = [e + (np.diff(np.append(e, n)) - 1) / 2 for e, n in zip(edges, (ny, nx), strict=True)]
    return window, (sums, squares), middle[0], middle[1]


@numba.njit(cache=True, nogil=True)
def cell_counts(spans, edges_y, edges_x):  # type: ignore[no-untyped-def]
    """Return how many pixels of some spans lie in each cell of a grid given by its pixel edges."""
    counts = np.zeros((edges_y.size - 1, edges_x.size - 1))
    cell = np.empty(edges_x[-1], np.int32)
    for j in range(edges_x.size - 1):
        cell[edges_x[j] : edges_x[j + 1]] = j
    i = 0
    for k in range(spans.shape[0]):
        y, x0, x1 = spans[k, 0], spans[k, 1], spans[k, 2]
        while y >= edges_y[i + 1]:
            i += 1
        for j in range(cell[x0], cell[x1 - 1] + 1):
            counts[i, j] += min(x1, edges_x[j + 1]) - max(x0, edges_x[j])
    return counts


@numba.njit(cache=True, nogil=True, fastmath=_FAST)
def _interpolate_window(coarse, step, spans, window, sums, squares):  # type: ignore[no-untyped-def]
    """Write the window, interpolated by Catmull-Rom cubics, at the pixels of the spans, and its sums over blocks."""
    nx = window.shape[1]
    height, width = coarse.shape
    line = np.empty(width + 3, np.float32)
    column = np.empty(nx, np.int32)
    weights = np.empty((4, nx), np.float32)
    for x in range(nx):
        p = (x + 0.5) / step - 0.5
        j = int(np.floor(p))
        f = p - j
        column[x] = j
        weights[0, x] = -0.5 * f + f * f - 0.5 * f * f * f
        weights[1, x] = 1 - 2.5 * f * f + 1.5 * f * f * f
        weights[2, x] = 0.5 * f + 2 * f * f - 1.5 * f * f * f
        weights[3, x] = -0.5 * f * f + 0.5 * f * f * f
    for k in range(spans.shape[0]):
        y, x0, x1 = spans[k, 0], spans[k, 1], spans[k, 2]
        p = (y + 0.5) / step - 0.5
        i = int(np.floor(p))
        f = p - i
        a = -0.5 * f + f * f - 0.5 * f * f * f
        b = 1 - 2.5 * f * f + 1.5 * f * f * f
        c = 0.5 * f + 2 * f * f - 1.5 * f * f * f
        d = -0.5 * f * f + 0.5 * f * f * f
        line[:] = np.float32(0)
        for m in range(-1, 3):
            row = i + m
            # outside the grid the window is zero
            if 0 <= row < height:
                w = np.float32(a if m == -1 else (b if m == 0 else (c if m == 1 else d)))
                for j in range(width):
                    line[j + 1] += w * coarse[row, j]
        for x in range(x0, x1):
            j = column[x]
            value = np.float32(0)
            for m in range(4):
                place = j + m
                if 0 <= place < width + 2:
                    value += weights[m, x] * line[place]
            value = max(value, np.float32(0.002))
            window[y, x] = value
            sums[y // step, x // step] += value
            squares[y // step, x // step] += value * value


# --- the slow trend ------------------------------------------------------------------------------------------------


@lru_cache(maxsize=32)
def _trend_spans(footprint: Footprint) -> NDArray[np.int32]:
    """Choose about `_TREND_ROWS` rows, one at random in each stratum so that no fringe can hide in their rhythm."""
    ny = footprint.shape[0]
    wanted = min(ny, _TREND_ROWS)
    edges = np.linspace(0, ny, wanted + 1)
    jitter = np.random.default_rng(ny).uniform(0, 1, wanted)
    chosen = np.minimum((edges[:-1] + jitter * np.diff(edges)).astype(int), ny - 1)
    return np.ascontiguousarray(footprint.spans[np.isin(footprint.spans[:, 0], chosen)])


@numba.njit(cache=True, nogil=True, fastmath=_FAST)
def _cell_sums(values, spans, cells_y, cells_x):  # type: ignore[no-untyped-def]
    """Sum the pixels of some spans in coarse cells, relative to one of them."""
    ny, nx = values.shape
    sums = np.zeros((cells_y, cells_x))
    counts = np.zeros((cells_y, cells_x))
    squares = 0.0
    middle = spans.shape[0] // 2
    offset = np.float64(values[spans[middle, 0], (spans[middle, 1] + spans[middle, 2]) // 2])
    if not np.isfinite(offset):
        offset = 0.0
    base = np.float32(offset)
    # column by column over the rows of a cell, which runs in vectors
    columns = np.zeros((3, nx), np.float32)
    row_of_cells = 0
    for k in range(spans.shape[0] + 1):
        cy = spans[k, 0] * cells_y // ny if k < spans.shape[0] else cells_y
        if cy != row_of_cells:
            for cx in range(cells_x):
                # the cell of pixel x is x * cells_x // nx, so its first pixel is the rounded-up quotient
                for x in range((cx * nx + cells_x - 1) // cells_x, ((cx + 1) * nx + cells_x - 1) // cells_x):
                    sums[row_of_cells, cx] += columns[0, x]
                    squares += columns[1, x]
                    counts[row_of_cells, cx] += columns[2, x]
            columns[:, :] = np.float32(0)
            row_of_cells = cy
        if k < spans.shape[0]:
            x0, x1 = spans[k, 1], spans[k, 2]
            source, total = values[spans[k, 0], x0:x1], columns[0, x0:x1]
            squared, number = columns[1, x0:x1], columns[2, x0:x1]
            for x in range(source.size):
                v = np.float32(source[x]) - base
                total[x] += v
                squared[x] += v * v
                number[x] += np.float32(1)
    return sums, counts, squares, np.float64(base)


@numba.njit(cache=True, nogil=True)
def _fit_trend(sums, counts, squares):  # type: ignore[no-untyped-def]
    """Fit the ten monomials up to third order to the cell means, weighted by their pixel counts.

    Where a sum is not finite the trend is 0 and so is its spread, which no pixel is then within.
    """
    cells_y, cells_x = sums.shape
    normal = np.zeros((10, 10))
    right = np.zeros(10)
    row = np.empty(10)
    for cy in range(cells_y):
        y = (cy + 0.5) * 2 / cells_y - 1
        for cx in range(cells_x):
            n = counts[cy, cx]
            if n == 0:
                continue
            x = (cx + 0.5) * 2 / cells_x - 1
            row[0] = 1.0
            row[1] = x
            row[2] = x * x
            row[3] = x * x * x
            row[4] = y
            row[5] = y * x
            row[6] = y * x * x
            row[7] = y * y
            row[8] = y * y * x
            row[9] = y * y * y
            for i in range(10):
                right[i] += row[i] * sums[cy, cx]
                for j in range(i + 1):
                    normal[i, j] += n * row[i] * row[j]
    if not (np.isfinite(right).all() and np.isfinite(squares)):
        return np.zeros(10), 0.0
    total = normal[0, 0]
    for i in range(10):
        for j in range(i):
            normal[j, i] = normal[i, j]
        # a sliver of a region may not determine every term; this keeps such terms at zero
        normal[i, i] += 1e-9 * total
    trend = np.linalg.solve(normal, right)
    variance = (squares - np.dot(trend, right)) / max(total, 1.0)
    return trend, np.sqrt(max(variance, 0.0))


@numba.njit(cache=True, nogil=True, inline="always")
def trend_row(trend, y, ny):  # type: ignore[no-untyped-def]
    """Return the coefficients of the trend along row y: a cubic in t = (x + 0.5) * 2 / columns - 1."""
    t = (y + 0.5) * 2 / ny - 1
    return (
        np.float32(trend[0] + t * (trend[4] + t * (trend[7] + t * trend[9]))),
        np.float32(trend[1] + t * (trend[5] + t * trend[8])),
        np.float32(trend[2] + t * trend[6]),
        np.float32(trend[3]),
    )


# --- the pixels ----------------------------------------------------------------------------------------------------


def prepare_pixels(values: NDArray[np.generic], footprint: Footprint) -> RegionPixels:
    """Find the slow trend of a region's pixels.

    Parameters
    ----------
    values : ndarray, shape (rows, columns)
        Pixels of the region's rectangle; not changed.
    footprint : Footprint
        Which of them belong to the region.

    Returns
    -------
    RegionPixels
        With `sigma` 0 if all pixels are equal.
    """
    kind = values.dtype
    if kind.kind == "f" and kind.itemsize not in (4, 8):
        values = values.astype(np.float32 if kind.itemsize == 2 else np.float64)
    elif not kind.isnative:
        values = values.astype(kind.newbyteorder("="))
    unit = _unit(values) if kind.kind == "f" else 1.0
    if unit != 1.0:
        values = (values.astype(np.float64) / unit).astype(np.float32)
    trend, sigma = _trend(values, _trend_spans(footprint))
    return RegionPixels(values, footprint, trend, sigma, unit, 0, 0)


def _unit(values: NDArray[np.generic]) -> float:
    """Return 1, or the spread of the values where squares of them would leave single precision."""
    step = [max(1, n // 32) for n in values.shape]
    sample = values[:: step[0], :: step[1]].astype(np.float64)
    sample = sample[np.isfinite(sample)]
    if not sample.size:
        return 1.0
    # the median, so that a few defects do not set the scale
    spread = float(np.median(np.abs(sample - np.median(sample))))
    return 1.0 if spread == 0 or 1e-8 < spread < 1e8 else spread


def _trend(values: NDArray[np.generic], spans: NDArray[np.int32]) -> tuple[NDArray[np.float64], float]:
    cells = min(_TREND_CELLS, values.shape[0]), min(_TREND_CELLS, values.shape[1])
    sums, counts, squares, offset = _cell_sums(values, spans, *cells)
    trend, sigma = _fit_trend(sums, counts, squares)
    trend[0] += offset
    return trend, float(sigma)


def without_defects(pixels: RegionPixels) -> RegionPixels:
    """Replace pixels that are not finite, far off, or at the end of the range by the trend of the others.

    Returns
    -------
    RegionPixels
        A copy, with the counts of what was replaced.
    """
    footprint = pixels.footprint
    values = pixels.values.astype(np.float64)
    inside = np.ones(footprint.shape, bool) if footprint.mask is None else footprint.mask
    good = inside & np.isfinite(values)
    saturated = np.zeros_like(good)
    level = _saturation_level(pixels.values, good)
    if level is not None:
        saturated = good & (values >= level)
        good &= ~saturated
    for _ in range(3):
        if not good.any():
            break
        spans = Footprint.from_mask(good).spans
        trend, sigma = _trend(np.where(good, values, 0.0), spans)
        away = np.abs(values - trend_surface(trend, footprint.shape))
        spread = 1.4826 * float(np.median(away[good]))
        far = good & (away > _OUTLIER_SIGMA * max(spread, 0.3 * sigma))
        if not far.any():
            break
        good &= ~far
    if not good.any():
        return RegionPixels(
            np.zeros_like(values), footprint, np.zeros(10), 0.0, pixels.unit, int(inside.sum()), int(saturated.sum())
        )
    bad = inside & ~good
    filled = np.where(good, values, trend_surface(trend, footprint.shape)).astype(np.float32)
    defects = int(bad.sum() - saturated.sum())
    return RegionPixels(filled, footprint, trend, sigma, pixels.unit, defects, int(saturated.sum()))


def _saturation_level(values: NDArray[np.generic], good: NDArray[np.bool_]) -> float | None:
    """Return the pixel value at which the detector ended, or None if it never did."""
    if not good.any():
        return None
    top = float(values[good].max())
    if values.dtype.kind in "ui" and top == _highest(values.dtype):
        return top
    # a saturated picture that was scaled afterwards has many pixels at exactly one value, its highest
    at_top = np.count_nonzero(values[good] == values[good].max())
    distinct = np.unique(values[good][:: max(1, good.sum() // 4096)]).size
    if distinct > 256 and at_top > max(8, 2e-4 * good.sum()):
        return top
    return None


def _highest(kind: np.dtype[np.generic]) -> int:
    """Return the highest value of an integer type."""
    return int(2 ** (8 * kind.itemsize - (1 if kind.kind == "i" else 0)) - 1)


def trend_surface(trend: NDArray[np.float64], shape: tuple[int, int]) -> NDArray[np.float64]:
    """Return the trend at every pixel, shape (rows, columns)."""
    y = ((np.arange(shape[0]) + 0.5) * 2 / shape[0] - 1)[:, None]
    x = ((np.arange(shape[1]) + 0.5) * 2 / shape[1] - 1)[None]
    t = trend
    return np.asarray(
        t[0]
        + y * (t[4] + y * (t[7] + y * t[9]))
        + x * (t[1] + y * (t[5] + y * t[8]) + x * (t[2] + y * t[6] + x * t[3]))
    )


# --- the transform -------------------------------------------------------------------------------------------------


@numba.njit(cache=True, nogil=True, fastmath=True)
def _tapered(values, spans, trend, rows, columns, oblique, out):  # type: ignore[no-untyped-def]
    """Write (pixels - trend) * window into `out`; return lowest and highest difference.

    Pixels that are not finite go unnoticed by the two extremes, but they spread over the whole transform.
    """
    ny, nx = values.shape
    # one extreme per column, and slices that start at 0: so the compiler sees independent lanes
    low = np.zeros(nx, np.float32)
    high = np.zeros(nx, np.float32)
    scaled = ((np.arange(nx) + 0.5) * 2 / nx - 1).astype(np.float32)
    next_row = 0
    for k in range(spans.shape[0]):
        y = spans[k, 0]
        x0, x1 = spans[k, 1], spans[k, 2]
        while next_row < y:
            out[next_row, :] = np.float32(0)
            next_row += 1
        if next_row == y:
            # the first run of its row clears what lies around it
            out[y, :x0] = np.float32(0)
            out[y, x1:] = np.float32(0)
            next_row += 1
        a, b, c, d = trend_row(trend, y, ny)
        wy = rows[y]
        source, target, wx, ts = values[y, x0:x1], out[y, x0:x1], columns[x0:x1], scaled[x0:x1]
        if oblique.shape[0] == ny:
            wx = oblique[y, x0:x1]
        below, above = low[x0:x1], high[x0:x1]
        for x in range(source.size):
            z = np.float32(source[x]) - (a + ts[x] * (b + ts[x] * (c + ts[x] * d)))
            below[x] = min(below[x], z)
            above[x] = max(above[x], z)
            target[x] = z * wy * wx[x]
    out[next_row:, :] = np.float32(0)
    return low.min(), high.max()


@numba.njit(cache=True, nogil=True, fastmath=_FAST)
def _power(transform, scale, power, block_maxima):  # type: ignore[no-untyped-def]
    """Write |transform|^2 * scale and the largest of each 8 x 8 block."""
    ny, nx = power.shape
    best = np.empty(nx, np.float32)
    for block in range(block_maxima.shape[0]):
        best[:] = np.float32(0)
        for y in range(block * 8, min(block * 8 + 8, ny)):
            for x in range(nx):
                z = transform[y, x]
                p = (z.real * z.real + z.imag * z.imag) * scale
                power[y, x] = p
                best[x] = max(best[x], p)
        for j in range(block_maxima.shape[1]):
            m = np.float32(0)
            for x in range(j * 8, min(j * 8 + 8, nx)):
                m = max(m, best[x])
            block_maxima[block, j] = m


_memory = threading.local()


def _scratch(shape: tuple[int, int]) -> NDArray[np.float32]:
    """Return an array to be overwritten, the same one each time: fresh pages cost as much as filling them."""
    held: NDArray[np.float32] | None = getattr(_memory, "padded", None)
    if held is None or held.shape != shape:
        held = np.empty(shape, np.float32)
        _memory.padded = held
    return held


def power_spectrum(pixels: RegionPixels) -> tuple[PowerSpectrum, RegionPixels]:
    """Transform a region.

    Parameters
    ----------
    pixels : RegionPixels

    Returns
    -------
    PowerSpectrum
    RegionPixels
        The pixels that were transformed: those given, or, where these held defects, a copy without them.
    """
    window = taper(pixels.footprint)
    oblique = window.oblique if window.oblique is not None else np.empty((0, 0), np.float32)
    padded = _scratch(window.transform_shape)
    arguments = window.rows, window.columns, oblique, padded
    low, high = _tapered(pixels.values, pixels.footprint.spans, pixels.trend, *arguments)
    transform = scipy.fft.rfft2(padded, workers=1)
    sound = np.isfinite(transform[0, 0]) and _within_range(pixels, float(low), float(high))
    if not sound or _ends_at_one_value(pixels.values):
        pixels = without_defects(pixels)
        _tapered(pixels.values, pixels.footprint.spans, pixels.trend, *arguments)
        transform = scipy.fft.rfft2(padded, workers=1)
    shape = transform.shape
    power = np.empty(shape, np.float32)
    block_maxima = np.empty((-(-shape[0] // 8), -(-shape[1] // 8)), np.float32)
    _power(transform, np.float32(1 / window.power), power, block_maxima)
    return PowerSpectrum(power, transform, window.transform_shape, block_maxima), pixels


def _ends_at_one_value(values: NDArray[np.generic]) -> bool:
    """Say whether several of some thousand pixels share the highest value, far above the middle of them all."""
    step = [max(1, n // 64) for n in values.shape]
    sample = values[:: step[0], :: step[1]]
    top = sample.max()
    if np.count_nonzero(sample == top) < 6:
        return False
    # few grey levels, as in counts of single electrons, share every value
    return bool(np.unique(sample).size > 256)


def _within_range(pixels: RegionPixels, low: float, high: float) -> bool:
    """Say whether no pixel lies far off the trend or at the end of the range of its type."""
    limit = _OUTLIER_SIGMA * pixels.sigma
    if not (low > -limit and high < limit):
        return False
    kind = pixels.values.dtype
    highest = pixels.trend[0] + high + np.abs(pixels.trend[1:]).sum()
    return not (kind.kind in "ui" and kind.itemsize <= 2 and highest >= _highest(kind))
