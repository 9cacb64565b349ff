"""Detection: which bins of a spectrum hold a fringe, at a controlled rate of false alarms.

A local maximum of the spectrum is tested with a matched filter over its 7 x 7 complex bins, which wins back most of what
the window loses between the bins. What passes here at a lowered threshold is fitted (`fringespan.peaks.joint_fit`) and
judged by its fitted amplitude.
"""

from __future__ import annotations

from collections.abc import Iterator
from contextlib import contextmanager
from dataclasses import dataclass
from functools import lru_cache

import numba
import numpy as np
import scipy.fft
from numpy.typing import NDArray
from scipy.special import lambertw

from fringespan.noise import RingBackground, kth_smallest, trimmed_mean
from fringespan.region import Footprint
from fringespan.spectrum import PowerSpectrum, taper

__all__ = [
    "Candidates",
    "density_at",
    "detection_threshold",
    "find_candidates",
    "matched_ratio_at",
    "tapered_maximum",
    "waves_removed",
]

_FIRST_PASS = 0.36
"""Share of the detection threshold that a bin alone must reach over the rings; a tapered bin between two sees a third."""

_MATCHED_PASS = 0.79
"""Share of the detection threshold that the matched filter must reach over the local noise."""

_MOST_CANDIDATES = 4096

_COARSE = np.array([-1, 0, 1]) / 3
_FINE = np.arange(-4, 5) / 8


@dataclass(frozen=True, eq=False, slots=True)
class Candidates:
    """Places in a spectrum that may hold a fringe.

    Attributes
    ----------
    frequency : ndarray, shape (n, 2)
        (row, column) in cycles per pixel, column not negative.
    density : ndarray, shape (n,)
        Noise power density there.
    samples : ndarray, shape (n,)
        Number of independent samples that the density rests on.
    ratio : ndarray, shape (n,)
        Matched-filter power over the noise.
    """

    frequency: NDArray[np.float64]
    density: NDArray[np.float64]
    samples: NDArray[np.float64]
    ratio: NDArray[np.float64]


def detection_threshold(pixel_count: int, false_peaks_per_region: float) -> float:
    """Return the power ratio T that noise alone exceeds `false_peaks_per_region` times per region, on average.

    Parameters
    ----------
    pixel_count : int
    false_peaks_per_region : float

    Notes
    -----
    Expected number of local maxima of a chi-squared field with two degrees of freedom above t, over all reciprocal
    vectors: n / 2 * lam / (2 pi) * (2 t - 1) * exp(-t), lam = 4 pi^2 / 12 for an untapered region [1]_ (from memory).

    References
    ----------
    .. [1] K. J. Worsley, "Local maxima and the expected Euler characteristic of excursion sets of chi-squared, F and t
       fields", Adv. Appl. Prob. 26 (1994) 13-42.
    """
    # a third off, for what noise estimated from the picture itself adds to the theory
    rate = 0.67 * false_peaks_per_region / (pixel_count / 2 * (4 * np.pi**2 / 12) / (2 * np.pi))
    # (2 t - 1) exp(-t) = rate has the closed solution t = 1/2 - W_{-1}(-rate exp(1/2) / 2)
    return float(0.5 - lambertw(-rate * np.exp(0.5) / 2, -1).real)


@dataclass(frozen=True, eq=False, slots=True)
class _MatchedFilter:
    coarse: NDArray[np.float32]
    fine: NDArray[np.float32]


@lru_cache(maxsize=32)
def _matched_filter(footprint: Footprint) -> _MatchedFilter:
    """Return filters h with T = |h^H z|^2 / S for the 7 x 7 bins z around a maximum, one row per sub-bin offset."""
    bins = np.arange(-3, 4)

    def responses(offsets: NDArray[np.float64]) -> NDArray[np.complex128]:
        shift = (offsets[:, None] - bins[None]).ravel()
        grid = window_transform(footprint, shift, shift, power=1)
        n = offsets.size
        return grid.reshape(n, 7, n, 7).transpose(0, 2, 1, 3).reshape(n * n, 49)

    lags = np.arange(-6, 7).astype(float)
    lag = window_transform(footprint, -lags, -lags, power=2)
    row, column = np.divmod(np.arange(49), 7)
    covariance = lag[row[:, None] - row[None] + 6, column[:, None] - column[None] + 6]
    covariance += 1e-5 * covariance[0, 0].real * np.eye(49)
    inverse = np.linalg.inv(covariance)

    def filters(offsets: NDArray[np.float64]) -> NDArray[np.float32]:
        b = responses(offsets)
        weighted = b @ inverse.T
        norm = np.sqrt(np.einsum("ij,ij->i", b.conj(), weighted).real)
        # padded to a whole number of vector lanes
        parts = np.zeros((len(b), 2, 56), np.float32)
        parts[:, 0, :49], parts[:, 1, :49] = (weighted / norm[:, None]).real, -(weighted / norm[:, None]).imag
        return parts

    return _MatchedFilter(filters(_COARSE), filters(_FINE))


def window_transform(
    footprint: Footprint, row_shift: NDArray[np.float64], column_shift: NDArray[np.float64], *, power: int
) -> NDArray[np.complex128]:
    """Return sum(w^power * exp(2 pi i (sy y / Ny + sx x / Nx))) for every pair of shifts, in bins, from pixel (0, 0)."""
    window = taper(footprint)
    ny, nx = footprint.shape
    transform_rows, transform_columns = window.transform_shape
    if window.oblique is None:
        y, x = np.arange(ny), np.arange(nx)
        wy, wx = window.rows.astype(float) ** power, window.columns.astype(float) ** power
        rows = np.exp(2j * np.pi / transform_rows * np.outer(row_shift, y)) @ wy
        columns = np.exp(2j * np.pi / transform_columns * np.outer(column_shift, x)) @ wx
        return np.outer(rows, columns)
    sums = window.coarse[power - 1]
    rows = np.exp(2j * np.pi / transform_rows * np.outer(row_shift, window.coarse_y))
    columns = np.exp(2j * np.pi / transform_columns * np.outer(column_shift, window.coarse_x))
    return np.asarray((rows @ sums) @ columns.T)


@lru_cache(maxsize=32)
def _block_radii(shape: tuple[int, int], step: tuple[float, float], table_steps: int) -> NDArray[np.int32]:
    """Return the first and last entry of the background table that each 8 x 8 block of bins touches."""
    ny, nx = shape
    rows = np.where(np.arange(ny) <= ny // 2, np.arange(ny), np.arange(ny) - ny)
    blocks_y, blocks_x = -(-ny // 8), -(-(nx // 2 + 1) // 8)
    near_y = np.array([np.abs(rows[8 * b : 8 * b + 8]).min() for b in range(blocks_y)]) * step[0]
    far_y = np.array([np.abs(rows[8 * b : 8 * b + 8]).max() for b in range(blocks_y)]) * step[0]
    near_x = np.arange(blocks_x) * 8 * step[1]
    far_x = np.minimum(np.arange(blocks_x) * 8 + 7, nx // 2) * step[1]
    low = np.hypot(near_y[:, None], near_x[None]) * table_steps
    high = np.hypot(far_y[:, None], far_x[None]) * table_steps + 1
    return np.stack([low, high], axis=-1).astype(np.int32)


@numba.njit(cache=True, nogil=True, inline="always")
def _power_at(power, i, j, nx):  # type: ignore[no-untyped-def]
    """Return the power of any bin, by its symmetry."""
    ny = power.shape[0]
    if j < 0:
        i, j = -i, -j
    elif j > nx // 2:
        i, j = -i, nx - j
    return power[i % ny, j]


@numba.njit(cache=True, nogil=True)
def _mirrored(i, j, ny, nx):  # type: ignore[no-untyped-def]
    """Return the stored bin of (i, j), and whether it is the conjugate one."""
    if j < 0:
        return (-i) % ny, -j, True
    if j > nx // 2:
        return (-i) % ny, nx - j, True
    return i % ny, j, False


@numba.njit(cache=True, nogil=True)
def _gather(transform, i, j, nx, bins):  # type: ignore[no-untyped-def]
    """Copy the 7 x 7 complex bins around (i, j)."""
    ny = transform.shape[0]
    for dy in range(-3, 4):
        for dx in range(-3, 4):
            row, column, conjugate = _mirrored(i + dy, j + dx, ny, nx)
            z = transform[row, column]
            place = (dy + 3) * 7 + dx + 3
            bins[0, place] = z.real
            bins[1, place] = -z.imag if conjugate else z.imag


@numba.njit(cache=True, nogil=True, fastmath={"reassoc", "contract", "nsz", "arcp"})
def _filtered(filters, k, bins):  # type: ignore[no-untyped-def]
    """Return |h^T z|^2; real and imaginary parts lie apart, so that the sums run in vectors."""
    h_re, h_im, z_re, z_im = filters[k, 0], filters[k, 1], bins[0], bins[1]
    re = np.float32(0)
    im = np.float32(0)
    for b in range(z_re.size):
        re += h_re[b] * z_re[b] - h_im[b] * z_im[b]
        im += h_re[b] * z_im[b] + h_im[b] * z_re[b]
    return re * re + im * im


@numba.njit(cache=True, nogil=True, inline="always")
def _vertex(before, middle, after):  # type: ignore[no-untyped-def]
    """Return the offset of a parabola's maximum from the middle of three equidistant points, at most half a step."""
    bend = before - 2 * middle + after
    if bend >= 0:
        return 0.0
    return min(max(0.5 * (before - after) / bend, -0.5), 0.5)


@numba.njit(cache=True, nogil=True, inline="always")
def ring_at(table, fy, fx):  # type: ignore[no-untyped-def]
    """Return the background at (fy, fx) ring units from the origin."""
    p = np.sqrt(fy * fy + fx * fx) * 4
    k = min(int(p), table.size - 2)
    return table[k] + (p - k) * (table[k + 1] - table[k])


@numba.njit(cache=True, nogil=True)
def _line_noise(power, table, step_y, step_x, nx, y, x, dy, dx, near, far, buffer):  # type: ignore[no-untyped-def]
    """Return the noise over the rings on a line through (y, x) along (dy, dx), near..far bins away, and the count.

    From the median, so that a strong peak that the line crosses does not count; ln 2 is the median of a unit exponential
    variable.
    """
    n = 0
    for k in range(near, far + 1):
        for sign in (-1, 1):
            i = int(np.rint(y + sign * k * dy))
            j = int(np.rint(x + sign * k * dx))
            if abs(i) > power.shape[0] // 2 or abs(j) > nx // 2:
                continue
            fy = i * step_y
            fx = j * step_x
            if fy * fy + fx * fx < 6.25:
                continue
            buffer[n] = _power_at(power, i, j, nx) / ring_at(table, fy, fx)
            n += 1
    if n < 8:
        return 0.0, 0
    return kth_smallest(buffer[:n], n // 2) / 0.6931472, n


@numba.njit(cache=True, nogil=True)
def _leakage(power, nx, i, j):  # type: ignore[no-untyped-def]
    """Return what leaks from bins along both axes into an untapered wave at (i, j): the tail 1 / (2 pi^2 k^2) of its kernel.

    The tapered spectrum hardly shows it: the streak of an edge, scan-line noise, and large slow variations do it.
    """
    total = 0.0
    for k in range(3, 25):
        share = 1 / (2 * np.pi**2 * k * k)
        for sign in (-1, 1):
            if abs(i + sign * k) <= power.shape[0] // 2:
                total += share * _power_at(power, i + sign * k, j, nx)
            if abs(j + sign * k) <= nx // 2:
                total += share * _power_at(power, i, j + sign * k, nx)
    return total


@numba.njit(cache=True, nogil=True)
def local_density(power, table, ring_samples, step_y, step_x, nx, y, x, buffer):  # type: ignore[no-untyped-def]
    """Return the noise density at (y, x) in bins and the number of independent samples behind it."""
    iy = int(np.rint(y))
    ix = int(np.rint(x))
    ny = power.shape[0]
    half = 10
    n = 0
    here = ring_at(table, y * step_y, x * step_x)
    radius = int(np.sqrt((y * step_y) ** 2 + (x * step_x) ** 2) * 4)
    ring_count = ring_samples[min(radius, ring_samples.size - 1)]
    for dy in range(-half, half + 1):
        i = iy + dy
        if abs(i) > ny // 2 or (abs(i) <= 1 and abs(iy) > 1):
            continue
        for dx in range(-half, half + 1):
            if abs(dy) <= 3 and abs(dx) <= 3:
                continue
            j = ix + dx
            if abs(j) > nx // 2 or (abs(j) <= 1 and abs(ix) > 1):
                continue
            fy = i * step_y
            fx = j * step_x
            if fy * fy + fx * fx < 9.0:
                continue
            buffer[n] = _power_at(power, i, j, nx) / ring_at(table, fy, fx)
            n += 1
    density = here
    samples = ring_count
    if n >= 30:
        # the surroundings against the rings: drawn towards 1 unless they differ by more than their scatter
        local_count = n / 3.5
        excess = trimmed_mean(buffer[:n], 1.0, 6) - 1
        scatter = 1 / local_count
        weight = max(excess * excess - 0.5 * scatter, 0.0) / (excess * excess + scatter)
        density = here * (1 + weight * excess)
        samples = 1 / (1 / ring_count + weight * weight / local_count)
    norm = np.sqrt(y * y + x * x) + 1e-9
    relative = density / here
    best = relative
    best_samples = samples
    # a straight line leaves the arc of its radius by k^2 / 2 r, so its reach grows with the root of the radius
    reach = max(int(min(24.0, 4.0 + np.sqrt(2.0 * norm))), 9)
    for guard in range(14):
        py, px = y, x
        near, far = 4, 14
        if guard < 12:
            # the streak of a straight edge, or its alias, may run in any direction
            angle = np.pi * guard / 12
            dy, dx = np.sin(angle), np.cos(angle)
        elif guard == 12:
            dy, dx = x / norm, -y / norm
            far = reach
        else:
            dy, dx = y / norm, x / norm
        if abs(x) < 4.5 and guard == 6:
            # beside the axis the noise of the scan rows falls off steeply: take the column nearer to it
            px = np.trunc(x)
            far = 20
        if abs(y) < 4.5 and guard == 0:
            py = np.trunc(y)
            far = 20
        value, count = _line_noise(power, table, step_y, step_x, nx, py, px, dy, dx, near, far, buffer)
        # such a median scatters by 1 / (sqrt(n) ln 2); 3.3 of these, with the line's own correlation, stand out
        if count >= 8 and value > best and value > relative * np.exp(3.3 * 1.4427 * np.sqrt(1.6 / count)):
            best = value
            best_samples = count / 1.6 / 2.08
    leaked = _leakage(power, nx, iy, ix)
    if leaked > 0.5 * here * best:
        best += leaked / here
        best_samples = min(best_samples, 30.0)
    return here * best, best_samples


@numba.njit(cache=True, nogil=True)
def _search(  # type: ignore[no-untyped-def]
    power,
    transform,
    block_maxima,
    radii,
    table,
    ring_samples,
    step_y,
    step_x,
    nx,
    bin_y,
    bin_x,
    nearest,
    first_threshold,
    matched_threshold,
    coarse,
    fine,
    out,
):
    """Fill `out` with (row bin, column bin, density, samples, ratio) of the candidates; return how many."""
    ny = power.shape[0]
    columns = power.shape[1]
    found = 0
    bins = np.zeros((2, 56), np.float32)
    score = np.empty(fine.shape[0])
    buffer = np.empty(512, np.float32)
    side = int(np.rint(np.sqrt(fine.shape[0])))
    # the lowest background from a radius outwards refuses most blocks at a glance
    deepest = table.copy()
    for k in range(table.size - 2, -1, -1):
        deepest[k] = min(deepest[k], deepest[k + 1])
    for by in range(block_maxima.shape[0]):
        for bx in range(block_maxima.shape[1]):
            if block_maxima[by, bx] < first_threshold * deepest[radii[by, bx, 0]]:
                continue
            lowest = table[radii[by, bx, 0]]
            for k in range(radii[by, bx, 0], min(radii[by, bx, 1] + 1, table.size)):
                lowest = min(lowest, table[k])
            limit = first_threshold * lowest
            if block_maxima[by, bx] < limit:
                continue
            for row in range(by * 8, min(by * 8 + 8, ny)):
                i = row if row <= ny // 2 else row - ny
                for j in range(bx * 8, min(bx * 8 + 8, columns)):
                    p = power[row, j]
                    if p < limit or p < first_threshold * ring_at(table, i * step_y, j * step_x):
                        continue
                    if (j == 0 or 2 * j == nx) and i < 0:
                        continue
                    # distance from the origin and from the other bins that are their own conjugates
                    ry = abs(i) * bin_y
                    rx = j * bin_x
                    my = (ny / 2 - abs(i)) * bin_y
                    mx = (nx / 2 - j) * bin_x
                    if ry * ry + rx * rx < nearest * nearest or min(ry, my) ** 2 + min(rx, mx) ** 2 < 9.0:
                        continue
                    highest = True
                    for dy in range(-1, 2):
                        for dx in range(-1, 2):
                            if (dy != 0 or dx != 0) and _power_at(power, i + dy, j + dx, nx) >= p:
                                highest = False
                    if not highest:
                        continue
                    _gather(transform, i, j, nx, bins)
                    ring = ring_at(table, i * step_y, j * step_x)
                    best = 0.0
                    for k in range(coarse.shape[0]):
                        best = max(best, _filtered(coarse, k, bins))
                    if best < 0.75 * matched_threshold * ring:
                        continue
                    top = 0
                    for k in range(fine.shape[0]):
                        score[k] = _filtered(fine, k, bins)
                        if score[k] > score[top]:
                            top = k
                    if score[top] < 0.8 * matched_threshold * ring:
                        continue
                    ky, kx = top // side, top % side
                    ky = min(max(ky, 1), side - 2)
                    kx = min(max(kx, 1), side - 2)
                    k = ky * side + kx
                    y = i + (ky - side // 2 + _vertex(score[k - side], score[k], score[k + side])) / (side - 1)
                    x = j + (kx - side // 2 + _vertex(score[k - 1], score[k], score[k + 1])) / (side - 1)
                    density, samples = local_density(power, table, ring_samples, step_y, step_x, nx, y, x, buffer)
                    ratio = score[top] / density
                    if ratio < matched_threshold:
                        continue
                    if found < out.shape[0]:
                        out[found, 0] = y
                        out[found, 1] = x
                        out[found, 2] = density
                        out[found, 3] = samples
                        out[found, 4] = ratio
                        found += 1
    return found


def find_candidates(
    spectrum: PowerSpectrum,
    background: RingBackground,
    footprint: Footprint,
    *,
    threshold: float,
    smallest_distance_bins: float,
) -> Candidates:
    """Find the places in a spectrum that may hold a fringe.

    Parameters
    ----------
    spectrum : PowerSpectrum
    background : RingBackground
    footprint : Footprint
        Of the region that was transformed.
    threshold : float
        Final detection threshold (`detection_threshold`); candidates pass a lowered one.
    smallest_distance_bins : float
        Nearest distance to the origin, in bins of the region (1 / width).

    Returns
    -------
    Candidates
        In no particular order.
    """
    ny, nx = spectrum.shape
    matched = _matched_filter(footprint)
    out = np.empty((_MOST_CANDIDATES, 5))
    count = _search(
        spectrum.power, spectrum.transform, spectrum.block_maxima,
        _block_radii(spectrum.shape, background.step, 4), background.density, background.samples,
        *background.step, nx, footprint.shape[0] / ny, footprint.shape[1] / nx, smallest_distance_bins,
        np.float32(_FIRST_PASS * threshold), _MATCHED_PASS * threshold, matched.coarse, matched.fine, out,
    )  # fmt: skip
    found = out[:count]
    return Candidates(found[:, :2] / (ny, nx), found[:, 2], found[:, 3], found[:, 4])


def density_at(
    spectrum: PowerSpectrum, background: RingBackground, frequency: NDArray[np.float64]
) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    """Return the noise power density at some frequencies and the number of independent samples each rests on.

    Parameters
    ----------
    spectrum : PowerSpectrum
    background : RingBackground
    frequency : ndarray, shape (n, 2)
        (row, column) in cycles per pixel.

    Returns
    -------
    density, samples : ndarray, shape (n,)
    """
    out = np.empty((2, len(frequency)))
    _densities(
        spectrum.power, background.density, background.samples, *background.step, spectrum.shape[1],
        frequency * spectrum.shape, out,
    )  # fmt: skip
    return out[0], out[1]


def tapered_maximum(spectrum: PowerSpectrum, frequency: NDArray[np.float64]) -> NDArray[np.float64]:
    """Return where the tapered power is highest within two bins of a frequency, in cycles per pixel.

    Parameters
    ----------
    spectrum : PowerSpectrum
    frequency : ndarray, shape (2,)
        (row, column) in cycles per pixel.

    Returns
    -------
    ndarray, shape (2,)
        Refined by the centre of gravity of the 3 x 3 bins around the maximum.
    """
    nx = spectrum.shape[1]
    i, j = (int(v) for v in np.rint(frequency * spectrum.shape))
    around = np.array(
        [[_power_at(spectrum.power, i + a, j + b, nx) for b in range(-3, 4)] for a in range(-3, 4)], dtype=float
    )
    row, column = np.unravel_index(around[1:-1, 1:-1].argmax(), (5, 5))
    patch = around[row : row + 3, column : column + 3]
    step = np.arange(-1, 2)
    centre = np.array([step @ patch.sum(axis=1), step @ patch.sum(axis=0)]) / patch.sum()
    return np.asarray((np.array([i + row - 2, j + column - 2]) + centre) / spectrum.shape)


def matched_ratio_at(
    spectrum: PowerSpectrum, footprint: Footprint, frequency: NDArray[np.float64]
) -> NDArray[np.float64]:
    """Return the matched-filter power at known frequencies; over the noise density it is the power ratio T.

    Parameters
    ----------
    spectrum : PowerSpectrum
    footprint : Footprint
        Of the region that was transformed.
    frequency : ndarray, shape (n, 2)
        (row, column) in cycles per pixel.

    Returns
    -------
    ndarray, shape (n,)
    """
    out = np.empty(len(frequency))
    _filter_at(spectrum.transform, spectrum.shape[1], frequency * spectrum.shape, _matched_filter(footprint).fine, out)
    return out


@numba.njit(cache=True, nogil=True)
def _filter_at(transform, nx, place, fine, out):  # type: ignore[no-untyped-def]
    bins = np.zeros((2, 56), np.float32)
    side = int(np.rint(np.sqrt(fine.shape[0])))
    for k in range(place.shape[0]):
        i, j = int(np.rint(place[k, 0])), int(np.rint(place[k, 1]))
        _gather(transform, i, j, nx, bins)
        ky = int(np.rint((place[k, 0] - i) * (side - 1))) + side // 2
        kx = int(np.rint((place[k, 1] - j) * (side - 1))) + side // 2
        out[k] = _filtered(fine, ky * side + kx, bins)


@numba.njit(cache=True, nogil=True)
def _densities(power, table, ring_samples, step_y, step_x, nx, place, out):  # type: ignore[no-untyped-def]
    buffer = np.empty(512, np.float32)
    for k in range(place.shape[0]):
        out[0, k], out[1, k] = local_density(
            power, table, ring_samples, step_y, step_x, nx, place[k, 0], place[k, 1], buffer
        )


@contextmanager
def waves_removed(
    spectrum: PowerSpectrum, footprint: Footprint, frequency: NDArray[np.float64], amplitude: NDArray[np.complex128]
) -> Iterator[PowerSpectrum]:
    """Take fitted waves out of the bins around them, for as long as the context lasts.

    In place, since a copy of a large spectrum would cost as much as a tenth of its transform.

    Parameters
    ----------
    spectrum : PowerSpectrum
    footprint : Footprint
    frequency : ndarray, shape (n, 2)
        (row, column) in cycles per pixel.
    amplitude : ndarray of complex128, shape (n,)
        As in `JointFit`.
    """
    window = _window_response(footprint)
    shape = np.array(spectrum.shape)
    middle = (np.array(footprint.shape) - 1) / 2
    # never round a small spectrum to the same bin again
    reach = min(window.reach, (shape[0] - 1) // 2), min(window.reach, (shape[1] - 1) // 2)
    saved = np.empty((len(frequency), 2 * reach[0] + 1, 2 * reach[1] + 1), np.complex64)
    block_maxima = spectrum.block_maxima.copy()
    scale = np.float32(1 / taper(footprint).power)
    # of the two opposite vectors of a wave the one whose column is not negative
    flipped = frequency[:, 1] < 0
    place = np.where(flipped[:, None], -frequency, frequency) * shape
    amplitude = np.where(flipped, np.conj(amplitude), amplitude)
    arguments = spectrum.transform, spectrum.power, scale, spectrum.shape[1], *reach, place
    _remove(
        *arguments, amplitude, middle / shape, window.rows, window.columns, window.plane, saved, spectrum.block_maxima
    )
    try:
        yield spectrum
    finally:
        _restore(*arguments, saved)
        spectrum.block_maxima[:] = block_maxima


@dataclass(frozen=True, eq=False, slots=True)
class _WindowResponse:
    """Transform of a window about its middle, in steps of 1 / 16 bin (rows, columns) or 1 / 8 bin (plane)."""

    rows: NDArray[np.float64]
    columns: NDArray[np.float64]
    plane: NDArray[np.complex128]
    reach: int


@lru_cache(maxsize=32)
def _window_response(footprint: Footprint) -> _WindowResponse:
    window = taper(footprint)
    middle = (np.array(footprint.shape) - 1) / 2 / window.transform_shape
    if window.oblique is None:
        reach = 20
        shift = np.arange(-16 * (reach + 2), 16 * (reach + 2) + 1) / 16
        lines = []
        for values, length, centre in zip((window.rows, window.columns), window.transform_shape, middle, strict=True):
            # a transform padded to 16 times its length has the steps wanted
            padded = scipy.fft.ifft(values.astype(float), 16 * length, norm="forward")
            lines.append(
                (padded[np.arange(-(len(shift) // 2), len(shift) // 2 + 1)] * np.exp(-2j * np.pi * shift * centre)).real
            )
        rows, columns = lines
        return _WindowResponse(
            rows / rows.max(), columns / columns.max() * window.total, np.empty((0, 0), complex), reach
        )
    reach = 8
    shift = np.arange(-8 * (reach + 2), 8 * (reach + 2) + 1) / 8
    plane = window_transform(footprint, shift, shift, power=1)
    plane *= np.exp(-2j * np.pi * (shift[:, None] * middle[0] + shift[None] * middle[1]))
    return _WindowResponse(np.empty(0), np.empty(0), plane, reach)


@numba.njit(cache=True, nogil=True, inline="always")
def _cubic_weights(f):  # type: ignore[no-untyped-def]
    """Return the four Lagrange weights of cubic interpolation at fraction f between the middle two points."""
    return (
        -f * (f - 1) * (f - 2) / 6,
        (f + 1) * (f - 1) * (f - 2) / 2,
        -(f + 1) * f * (f - 2) / 2,
        (f + 1) * f * (f - 1) / 6,
    )


@numba.njit(cache=True, nogil=True)
def _remove(  # type: ignore[no-untyped-def]
    transform, power, scale, nx, reach_y, reach_x, place, amplitude, middle, rows, columns, plane, saved, block_maxima
):
    ny = transform.shape[0]
    touched = np.zeros(block_maxima.shape, np.bool_)
    line_x = np.empty(2 * reach_x + 1, np.complex128)
    for k in range(place.shape[0]):
        iy, ix = int(np.rint(place[k, 0])), int(np.rint(place[k, 1]))
        for b in range(2 * reach_x + 1):
            j = ix + b - reach_x
            line_x[b] = np.exp(-2j * np.pi * j * middle[1])
            if columns.size:
                line_x[b] *= _interpolated(columns, (place[k, 1] - j) * 16)
        for a in range(2 * reach_y + 1):
            i = iy + a - reach_y
            factor = amplitude[k] * np.exp(-2j * np.pi * i * middle[0])
            if rows.size:
                factor *= _interpolated(rows, (place[k, 0] - i) * 16)
            row, opposite = i % ny, -i % ny
            for b in range(2 * reach_x + 1):
                j = ix + b - reach_x
                value = factor * line_x[b]
                if plane.size:
                    value *= _interpolated_in_plane(plane, (place[k, 0] - i) * 8, (place[k, 1] - j) * 8)
                # the other half of the spectrum is stored as the conjugate of this one
                y, x = row, j
                if j < 0:
                    y, x, value = opposite, -j, np.conj(value)
                elif 2 * j > nx:
                    y, x, value = opposite, nx - j, np.conj(value)
                z = transform[y, x]
                saved[k, a, b] = z
                z = np.complex64(z - value)
                transform[y, x] = z
                power[y, x] = (z.real * z.real + z.imag * z.imag) * scale
                touched[y >> 3, x >> 3] = True
    for by in range(touched.shape[0]):
        for bx in range(touched.shape[1]):
            if touched[by, bx]:
                highest = np.float32(0)
                for y in range(8 * by, min(8 * by + 8, ny)):
                    for x in range(8 * bx, min(8 * bx + 8, power.shape[1])):
                        highest = max(highest, power[y, x])
                block_maxima[by, bx] = highest


@numba.njit(cache=True, nogil=True, inline="always")
def _interpolated(line, steps):  # type: ignore[no-untyped-def]
    """Return the value at a number of steps from the middle of a line."""
    p = steps + line.size // 2
    q = int(np.floor(p))
    w = _cubic_weights(p - q)
    return w[0] * line[q - 1] + w[1] * line[q] + w[2] * line[q + 1] + w[3] * line[q + 2]


@numba.njit(cache=True, nogil=True)
def _interpolated_in_plane(plane, steps_y, steps_x):  # type: ignore[no-untyped-def]
    """Return the value at a number of steps from the middle of a plane."""
    p = steps_y + plane.shape[0] // 2
    q = int(np.floor(p))
    wy = _cubic_weights(p - q)
    p = steps_x + plane.shape[1] // 2
    r = int(np.floor(p))
    wx = _cubic_weights(p - r)
    value = 0j
    for m in range(4):
        for n in range(4):
            value += wy[m] * wx[n] * plane[q - 1 + m, r - 1 + n]
    return value


@numba.njit(cache=True, nogil=True)
def _restore(transform, power, scale, nx, reach_y, reach_x, place, saved):  # type: ignore[no-untyped-def]
    ny = transform.shape[0]
    # backwards, so that where two squares overlap the first saved value comes last
    for k in range(place.shape[0] - 1, -1, -1):
        iy, ix = int(np.rint(place[k, 0])), int(np.rint(place[k, 1]))
        for a in range(2 * reach_y, -1, -1):
            i = iy + a - reach_y
            row, opposite = i % ny, -i % ny
            for b in range(2 * reach_x, -1, -1):
                j = ix + b - reach_x
                y, x = row, j
                if j < 0:
                    y, x = opposite, -j
                elif 2 * j > nx:
                    y, x = opposite, nx - j
                z = saved[k, a, b]
                transform[y, x] = z
                power[y, x] = (z.real * z.real + z.imag * z.imag) * scale
