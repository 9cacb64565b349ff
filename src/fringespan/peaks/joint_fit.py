"""Joint weighted least squares of all peaks of a region: amplitudes, phases and reciprocal vectors, with covariance.

The model of the detrended pixels is a sum of plane waves, 2 Re(c exp(2 pi i (v y + u x))), coordinates from the middle of
the rectangle. All peaks are fitted together because a neighbour's side lobes, of an untapered region, would pull a peak
fitted alone; untapered, because any taper costs precision. In white noise the result is at the Cramer-Rao bound [1]_ (from
memory), var(u) = 6 S / (pi^2 A^2 ny nx (nx^2 - 1)) for a rectangle.

References
----------
.. [1] D. C. Rife, R. R. Boorstyn, "Single-tone parameter estimation from discrete-time observations", IEEE Trans. Inf.
   Theory 20 (1974) 591-598.
"""

from __future__ import annotations

from dataclasses import dataclass

import numba
import numpy as np
from numpy.typing import NDArray

from fringespan.peaks.demodulation import Demodulation, demodulate, turned
from fringespan.region import Footprint
from fringespan.spectrum import RegionPixels

__all__ = ["JointFit", "fit_jointly"]

_MOST_STEPS = 8
_PRIOR_BINS = 0.6
"""Standard deviation, in bins, of where detection says a peak is; it only matters for peaks that are hardly there."""

_COARSE = 4e-4
"""Largest (block / region)^2 at which sums over blocks are trusted beside much stronger waves: 200 pixels in fours."""


@dataclass(frozen=True, eq=False, slots=True)
class JointFit:
    """Fitted plane waves.

    Attributes
    ----------
    frequency : ndarray, shape (n, 2)
        (row, column) in cycles per pixel.
    amplitude : ndarray of complex128, shape (n,)
        Half the real amplitude, with the phase at the middle of the region's rectangle.
    covariance : ndarray, shape (2n, 2n)
        Of all frequencies, in the order row, column of the first, row, column of the second ...
    power_ratio : ndarray, shape (n,)
        T = A^2 N / (4 S): fitted power over the noise.
    demodulation : Demodulation
        At frequencies a small step before the last.
    """

    frequency: NDArray[np.float64]
    amplitude: NDArray[np.complex128]
    covariance: NDArray[np.float64]
    power_ratio: NDArray[np.float64]
    demodulation: Demodulation


@numba.njit(cache=True, nogil=True)
def _line_sums(n, frequency, out):  # type: ignore[no-untyped-def]
    """Fill out with the sums of y^m exp(2 pi i f y), m = 0, 1, 2, over n points around 0.

    Closed form: the Dirichlet kernel sin(n a) / sin(a), a = pi f, and its derivatives; summed directly where the closed
    form cancels.
    """
    turns = np.rint(frequency)
    f = frequency - turns
    a = np.pi * f
    if a == 0:
        # each wave against itself
        s0, s1, s2 = float(n), 0.0, n * (n * n - 1.0) / 12
    elif abs(n * a) < 1.0:
        s0 = 0.0
        s1 = 0.0
        s2 = 0.0
        # the positions are symmetric about 0, so only cosines of even and sines of odd powers remain
        for k in range(n // 2):
            y = (n - 1) / 2 - k
            c = np.cos(2 * a * y)
            s0 += 2 * c
            s1 += 2 * y * np.sin(2 * a * y)
            s2 += 2 * y * y * c
        if n % 2:
            s0 += 1.0
    else:
        sin_a = np.sin(a)
        cos_a = np.cos(a)
        s0 = np.sin(n * a) / sin_a
        first = (n * np.cos(n * a) - s0 * cos_a) / sin_a
        second = (-n * n * np.sin(n * a) - 2 * first * cos_a + s0 * sin_a) / sin_a
        s1 = -first / 2
        s2 = -second / 4
    # half-integer positions change sign when the frequency is shifted by one
    if n % 2 == 0 and turns % 2 != 0:
        s0, s1, s2 = -s0, -s1, -s2
    out[0] = s0
    out[1] = 1j * s1
    out[2] = s2


@numba.njit(cache=True, nogil=True)
def _rectangle_sums(ny, nx, fy, fx, sy, sx, out):  # type: ignore[no-untyped-def]
    """Fill out with the sums of 1, y, x, yy, yx, xx times exp(2 pi i (fy y + fx x)) over a rectangle."""
    _line_sums(ny, fy, sy)
    _line_sums(nx, fx, sx)
    out[0] = sy[0] * sx[0]
    out[1] = sy[1] * sx[0]
    out[2] = sy[0] * sx[1]
    out[3] = sy[2] * sx[0]
    out[4] = sy[1] * sx[1]
    out[5] = sy[0] * sx[2]


@numba.njit(cache=True, nogil=True)
def _outline_sums(spans, ny, nx, fy, fx, prefix, out):  # type: ignore[no-untyped-def]
    """Fill out with the same sums over the pixels of some spans."""
    middle_y = (ny - 1) / 2
    middle_x = (nx - 1) / 2
    turn = np.exp(2j * np.pi * fx)
    wave = np.exp(-2j * np.pi * fx * middle_x)
    prefix[0, :] = 0
    for x in range(nx):
        p = x - middle_x
        prefix[x + 1, 0] = prefix[x, 0] + wave
        prefix[x + 1, 1] = prefix[x, 1] + p * wave
        prefix[x + 1, 2] = prefix[x, 2] + p * p * wave
        wave *= turn
    out[:] = 0
    down = np.exp(2j * np.pi * fy)
    row = -1
    wave = 1 + 0j
    y = 0.0
    for k in range(spans.shape[0]):
        if spans[k, 0] != row:
            # from row to row a product will do; now and then afresh, so that rounding does not add up
            if spans[k, 0] == row + 1 and row % 32 != 31:
                wave *= down
            else:
                wave = np.exp(2j * np.pi * fy * (spans[k, 0] - middle_y))
            row = spans[k, 0]
            y = row - middle_y
        x0, x1 = spans[k, 1], spans[k, 2]
        s0 = wave * (prefix[x1, 0] - prefix[x0, 0])
        s1 = wave * (prefix[x1, 1] - prefix[x0, 1])
        s2 = wave * (prefix[x1, 2] - prefix[x0, 2])
        out[0] += s0
        out[1] += y * s0
        out[2] += s1
        out[3] += y * y * s0
        out[4] += y * s1
        out[5] += s2


_DEGREE = np.array([[0, 1, 2], [1, 3, 4], [2, 4, 5]])


@numba.njit(cache=True, nogil=True)
def wave_sums(spans, is_rectangle, ny, nx, frequency):  # type: ignore[no-untyped-def]
    """Return the six sums for the difference (0) and the sum (1) of every pair of frequencies, shape (2, n, n, 6)."""
    n = frequency.shape[0]
    sums = np.empty((2, n, n, 6), np.complex128)
    sy = np.empty(3, np.complex128)
    sx = np.empty(3, np.complex128)
    prefix = np.empty((1 if is_rectangle else nx + 1, 3), np.complex128)
    for j in range(n):
        for k in range(j + 1):
            for sign in range(2):
                fy = frequency[j, 0] + (2 * sign - 1) * frequency[k, 0]
                fx = frequency[j, 1] + (2 * sign - 1) * frequency[k, 1]
                out = sums[sign, j, k]
                if is_rectangle:
                    _rectangle_sums(ny, nx, fy, fx, sy, sx, out)
                else:
                    _outline_sums(spans, ny, nx, fy, fx, prefix, out)
                for m in range(6):
                    sums[sign, k, j, m] = np.conj(out[m]) if sign == 0 else out[m]
    return sums


@numba.njit(cache=True, nogil=True)
def _solve(sums, moments, density, prior_y, prior_x, amplitude, step, normal):  # type: ignore[no-untyped-def]
    """One Gauss-Newton step: fill amplitude (complex, n), step (n, 2) and the normal matrix (4n, 4n)."""
    n = moments.shape[0]
    # amplitudes first: the derivatives with respect to position need them
    linear = np.empty((2 * n, 2 * n))
    right = np.empty(2 * n)
    for j in range(n):
        for a in range(2):
            pa = 1 + 0j if a == 0 else 1j
            right[2 * j + a] = 2 * (pa * np.conj(moments[j, 0])).real
            for k in range(n):
                for b in range(2):
                    pb = 1 + 0j if b == 0 else 1j
                    value = pa * np.conj(pb) * sums[0, j, k, 0] + pa * pb * sums[1, j, k, 0]
                    linear[2 * j + a, 2 * k + b] = 2 * value.real
    for j in range(2 * n):
        linear[j, j] *= 1 + 1e-12
    start = np.linalg.solve(linear, right)
    for j in range(n):
        amplitude[j] = start[2 * j] + 1j * start[2 * j + 1]
    residual = np.empty(4 * n)
    factor = np.empty((n, 4), np.complex128)
    for j in range(n):
        factor[j, 0] = 1
        factor[j, 1] = 1j
        factor[j, 2] = 2j * np.pi * amplitude[j]
        factor[j, 3] = 2j * np.pi * amplitude[j]
    for j in range(n):
        for a in range(4):
            da = max(a - 1, 0)
            residual[4 * j + a] = 2 * (factor[j, a] * np.conj(moments[j, da])).real
            for k in range(n):
                for b in range(4):
                    db = max(b - 1, 0)
                    m = _DEGREE[da, db]
                    value = (
                        factor[j, a] * np.conj(factor[k, b]) * sums[0, j, k, m]
                        + factor[j, a] * factor[k, b] * sums[1, j, k, m]
                    )
                    normal[4 * j + a, 4 * k + b] = 2 * value.real
    for j in range(4 * n):
        for k in range(n):
            residual[j] -= normal[j, 4 * k] * amplitude[k].real + normal[j, 4 * k + 1] * amplitude[k].imag
    damped = normal.copy()
    for j in range(n):
        damped[4 * j, 4 * j] *= 1 + 1e-12
        damped[4 * j + 1, 4 * j + 1] *= 1 + 1e-12
        damped[4 * j + 2, 4 * j + 2] += density[j] / prior_y**2
        damped[4 * j + 3, 4 * j + 3] += density[j] / prior_x**2
    change = np.linalg.solve(damped, residual)
    for j in range(n):
        amplitude[j] += change[4 * j] + 1j * change[4 * j + 1]
        step[j, 0] = change[4 * j + 2]
        step[j, 1] = change[4 * j + 3]
    return damped


@numba.njit(cache=True, nogil=True)
def _frequency_covariance(damped, density):  # type: ignore[no-untyped-def]
    """Return the covariance of the frequencies, (2n, 2n): the inverse normal matrix times the noise at each peak."""
    n = density.size
    inverse = np.linalg.inv(damped)
    covariance = np.empty((2 * n, 2 * n))
    for j in range(n):
        for k in range(n):
            scale = np.sqrt(density[j] * density[k])
            for a in range(2):
                for b in range(2):
                    covariance[2 * j + a, 2 * k + b] = scale * inverse[4 * j + 2 + a, 4 * k + 2 + b]
    return covariance


def fit_jointly(
    pixels: RegionPixels, start: Demodulation, density: NDArray[np.float64], threshold: NDArray[np.float64]
) -> tuple[JointFit, NDArray[np.intp]]:
    """Fit plane waves to a region, starting from frequencies within about half a bin of the truth.

    Parameters
    ----------
    pixels : RegionPixels
    start : Demodulation
        Of these pixels at the n frequencies to start from.
    density : ndarray, shape (n,)
        Noise power density at each.
    threshold : ndarray, shape (n,)
        Power ratio that each must reach to stay.

    Returns
    -------
    JointFit
        Of those that stay.
    kept : ndarray of int, shape (m,)
        Which of the n they are.
    """
    kept = np.arange(len(start.frequency))
    demodulation = start
    bins = 1 / np.array(pixels.footprint.shape)
    coarseness = (start.block / min(pixels.footprint.shape)) ** 2
    for round_number in range(_MOST_STEPS):
        while True:
            amplitude, step, covariance = solve_waves(pixels.footprint, demodulation, density[kept])
            power_ratio = np.abs(amplitude) ** 2 * pixels.footprint.count / density[kept]
            # the first fit is from a rough start; who is far below now will not rise above
            strong = power_ratio >= threshold[kept] * (0.85 if round_number == 0 else 1.0)
            if strong.all():
                break
            kept, demodulation = kept[strong], demodulation.part(strong)
        if len(kept) == 0:
            break
        in_bins = step / bins
        longest = np.abs(in_bins).max(axis=1)
        sigma = np.sqrt(np.diag(covariance)).reshape(-1, 2) / bins
        # the error left after a step of d bins is of third order in d
        settled = (5 * longest**3 < 0.05 * sigma.min(axis=1)) | (longest < 1e-4)
        if settled.all() and (power_ratio >= threshold[kept]).all():
            break
        # never further than a linear step can be trusted: half a bin
        step *= np.minimum(1, 0.5 / np.maximum(longest, 1e-9))[:, None]
        if round_number == _MOST_STEPS - 1:
            break
        # a step that the sums over blocks can follow needs no new pass over the pixels
        short = ~settled & (10 * longest * coarseness < 0.05 * sigma.min(axis=1)) & (coarseness < _COARSE)
        far = ~settled & ~short
        if short.any():
            demodulation = demodulation.replaced(short, turned(demodulation.part(short), pixels.footprint, step[short]))
        if far.any():
            demodulation = demodulation.replaced(far, demodulate(pixels, (demodulation.frequency + step)[far]))
    frequency = demodulation.frequency + step if len(kept) else np.empty((0, 2))
    return JointFit(frequency, amplitude, covariance, power_ratio, demodulation), kept


def solve_waves(
    footprint: Footprint, demodulation: Demodulation, density: NDArray[np.float64]
) -> tuple[NDArray[np.complex128], NDArray[np.float64], NDArray[np.float64]]:
    """Return the amplitudes, the steps of the frequencies and their covariance that follow from demodulated sums."""
    n = len(demodulation.frequency)
    ny, nx = footprint.shape
    sums = wave_sums(footprint.spans, footprint.mask is None, ny, nx, demodulation.frequency)
    amplitude = np.empty(n, np.complex128)
    step = np.empty((n, 2))
    normal = np.empty((4 * n, 4 * n))
    priors = _PRIOR_BINS / ny, _PRIOR_BINS / nx
    damped = _solve(sums, demodulation.moments, density, *priors, amplitude, step, normal)
    return amplitude, step, _frequency_covariance(damped, density)
