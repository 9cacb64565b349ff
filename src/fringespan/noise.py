"""The noise of a spectrum: its power density at any reciprocal vector, with peaks left out.

Two steps. Rings around the origin give a smooth background in one dimension, robust against peaks. Where a peak is to
be judged, the power around it, relative to the rings, gives the density there; three more samples (along the arc of the
same radius, along the radial line, along the two axes) replace it where they are clearly higher, since astigmatic
transfer rings, the streak of an edge, and scan-line noise all put more noise on a peak than its surroundings show.
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import lru_cache

import numba
import numpy as np
from numpy.typing import NDArray

from fringespan.spectrum import PowerSpectrum

__all__ = ["RingBackground", "ring_background", "rings_at"]

_SAMPLES = 144
_INDEPENDENT_SHARE = 1.2
"""Independent samples per bin of a ring: the window makes neighbours alike (1 / 2.2), smoothing adds other rings (2.6)."""

_TABLE_STEPS = 4
"""Entries of the background table per ring unit."""


@dataclass(frozen=True, eq=False, slots=True)
class RingBackground:
    """Smooth noise power density as a function of the distance from the origin.

    Attributes
    ----------
    density : ndarray of float32, shape (n,)
        Density at radius k / 4 ring units.
    samples : ndarray of float32, shape (n,)
        Number of independent samples that each rests on.
    step : (float, float)
        Ring units per bin along (row, column); a ring unit is one bin of the axis with the wider bins.
    """

    density: NDArray[np.float32]
    samples: NDArray[np.float32]
    step: tuple[float, float]


@dataclass(frozen=True, eq=False, slots=True)
class _Rings:
    """Which bins sample which ring of a transform shape."""

    radius: NDArray[np.float64]
    samples: NDArray[np.int32]
    counts: NDArray[np.int32]
    table_position: NDArray[np.float64]
    table_samples: NDArray[np.float32]
    step: tuple[float, float]


@lru_cache(maxsize=16)
def _rings(shape: tuple[int, int], aspect: float) -> _Rings:
    """Choose the samples of each ring; `aspect` is the column pixel size over the row pixel size."""
    ny, nx = shape
    frequency_step = np.array([1 / ny, 1 / (nx * aspect)])
    step = frequency_step / frequency_step.max()
    farthest = float(np.hypot(ny // 2 * step[0], nx // 2 * step[1]))
    edges = [2.5]
    while edges[-1] < farthest:
        r = edges[-1]
        # about twenty bins' worth of arc where there is so little, one unit in the middle, 1/128 of the radius far out
        edges.append(r + max(1.0, min(20 / r, 0.35 * r), r / 128))
    edge = np.array(edges)
    samples = np.zeros((len(edges) - 1, _SAMPLES), np.int32)
    counts = np.zeros(len(edges) - 1, np.int32)
    _choose_samples(np.random.default_rng(ny * 65537 + nx), edge, ny, nx, step[0], step[1], samples, counts)
    middle = (edge[:-1] + edge[1:]) / 2
    # a low value by chance makes ghosts; in the corners, unlike in the middle, a ring can be done without
    kept = counts >= np.where(middle < farthest / 2, 8, 24)
    samples, counts, middle = samples[kept], counts[kept], middle[kept]
    table = np.arange(int(farthest * _TABLE_STEPS) + 2 * _TABLE_STEPS) / _TABLE_STEPS
    # corners hold few bins: beyond the last well-sampled ring its value goes on
    position = np.interp(np.log(np.maximum(table, 0.5)), np.log(middle), np.arange(len(middle), dtype=float))
    independent = _INDEPENDENT_SHARE * np.interp(position, np.arange(len(middle)), counts)
    return _Rings(
        middle,
        samples,
        counts,
        position,
        independent.astype(np.float32),
        (float(step[0]), float(step[1])),
    )


@numba.njit(cache=True, nogil=True)
def _choose_samples(random, edges, ny, nx, step_y, step_x, samples, counts):  # type: ignore[no-untyped-def]
    """Fill in distinct bins of each ring, as places in the flattened spectrum: all of a small ring's, else a random choice.

    The axes carry scan-line noise and the leakage of edges, which the plane between them does not have: left out.
    """
    width = nx // 2 + 1
    most = samples.shape[1]
    taken = np.zeros((ny, width), np.bool_)
    # small rings: go through all bins near the origin
    near = 24.0
    last_row = min(int(near / step_y) + 1, (ny - 1) // 2)
    last_column = min(int(near / step_x) + 1, nx // 2)
    seen = np.zeros(counts.size, np.int64)
    for i in range(-last_row, last_row + 1):
        for j in range(2, last_column + 1):
            radius = np.sqrt((i * step_y) ** 2 + (j * step_x) ** 2)
            if abs(i) <= 1 or radius < edges[0] or radius >= near:
                continue
            k = np.searchsorted(edges, radius, side="right") - 1
            if k >= counts.size or edges[k + 1] > near:
                continue
            # reservoir: each bin of the ring has the same chance to stay
            seen[k] += 1
            if counts[k] < most:
                samples[k, counts[k]] = (i % ny) * width + j
                counts[k] += 1
            else:
                place = random.integers(0, seen[k])
                if place < most:
                    samples[k, place] = (i % ny) * width + j
    for k in range(counts.size):
        inner, outer = edges[k], edges[k + 1]
        if outer > near:
            for _ in range(3 * most):
                radius = np.sqrt(random.uniform(inner * inner, outer * outer))
                angle = random.uniform(-np.pi / 2, np.pi / 2)
                i = int(np.rint(radius * np.sin(angle) / step_y))
                j = int(np.rint(radius * np.cos(angle) / step_x))
                if abs(i) <= 1 or j <= 1 or abs(i) > (ny - 1) // 2 or j > nx // 2 or taken[i % ny, j]:
                    continue
                taken[i % ny, j] = True
                samples[k, counts[k]] = (i % ny) * width + j
                counts[k] += 1
                if counts[k] == most:
                    break
        # in the order of memory, so that the gathering reads ahead
        samples[k, : counts[k]] = np.sort(samples[k, : counts[k]])


@numba.njit(cache=True, nogil=True)
def kth_smallest(values, k):  # type: ignore[no-untyped-def]
    """Return the k-th smallest value, reordering `values`."""
    low, high = 0, values.size - 1
    while low < high:
        pivot = values[(low + high) // 2]
        i, j = low, high
        while i <= j:
            while values[i] < pivot:
                i += 1
            while values[j] > pivot:
                j -= 1
            if i <= j:
                values[i], values[j] = values[j], values[i]
                i += 1
                j -= 1
        if k <= j:
            high = j
        elif k >= i:
            low = i
        else:
            break
    return values[k]


@numba.njit(cache=True, nogil=True, fastmath={"reassoc", "contract", "nsz", "arcp"})
def trimmed_mean(values, start, rounds):  # type: ignore[no-untyped-def]
    """Return the mean of exponentially distributed values, robust against a minority of high ones.

    Values above four times the mean are left out; 0.92537 is the mean of a unit exponential variable below 4. `start` is
    a first guess of the mean.
    """
    centre = np.float32(start)
    for _ in range(rounds):
        limit = np.float32(4) * centre
        total = np.float32(0)
        kept = np.float32(0)
        for v in values:
            inside = np.float32(1) if v < limit else np.float32(0)
            total += inside * v
            kept += inside
        if kept < 0.25 * values.size:
            # the guess was far too low: most values are above it
            centre *= np.float32(4)
        else:
            centre = max(total / kept / np.float32(0.92537), np.float32(1e-30))
    return centre


@numba.njit(cache=True, nogil=True)
def _ring_density(power, samples, counts, position, table):  # type: ignore[no-untyped-def]
    """Fill the table of the background from the log of each ring's clipped mean, smoothed over neighbouring rings."""
    n = counts.size
    flat = power.ravel()
    logs = np.empty(n)
    buffer = np.empty(samples.shape[1], np.float32)
    centre = np.float32(0)
    for k in range(n):
        for i in range(counts[k]):
            buffer[i] = flat[samples[k, i]]
        values = buffer[: counts[k]]
        if k == 0:
            centre = max(kth_smallest(values, values.size // 2) / np.float32(0.6931472), np.float32(1e-30))
        # from ring to ring the background changes little, so the last one is a guess that no peak has spoiled
        centre = trimmed_mean(values, centre, 3)
        logs[k] = np.log(centre)
    # binomial means of three, first of neighbours, then of neighbours' neighbours, but not across the bend of a transfer
    # ring that stands out of the scatter
    smooth = logs.copy()
    scatter_left = 2.2
    for reach in (1, 2):
        for k in range(reach, n - reach):
            bend = logs[k - reach] - 2 * logs[k] + logs[k + reach]
            scatter = 6 * scatter_left / counts[k]
            smooth[k] = logs[k] + 0.25 * bend * scatter / (scatter + max(bend * bend - scatter, 0.0))
        logs[:] = smooth
        scatter_left *= 0.5
    for i in range(table.size):
        p = position[i]
        k = min(int(p), n - 2) if n > 1 else 0
        f = p - k
        table[i] = np.exp(smooth[k] + f * (smooth[k + 1] - smooth[k])) if n > 1 else np.exp(smooth[k])


def ring_background(spectrum: PowerSpectrum, aspect: float = 1.0) -> RingBackground:
    """Estimate the smooth background of a spectrum.

    Parameters
    ----------
    spectrum : PowerSpectrum
    aspect : float, optional
        Column pixel size over row pixel size, so that rings are circles in 1/nm.

    Returns
    -------
    RingBackground
    """
    rings = _rings(spectrum.shape, aspect)
    table = np.empty(rings.table_position.size, np.float32)
    _ring_density(spectrum.power, rings.samples, rings.counts, rings.table_position, table)
    return RingBackground(table, rings.table_samples, rings.step)


def rings_at(background: RingBackground, place: NDArray[np.float64]) -> NDArray[np.float64]:
    """Return the background at places given in bins (row, column), shape (n, 2)."""
    radius = np.sqrt(((place * background.step) ** 2).sum(axis=1)) * _TABLE_STEPS
    return np.asarray(background.density[np.minimum(radius.astype(int), len(background.density) - 1)], dtype=float)
