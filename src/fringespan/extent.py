"""Where a crystal's fringes are, inside the region: their local amplitude and phase, and the outline they fill."""

from __future__ import annotations

from dataclasses import dataclass
from functools import lru_cache

import numba
import numpy as np
import scipy.ndimage
from numpy.typing import NDArray

from fringespan.peaks.demodulation import Demodulation
from fringespan.region import Footprint
from fringespan.spectrum import cell_counts

__all__ = ["FringeField", "crystal_footprint", "crystal_mask", "filled_part", "fringe_fields", "outline"]

_MOST_CELLS = 40
_HALF = 0.5
"""The crystal is where the fringes' amplitude exceeds this share of its 95th percentile."""


@dataclass(frozen=True, eq=False, slots=True)
class FringeField:
    """Local complex amplitude of several sets of fringes on a coarse grid over a region.

    Attributes
    ----------
    field : ndarray of complex128, shape (n, cells down, cells across)
        Half the local real amplitude, with the phase against the plane wave of the given frequency.
    inside : ndarray of bool, shape (cells down, cells across)
        Cells that lie in the region.
    y, x : ndarray
        Middles of the cells in pixels from the middle of the rectangle.
    width_px : ndarray, shape (n,)
        Standard deviation, in pixels of the picture, of the Gaussian that each field was smoothed with.
    """

    field: NDArray[np.complex128]
    inside: NDArray[np.bool_]
    y: NDArray[np.float64]
    x: NDArray[np.float64]
    width_px: NDArray[np.float64]


@lru_cache(maxsize=16)
def _block_counts(footprint: Footprint, size: int) -> NDArray[np.float64]:
    edges = [np.append(np.arange(0, n, size), n).astype(np.int32) for n in footprint.shape]
    return np.asarray(cell_counts(footprint.spans, *edges))


@numba.njit(cache=True, nogil=True)
def _halved(field):  # type: ignore[no-untyped-def]
    """Return a field on half as many points per axis, weighted 1, 3, 3, 1 so that what would fold over is suppressed."""
    ny, nx = field.shape
    weights = (0.25, 0.75, 0.75, 0.25)
    rows = np.zeros(((ny + 1) // 2, nx), np.complex128)
    for i in range(rows.shape[0]):
        for k in range(4):
            y = 2 * i + k - 1
            if 0 <= y < ny:
                for x in range(nx):
                    rows[i, x] += weights[k] * field[y, x]
    out = np.zeros((rows.shape[0], (nx + 1) // 2), np.complex128)
    for i in range(out.shape[0]):
        for j in range(out.shape[1]):
            for k in range(4):
                x = 2 * j + k - 1
                if 0 <= x < nx:
                    out[i, j] += weights[k] * rows[i, x]
    return out


@numba.njit(cache=True, nogil=True)
def _smoothed(field, sigma_y, sigma_x):  # type: ignore[no-untyped-def]
    """Return a field convolved with a Gaussian cut at three standard deviations; nothing lies outside the grid."""
    ny, nx = field.shape
    reach = int(3 * sigma_y + 1)
    kernel = np.exp(-0.5 * (np.arange(-reach, reach + 1) / sigma_y) ** 2)
    rows = np.zeros((ny, nx), np.complex128)
    for i in range(ny):
        for k in range(max(-reach, -i), min(reach, ny - 1 - i) + 1):
            w = kernel[k + reach]
            for x in range(nx):
                rows[i, x] += w * field[i + k, x]
    reach = int(3 * sigma_x + 1)
    kernel = np.exp(-0.5 * (np.arange(-reach, reach + 1) / sigma_x) ** 2)
    out = np.zeros((ny, nx), np.complex128)
    for i in range(ny):
        for j in range(nx):
            total = 0j
            for k in range(max(-reach, -j), min(reach, nx - 1 - j) + 1):
                total += kernel[k + reach] * rows[i, j + k]
            out[i, j] = total
    return out


def fringe_fields(
    footprint: Footprint, demodulation: Demodulation, frequency: NDArray[np.float64], width_px: NDArray[np.float64]
) -> FringeField:
    """Return the local amplitude and phase of fringes, from sums over blocks.

    Parameters
    ----------
    footprint : Footprint
        Of the region that was demodulated.
    demodulation : Demodulation
        At frequencies close to those wanted.
    frequency : ndarray, shape (n, 2)
        Of the plane waves that the phases are given against, cycles per pixel.
    width_px : ndarray, shape (n,)
        Standard deviation of the Gaussian smoothing in pixels.

    Returns
    -------
    FringeField
    """
    size = demodulation.block
    counts = _block_counts(footprint, size).astype(np.complex128)
    y = np.asarray((np.arange(counts.shape[0]) + 0.5) * size - footprint.shape[0] / 2, dtype=float)
    x = np.asarray((np.arange(counts.shape[1]) + 0.5) * size - footprint.shape[1] / 2, dtype=float)
    shift = frequency - demodulation.frequency
    turn_y = np.exp(-2j * np.pi * np.outer(shift[:, 0], y))
    turn_x = np.exp(-2j * np.pi * np.outer(shift[:, 1], x))
    fields = list(demodulation.blocks * turn_y[:, :, None] * turn_x[:, None, :])
    while max(counts.shape) > _MOST_CELLS:
        fields = [_halved(f) for f in fields]
        counts = _halved(counts)
        y, x, size = (y[::2] + size / 2)[: counts.shape[0]], (x[::2] + size / 2)[: counts.shape[1]], 2 * size
    out = np.empty((len(fields), *counts.shape), np.complex128)
    for k, f in enumerate(fields):
        sigma = max(width_px[k] / size, 0.5)
        weight = _smoothed(counts, sigma, sigma).real
        out[k] = _smoothed(f, sigma, sigma) / np.maximum(weight, 1e-9 * weight.max())
    inside = counts.real > 0.3 * size * size
    return FringeField(out, inside, y, x, width_px)


@numba.njit(cache=True, nogil=True)
def filled_part(amplitude, inside, share):  # type: ignore[no-untyped-def]
    """Return the largest connected part where the amplitude exceeds a share of its 95th percentile, holes filled.

    Parameters
    ----------
    amplitude : ndarray, shape (rows, columns)
    inside : ndarray of bool, same shape
    share : float

    Returns
    -------
    ndarray of bool, same shape
    """
    ny, nx = amplitude.shape
    values = np.sort(amplitude.ravel()[inside.ravel()])
    level = share * values[min(int(0.95 * values.size), values.size - 1)]
    label = np.zeros((ny, nx), np.int32)
    stack = np.empty((ny * nx, 2), np.int32)
    best, best_sum, count = 0, -1.0, 0
    for i in range(ny):
        for j in range(nx):
            if label[i, j] != 0 or not inside[i, j] or amplitude[i, j] <= level:
                continue
            count += 1
            total = 0.0
            top = 1
            stack[0, 0], stack[0, 1] = i, j
            label[i, j] = count
            while top > 0:
                top -= 1
                a, b = stack[top, 0], stack[top, 1]
                total += amplitude[a, b]
                for da, db in ((-1, 0), (1, 0), (0, -1), (0, 1)):
                    c, d = a + da, b + db
                    if 0 <= c < ny and 0 <= d < nx and label[c, d] == 0 and inside[c, d] and amplitude[c, d] > level:
                        label[c, d] = count
                        stack[top, 0], stack[top, 1] = c, d
                        top += 1
            if total > best_sum:
                best, best_sum = count, total
    # what the outside cannot reach is a hole
    outer = np.zeros((ny + 2, nx + 2), np.bool_)
    stack = np.empty(((ny + 2) * (nx + 2), 2), np.int32)
    outer[0, 0] = True
    stack[0, 0], stack[0, 1] = 0, 0
    top = 1
    while top > 0:
        top -= 1
        a, b = stack[top, 0], stack[top, 1]
        for da, db in ((-1, 0), (1, 0), (0, -1), (0, 1)):
            c, d = a + da, b + db
            if 0 <= c < ny + 2 and 0 <= d < nx + 2 and not outer[c, d]:
                wall = 1 <= c <= ny and 1 <= d <= nx and label[c - 1, d - 1] == best
                if not wall:
                    outer[c, d] = True
                    stack[top, 0], stack[top, 1] = c, d
                    top += 1
    return inside & ~outer[1 : ny + 1, 1 : nx + 1]


def crystal_mask(fields: FringeField, strength: NDArray[np.float64], share: float = _HALF) -> NDArray[np.bool_]:
    """Return the cells that the crystal fills, from the amplitudes of its fringes taken together.

    Parameters
    ----------
    fields : FringeField
    strength : ndarray, shape (n,)
        Weight of each set of fringes, e.g. its signal to noise.
    share : float, optional
        Of the 95th percentile of the common amplitude.

    Returns
    -------
    ndarray of bool, shape (cells down, cells across)
    """
    amplitude = np.abs(fields.field)
    level = np.array([np.percentile(a[fields.inside], 95) for a in amplitude])
    common = np.sqrt(np.einsum("k,kij->ij", strength, (amplitude / level[:, None, None]) ** 2) / strength.sum())
    return np.asarray(filled_part(common, fields.inside, share))


def outline(fields: FringeField, mask: NDArray[np.bool_]) -> NDArray[np.float64]:
    """Return the outline of some cells as (row, column) pixels from the middle of the rectangle, shape (n, 2)."""
    import contourpy

    fine = scipy.ndimage.gaussian_filter(np.pad(mask, 1).astype(float), 0.6)
    step_y, step_x = fields.y[1] - fields.y[0], fields.x[1] - fields.x[0]
    y = np.concatenate([[fields.y[0] - step_y], fields.y, [fields.y[-1] + step_y]])
    x = np.concatenate([[fields.x[0] - step_x], fields.x, [fields.x[-1] + step_x]])
    lines = contourpy.contour_generator(x, y, fine).lines(0.5)
    if not lines:
        # no cell, or one that smoothing takes away: the grid's own rectangle
        return np.array([(y[0], x[0]), (y[0], x[-1]), (y[-1], x[-1]), (y[-1], x[0])])
    longest = max((np.asarray(line) for line in lines), key=lambda line: line.shape[0])
    return np.asarray(longest[:-1, ::-1], dtype=float)


def crystal_footprint(
    footprint: Footprint, fields: FringeField, mask: NDArray[np.bool_]
) -> tuple[Footprint, tuple[int, int]]:
    """Return the footprint of the crystal alone and the place of its first pixel in that of the region.

    Parameters
    ----------
    footprint : Footprint
        Of the region.
    fields : FringeField
    mask : ndarray of bool, shape (cells down, cells across)
        Cells that the crystal fills.
    """
    ny, nx = footprint.shape
    step_y, step_x = fields.y[1] - fields.y[0], fields.x[1] - fields.x[0]
    smooth = scipy.ndimage.gaussian_filter(mask.astype(float), 0.7, mode="nearest")
    # cell positions are measured from the middle of the rectangle
    row = (np.arange(ny) - (ny - 1) / 2 - fields.y[0]) / step_y
    column = (np.arange(nx) - (nx - 1) / 2 - fields.x[0]) / step_x
    row, column = np.clip(row, 0, len(fields.y) - 1), np.clip(column, 0, len(fields.x) - 1)
    lines = _interpolated(smooth, row)
    inside = _interpolated(lines.T, column).T > 0.5
    if footprint.mask is not None:
        inside &= footprint.mask
    if not inside.any():
        # a crystal of a single cell is smoothed away: the cell's own pixels stand for it
        inside = (_interpolated(_interpolated(mask.astype(float), row).T, column).T > 0) & _inside_of(footprint)
    rows, columns = np.flatnonzero(inside.any(axis=1)), np.flatnonzero(inside.any(axis=0))
    top, left = int(rows[0]), int(columns[0])
    cut = np.ascontiguousarray(inside[top : rows[-1] + 1, left : columns[-1] + 1])
    return Footprint.from_mask(cut), (top, left)


def _inside_of(footprint: Footprint) -> NDArray[np.bool_]:
    return np.ones(footprint.shape, bool) if footprint.mask is None else footprint.mask


def _interpolated(values: NDArray[np.float64], position: NDArray[np.float64]) -> NDArray[np.float64]:
    low = np.minimum(position.astype(int), len(values) - 2)
    share = (position - low)[:, None]
    return np.asarray(values[low] * (1 - share) + values[low + 1] * share)
