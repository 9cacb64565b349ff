"""Misfit: whether a single plane wave describes the fringes of a peak over the whole region.

What the fitted waves leave over is projected, cell by cell, on polynomials of second to fourth order across the region.
Noise alone leaves its own density there; an envelope, a bend or a second wave close by leaves more.
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import lru_cache

import numba
import numpy as np
from numpy.typing import NDArray

from fringespan.peaks.demodulation import block_size
from fringespan.peaks.joint_fit import JointFit
from fringespan.region import Footprint
from fringespan.spectrum import cell_counts

__all__ = ["MISFIT_LIMIT", "CellResiduals", "cell_residuals", "split_wave"]

_MOST_CELLS = 16
_ORDER = 4

MISFIT_LIMIT = 2.4
"""Mean of 12 squared projections over the noise above which a single wave is refused; noise exceeds it once in 1000."""


@dataclass(frozen=True, eq=False, slots=True)
class _Cells:
    """Cells of whole blocks: pixel edges, pixel counts, middles, and polynomials that are orthonormal over the pixels."""

    edges_y: NDArray[np.int32]
    edges_x: NDArray[np.int32]
    counts: NDArray[np.float64]
    middle_y: NDArray[np.float64]
    middle_x: NDArray[np.float64]
    polynomials: NDArray[np.float64]


@dataclass(frozen=True, eq=False, slots=True)
class CellResiduals:
    """What the fitted waves leave over, demodulated at each peak.

    Attributes
    ----------
    residual : ndarray of complex128, shape (n, cells down, cells across)
        Sums over each cell.
    misfit : ndarray, shape (n,)
        Mean squared projection over the noise; about 1 if a single wave fits.
    counts : ndarray, shape (cells down, cells across)
        Pixels of each cell.
    middle_y, middle_x : ndarray
        Middles of the cells, in pixels from the middle of the rectangle.
    height, width : ndarray
        Of the cells down and across, in pixels.
    """

    residual: NDArray[np.complex128]
    misfit: NDArray[np.float64]
    counts: NDArray[np.float64]
    middle_y: NDArray[np.float64]
    middle_x: NDArray[np.float64]
    height: NDArray[np.float64]
    width: NDArray[np.float64]


@lru_cache(maxsize=32)
def _cells(footprint: Footprint) -> _Cells:
    ny, nx = footprint.shape
    size = block_size(footprint)

    def edges(n: int) -> NDArray[np.int32]:
        blocks = -(-n // size)
        cells = min(_MOST_CELLS, blocks)
        return np.minimum(np.linspace(0, blocks, cells + 1).round().astype(np.int32) * size, n).astype(np.int32)

    edges_y, edges_x = edges(ny), edges(nx)
    counts = cell_counts(footprint.spans, edges_y, edges_x)
    middle_y = (edges_y[:-1] + edges_y[1:] - 1) / 2 - (ny - 1) / 2
    middle_x = (edges_x[:-1] + edges_x[1:] - 1) / 2 - (nx - 1) / 2
    y, x = (middle_y / ny)[:, None], (middle_x / nx)[None]
    powers = [(i, n - i) for n in range(_ORDER + 1) for i in range(n + 1)]
    monomials = np.stack([(y**i * x**j).ravel() for i, j in powers])
    root = np.sqrt(counts.ravel())
    q = np.linalg.qr((monomials * root).T)[0].T
    with np.errstate(divide="ignore", invalid="ignore"):
        polynomials = np.where(root > 0, q / root, 0) * np.sqrt(counts.sum())
    return _Cells(edges_y, edges_x, counts, middle_y, middle_x, np.ascontiguousarray(polynomials))


@numba.njit(cache=True, nogil=True)
def _cell_lines(edges, n, frequency, out):  # type: ignore[no-untyped-def]
    """Fill out with the sum of exp(2 pi i f y) over the pixels of each cell along one axis."""
    f = frequency - np.rint(frequency)
    for k in range(out.size):
        m = edges[k + 1] - edges[k]
        centre = (edges[k] + edges[k + 1] - 1) / 2 - (n - 1) / 2
        s = np.sin(np.pi * f)
        kernel = m if abs(s) < 1e-9 else np.sin(np.pi * f * m) / s
        # the pixels are at whole or half numbers from the middle: the full frequency sets their phase
        first = edges[k] - (n - 1) / 2
        turn = np.exp(2j * np.pi * frequency * first) * np.exp(2j * np.pi * f * (centre - first))
        out[k] = kernel * turn


@numba.njit(cache=True, nogil=True)
def _subtract_outline(spans, edges_y, edges_x, cell_x, ny, nx, fy, fx, amplitude, prefix, out):  # type: ignore[no-untyped-def]
    """Subtract a wave from the cell sums, summed over the pixels of the spans."""
    middle_x = (nx - 1) / 2
    turn = np.exp(2j * np.pi * fx)
    wave = np.exp(-2j * np.pi * fx * middle_x)
    prefix[0] = 0
    for x in range(nx):
        prefix[x + 1] = prefix[x] + wave
        wave *= turn
    cy = 0
    row = -1
    down = np.exp(2j * np.pi * fy)
    for k in range(spans.shape[0]):
        y, x0, x1 = spans[k, 0], spans[k, 1], spans[k, 2]
        while y >= edges_y[cy + 1]:
            cy += 1
        # from row to row a product will do; now and then afresh, so that rounding does not add up
        if y == row + 1 and y % 32 != 0:
            wave *= down
        elif y != row:
            wave = amplitude * np.exp(2j * np.pi * fy * (y - (ny - 1) / 2))
        row = y
        for cx in range(cell_x[x0], cell_x[x1 - 1] + 1):
            out[cy, cx] -= wave * (prefix[min(x1, edges_x[cx + 1])] - prefix[max(x0, edges_x[cx])])


@numba.njit(cache=True, nogil=True)
def _residuals(  # type: ignore[no-untyped-def]
    blocks,
    size,
    spans,
    is_rectangle,
    ny,
    nx,
    edges_y,
    edges_x,
    polynomials,
    demodulated,
    frequency,
    amplitude,
    density,
    count,
    residual,
    misfit,
):
    n = frequency.shape[0]
    cells_y, cells_x = residual.shape[1], residual.shape[2]
    lines_y = np.empty(cells_y, np.complex128)
    lines_x = np.empty(cells_x, np.complex128)
    cell_x = np.empty(nx, np.int32)
    for cx in range(cells_x):
        cell_x[edges_x[cx] : edges_x[cx + 1]] = cx
    prefix = np.empty(1 if is_rectangle else nx + 1, np.complex128)
    turn_x = np.empty(blocks.shape[2], np.complex128)
    for k in range(n):
        # the blocks were summed at a slightly different frequency
        dy = frequency[k, 0] - demodulated[k, 0]
        dx = frequency[k, 1] - demodulated[k, 1]
        residual[k] = 0
        for bx in range(blocks.shape[2]):
            turn_x[bx] = np.exp(-2j * np.pi * dx * (size * bx + (size - 1) / 2 - (nx - 1) / 2))
        cy = 0
        for by in range(blocks.shape[1]):
            while by * size >= edges_y[cy + 1]:
                cy += 1
            turn = np.exp(-2j * np.pi * dy * (size * by + (size - 1) / 2 - (ny - 1) / 2))
            for bx in range(blocks.shape[2]):
                residual[k, cy, cell_x[bx * size]] += blocks[k, by, bx] * turn * turn_x[bx]
        for j in range(n):
            for sign in (1, -1):
                fy = sign * frequency[j, 0] - frequency[k, 0]
                fx = sign * frequency[j, 1] - frequency[k, 1]
                # side lobes fall off with the distance in bins; below a twentieth of the noise they do not matter
                lobe = 1 / ((1 + 3 * abs(fy) * ny) * (1 + 3 * abs(fx) * nx))
                if 20 * abs(amplitude[j]) * lobe * np.sqrt(count) < 0.05 * np.sqrt(density[k]):
                    continue
                a = amplitude[j] if sign == 1 else np.conj(amplitude[j])
                if is_rectangle:
                    _cell_lines(edges_y, ny, fy, lines_y)
                    _cell_lines(edges_x, nx, fx, lines_x)
                    for cy in range(cells_y):
                        for cx in range(cells_x):
                            residual[k, cy, cx] -= a * lines_y[cy] * lines_x[cx]
                else:
                    _subtract_outline(spans, edges_y, edges_x, cell_x, ny, nx, fy, fx, a, prefix, residual[k])
        total = 0.0
        for m in range(3, polynomials.shape[0]):
            projection = 0j
            for cy in range(cells_y):
                for cx in range(cells_x):
                    projection += polynomials[m, cy * cells_x + cx] * residual[k, cy, cx]
            total += (projection.real**2 + projection.imag**2) / count
        misfit[k] = total / (polynomials.shape[0] - 3) / density[k]


def cell_residuals(footprint: Footprint, fit: JointFit, density: NDArray[np.float64]) -> CellResiduals:
    """Return what the fitted waves leave over.

    Parameters
    ----------
    footprint : Footprint
    fit : JointFit
    density : ndarray, shape (n,)
        Noise power density at each peak.

    Returns
    -------
    CellResiduals
    """
    cells = _cells(footprint)
    n = len(fit.frequency)
    residual = np.empty((n, *cells.counts.shape), np.complex128)
    misfit = np.empty(n)
    demodulation = fit.demodulation
    _residuals(
        demodulation.blocks, demodulation.block, footprint.spans, footprint.mask is None, *footprint.shape,
        cells.edges_y, cells.edges_x, cells.polynomials, demodulation.frequency, fit.frequency, fit.amplitude,
        density, footprint.count, residual, misfit,
    )  # fmt: skip
    height, width = np.diff(cells.edges_y).astype(float), np.diff(cells.edges_x).astype(float)
    return CellResiduals(residual, misfit, cells.counts, cells.middle_y, cells.middle_x, height, width)


def split_wave(
    footprint: Footprint, cells: CellResiduals, k: int, amplitude: complex, density: float
) -> NDArray[np.float64] | None:
    """Try two waves in place of one.

    Parameters
    ----------
    footprint : Footprint
    cells : CellResiduals
    k : int
        The peak.
    amplitude : complex
        Its fitted amplitude.
    density : float
        Noise power density.

    Returns
    -------
    ndarray, shape (2, 2), or None
        Offsets (row, column) of two waves from the peak's frequency, in cycles per pixel, that leave only noise; None if
        there are none at least one bin apart.
    """
    used = cells.counts.ravel() > 0
    bins = 1 / np.array(footprint.shape)
    y = np.repeat(cells.middle_y, cells.middle_x.size)[used] * bins[0]
    x = np.tile(cells.middle_x, cells.middle_y.size)[used] * bins[1]
    height = np.repeat(cells.height, cells.middle_x.size)[used] * bins[0]
    width = np.tile(cells.width, cells.middle_y.size)[used] * bins[1]
    counts = cells.counts.ravel()[used]
    data = cells.residual[k].ravel()[used] + amplitude * counts
    grid = np.arange(-14, 15) / 4
    shift_y, shift_x = (g.ravel() for g in np.meshgrid(grid, grid, indexing="ij"))
    spectrum = np.abs(np.exp(-2j * np.pi * (np.outer(shift_y, y) + np.outer(shift_x, x))) @ data)
    first = np.array([shift_y[spectrum.argmax()], shift_x[spectrum.argmax()]])
    rest = np.abs(np.exp(-2j * np.pi * (np.outer(shift_y, y) + np.outer(shift_x, x))) @ cells.residual[k].ravel()[used])
    rest[np.hypot(shift_y, shift_x) < 0.4] = 0
    second = np.array([shift_y[rest.argmax()], shift_x[rest.argmax()]])
    along = (second - first) / max(np.hypot(*(second - first)), 1e-9)
    best: tuple[float, NDArray[np.float64]] | None = None
    for start in (
        # the single fit sits on one of the two as often as between them
        [np.zeros(2), second],
        [first, second],
        [first + 0.5 * along, first - 0.5 * along],
        [first + 1.0 * along, first - 1.0 * along],
    ):
        result = _two_waves(y, x, height, width, counts, data, np.array(start))
        if result is not None and (best is None or result[0] < best[0]):
            best = result
    if best is None or np.hypot(*(best[1][0] - best[1][1])) < 1.0 or np.abs(best[1]).max() > 4:
        return None
    # noise leaves its density times the pixels of each cell, less the eight fitted numbers; it is known to a third
    if best[0] / density / (counts.size - 4) > 1.5 * (1 + 6 / np.sqrt(counts.size)):
        return None
    return best[1] * bins


def _two_waves(
    y: NDArray[np.float64],
    x: NDArray[np.float64],
    height: NDArray[np.float64],
    width: NDArray[np.float64],
    counts: NDArray[np.float64],
    data: NDArray[np.complex128],
    shift: NDArray[np.float64],
) -> tuple[float, NDArray[np.float64]] | None:
    """Fit two waves to cell sums by Gauss-Newton with variable projection; return the residual power and the shifts."""
    root = np.sqrt(counts)
    scaled = data / root

    def model(at: NDArray[np.float64]) -> tuple[NDArray[np.complex128], NDArray[np.complex128], float]:
        waves = np.exp(2j * np.pi * (np.outer(y, at[:, 0]) + np.outer(x, at[:, 1]))) * root[:, None]
        # a wave cancels part of itself within a cell
        waves = waves * np.sinc(np.outer(height, at[:, 0])) * np.sinc(np.outer(width, at[:, 1]))
        c = np.linalg.lstsq(waves, scaled, rcond=None)[0]
        left = scaled - waves @ c
        return waves * c, left, float(np.vdot(left, left).real)

    parts, left, cost = model(shift)
    damping = 1e-3
    for _ in range(30):
        slope = 2j * np.pi * np.concatenate([parts * y[:, None], parts * x[:, None]], axis=1)
        # amplitudes and phases move along with the shifts
        columns = np.concatenate([slope, parts, 1j * parts], axis=1)
        jacobian = np.concatenate([columns.real, columns.imag])
        normal = jacobian.T @ jacobian
        step = np.linalg.lstsq(
            normal + damping * np.diag(np.diag(normal)), jacobian.T @ np.concatenate([left.real, left.imag]), rcond=None
        )[0]
        trial = shift + np.clip(step[:4].reshape(2, 2).T, -0.5, 0.5)
        parts_trial, left_trial, cost_trial = model(trial)
        if cost_trial < cost:
            done = cost - cost_trial < 1e-4 * cost
            shift, parts, left, cost = trial, parts_trial, left_trial, cost_trial
            damping /= 5
            if done:
                break
        else:
            damping *= 10
            if damping > 1e4:
                break
    if not np.isfinite(shift).all():
        return None
    return cost, shift
