"""Fringes of a crystal that does not fill its region evenly: where they are really measured, and how wrong they may be.

Thickness that changes over a particle, together with the lens, moves its fringes by a fraction of a period; over an
extent L that looks like a change of |g| by kappa / L. One picture cannot reveal that error, but it shows how large it may
be: by the phase that departs from one plane wave (phi), by an amplitude without a plateau (p), and by how badly the
reflections agree on one lattice (kappa_lattice). The relations between these and the error were fitted to 140 simulated
particles (multislice; domes, octahedra, cubes, slabs, wedges of five crystals, corrected and uncorrected lenses).

That the spacings of small particles deceive is known: J.-O. Malm, M. A. O'Keefe, "Deceptive 'lattice spacings' in
high-resolution micrographs of metal nanoparticles", Ultramicroscopy 68 (1997) 13-23 (title from memory).
"""

from __future__ import annotations

from dataclasses import dataclass

import numba
import numpy as np
import scipy.ndimage
from numpy.typing import NDArray

from fringespan.extent import FringeField, crystal_mask, filled_part

__all__ = [
    "CrystalFit",
    "CrystalUncertainty",
    "crystal_uncertainty",
    "fit_crystal",
    "lattice_tolerance",
    "smoothing_width_px",
    "why_broken",
]

_TAPER_REACH = 0.9

_BROKEN_PHASE, _BROKEN_SHARE, _BROKEN_SPREAD = 0.5, 0.15, 0.25
"""Phase departure in rad, share of the region, and spread in cycles beyond which fringes are broken."""

_BENT_PHASE = 0.2
"""Phase departure in rad, RMS, from which the halves of a crystal are compared."""


@dataclass(frozen=True, eq=False, slots=True)
class CrystalFit:
    """How the fringes of each peak run over the crystal's own extent.

    Attributes
    ----------
    amplitude : ndarray of complex128, shape (n,)
        Mean complex amplitude inside the crystal after the shift, half the real one.
    shift : ndarray, shape (n, 2)
        Change of the frequency against the one the field was taken at, cycles per pixel (row, column).
    length : ndarray, shape (n,)
        Extent of the fringes along g, in pixels: sqrt(12 var), the width of a uniform strip of equal variance.
    width : ndarray, shape (n,)
        The same across g.
    phase_rms : ndarray, shape (n,)
        Departure of the phase from the fitted plane wave in rad, the noise's share taken out.
    plateau_loss : ndarray, shape (n,)
        1 - (length at 0.7 of the amplitude / length at 0.5)^2.
    one_sided : ndarray of bool, shape (n,)
        Whether the amplitude falls to one side, as over a wedge.
    spread : ndarray, shape (n,)
        Root mean square difference between four ways to weight the fit, in cycles over the extent.
    share : ndarray, shape (n,)
        Part of the region that the fringes fill.
    bend : ndarray, shape (n, 2, 2)
        Covariance of the frequency from fringes that bend: a twelfth of the squared difference between halves of the crystal,
        for both ways to halve it; 0 where the phase departs little.
    efficiency : ndarray, shape (n,)
        Standard deviation of this fit along g over that of a plane wave filling the whole region, by the noise alone.
    """

    amplitude: NDArray[np.complex128]
    shift: NDArray[np.float64]
    length: NDArray[np.float64]
    width: NDArray[np.float64]
    phase_rms: NDArray[np.float64]
    plateau_loss: NDArray[np.float64]
    one_sided: NDArray[np.bool_]
    spread: NDArray[np.float64]
    share: NDArray[np.float64]
    bend: NDArray[np.float64]
    efficiency: NDArray[np.float64]


def smoothing_width_px(
    area_px: float, power_ratio: NDArray[np.float64], frequency: NDArray[np.float64]
) -> NDArray[np.float64]:
    """Return how far the field of each peak is smoothed: as little as noise and neighbouring peaks allow.

    Parameters
    ----------
    area_px : float
        Pixels of the region.
    power_ratio : ndarray, shape (n,)
    frequency : ndarray, shape (n, 2)
        Cycles per pixel.

    Returns
    -------
    ndarray, shape (n,)
        Standard deviation of the Gaussian in pixels.
    """
    both = np.concatenate([frequency, -frequency, np.zeros((1, 2))])
    distance = np.hypot(*(frequency[:, None] - both[None]).transpose(2, 0, 1))
    distance[np.arange(len(frequency)), np.arange(len(frequency))] = np.inf
    nearest = distance.min(axis=1)
    root = np.sqrt(area_px)
    spread = np.minimum(nearest / 5, 0.1 * np.sqrt(2 * power_ratio / np.pi) / root)
    spread = np.clip(spread, 1.3 / root, 6.0 / root)
    return np.asarray(1 / (2 * np.pi * spread))


@numba.njit(cache=True, nogil=True)
def _fit_shift(field, weight, y, x, start_y, start_x, reach, out):  # type: ignore[no-untyped-def]
    """Maximise |sum w a exp(-2 pi i shift . r)| from a start, after a coarse search within +-reach; fill out with shift."""
    best_y, best_x = start_y, start_x
    if reach > 0:
        highest = -1.0
        turn_x = np.empty((9, x.size), np.complex128)
        for b in range(9):
            for j in range(x.size):
                turn_x[b, j] = np.exp(-2j * np.pi * (start_x + (b - 4) * reach / 4) * x[j])
        lines = np.empty(x.size, np.complex128)
        for a in range(9):
            sy = start_y + (a - 4) * reach / 4
            lines[:] = 0
            for i in range(y.size):
                turn = np.exp(-2j * np.pi * sy * y[i])
                for j in range(x.size):
                    lines[j] += weight[i, j] * field[i, j] * turn
            for b in range(9):
                total = 0j
                for j in range(x.size):
                    total += lines[j] * turn_x[b, j]
                if abs(total) > highest:
                    highest = abs(total)
                    best_y, best_x = sy, start_x + (b - 4) * reach / 4
    sy, sx = best_y, best_x
    for _ in range(6):
        # Newton on the logarithm of the power: gradient and curvature from weighted moments
        s0 = 0j
        s1y = 0j
        s1x = 0j
        s2yy = 0j
        s2yx = 0j
        s2xx = 0j
        for i in range(y.size):
            ty = np.exp(-2j * np.pi * sy * y[i])
            for j in range(x.size):
                w = weight[i, j]
                if w == 0:
                    continue
                v = w * field[i, j] * ty * np.exp(-2j * np.pi * sx * x[j])
                s0 += v
                s1y += y[i] * v
                s1x += x[j] * v
                s2yy += y[i] * y[i] * v
                s2yx += y[i] * x[j] * v
                s2xx += x[j] * x[j] * v
        if abs(s0) == 0:
            break
        ay, ax = s1y / s0, s1x / s0
        # d/ds log s0 = -2 pi i a; second derivative (-2 pi i)^2 (s2 / s0 - a a)
        gy, gx = 2 * np.pi * ay.imag, 2 * np.pi * ax.imag
        c = -4 * np.pi**2
        hyy = c * (s2yy / s0 - ay * ay).real
        hyx = c * (s2yx / s0 - ay * ax).real
        hxx = c * (s2xx / s0 - ax * ax).real
        det = hyy * hxx - hyx * hyx
        if hyy >= 0 or det <= 0:
            break
        dy = -(hxx * gy - hyx * gx) / det
        dx = -(hyy * gx - hyx * gy) / det
        sy += dy
        sx += dx
        if abs(dy) + abs(dx) < 1e-9:
            break
    out[0] = sy
    out[1] = sx


@numba.njit(cache=True, nogil=True)
def _extent_along(mask, y, x, ny, nx):  # type: ignore[no-untyped-def]
    """Return sqrt(12 var) of the cells' positions along (ny, nx), with the width of the cells."""
    s0, s1, s2 = 0.0, 0.0, 0.0
    for i in range(y.size):
        for j in range(x.size):
            if mask[i, j]:
                p = ny * y[i] + nx * x[j]
                s0 += 1
                s1 += p
                s2 += p * p
    if s0 == 0:
        return 0.0
    cell = abs(ny) * (y[1] - y[0]) + abs(nx) * (x[1] - x[0])
    return np.sqrt(12 * max(s2 / s0 - (s1 / s0) ** 2, 0.0) + cell * cell)


@numba.njit(cache=True, nogil=True)
def _phase_rms(field, amplitude, weight, mask, y, x, shift):  # type: ignore[no-untyped-def]
    """Return the weighted RMS phase about the fitted wave in the mask."""
    mean = 0j
    for i in range(y.size):
        for j in range(x.size):
            if weight[i, j] > 0:
                mean += weight[i, j] * field[i, j] * np.exp(-2j * np.pi * (shift[0] * y[i] + shift[1] * x[j]))
    mean /= max(abs(mean), 1e-30)
    total, squares = 0.0, 0.0
    for i in range(y.size):
        for j in range(x.size):
            if mask[i, j]:
                v = field[i, j] * np.exp(-2j * np.pi * (shift[0] * y[i] + shift[1] * x[j])) * np.conj(mean)
                a = amplitude[i, j]
                total += a
                squares += a * np.arctan2(v.imag, v.real) ** 2
    return np.sqrt(squares / max(total, 1e-30))


@numba.njit(cache=True, nogil=True)
def _lopsided(amplitude, mask, y, x):  # type: ignore[no-untyped-def]
    """Return the slope of the amplitude across the mask, steepest direction, as a share of its mean per full extent."""
    n, my, mx, ma = 0.0, 0.0, 0.0, 0.0
    for i in range(y.size):
        for j in range(x.size):
            if mask[i, j]:
                n += 1
                my += y[i]
                mx += x[j]
                ma += amplitude[i, j]
    my /= n
    mx /= n
    ma /= n
    syy, sxx, syx, say, sax = 0.0, 0.0, 0.0, 0.0, 0.0
    for i in range(y.size):
        for j in range(x.size):
            if mask[i, j]:
                dy, dx, da = y[i] - my, x[j] - mx, amplitude[i, j] - ma
                syy += dy * dy
                sxx += dx * dx
                syx += dy * dx
                say += dy * da
                sax += dx * da
    det = syy * sxx - syx * syx
    if det <= 0:
        return 0.0
    by = (sxx * say - syx * sax) / det
    bx = (syy * sax - syx * say) / det
    norm = np.sqrt(by * by + bx * bx) + 1e-30
    extent = np.sqrt(12 * (by * by * syy + 2 * by * bx * syx + bx * bx * sxx) / n) / norm
    return norm * extent / ma


def fit_crystal(
    fields: FringeField, frequency: NDArray[np.float64], power_ratio: NDArray[np.float64], area_px: float
) -> CrystalFit:
    """Fit each peak's frequency over the extent of its own fringes, tapered towards their edge.

    Parameters
    ----------
    fields : FringeField
        At `frequency`.
    frequency : ndarray, shape (n, 2)
        Cycles per pixel.
    power_ratio : ndarray, shape (n,)
        Matched-filter power ratio over the region.
    area_px : float
        Pixels of the region.

    Returns
    -------
    CrystalFit
    """
    n = len(frequency)
    y, x = fields.y, fields.x
    cell = (y[1] - y[0], x[1] - x[0])
    shift, inner = np.zeros((n, 2)), np.zeros(n, np.complex128)
    length, width, phase, plateau = np.zeros(n), np.zeros(n), np.zeros(n), np.zeros(n)
    spread, share, efficiency = np.zeros(n), np.zeros(n), np.ones(n)
    one_sided, bend = np.zeros(n, bool), np.zeros((n, 2, 2))
    grid_y, grid_x = y[:, None], x[None]
    common = crystal_mask(fields, np.sqrt(power_ratio))
    for k in range(n):
        field = fields.field[k]
        amplitude = np.abs(field)
        unit = frequency[k] / np.hypot(*frequency[k])
        mask = filled_part(amplitude, fields.inside, 0.5)
        wm = mask = common if mask.sum() < 0.6 * common.sum() else mask
        distance = scipy.ndimage.distance_transform_edt(np.pad(wm, 1), sampling=cell)[1:-1, 1:-1]
        weight = np.sin(np.pi / 2 * np.minimum(1, distance / (_TAPER_REACH * distance.max()))) ** 2
        length[k] = _extent_along(mask, y, x, *unit)
        width[k] = _extent_along(mask, y, x, unit[1], -unit[0])
        own = np.sqrt(length[k] * width[k])
        _fit_shift(field, weight, y, x, 0.0, 0.0, 1.4 / own, shift[k])
        noise = np.sqrt(area_px / (8 * np.pi * fields.width_px[k] ** 2 * power_ratio[k])) * _level(
            amplitude, fields.inside
        )
        noise /= max(amplitude[mask].mean(), 1e-30)
        phase[k] = np.sqrt(max(_phase_rms(field, amplitude, weight, mask, y, x, shift[k]) ** 2 - noise**2, 0.0))
        turn = np.exp(-2j * np.pi * (shift[k, 0] * grid_y + shift[k, 1] * grid_x))
        inner[k] = (field * turn)[mask].mean()
        top = filled_part(amplitude, mask, 0.7)
        plateau[k] = max(0.0, 1 - (_extent_along(top, y, x, *unit) / max(length[k], 1e-9)) ** 2)
        one_sided[k] = _lopsided(amplitude, mask, y, x) > 0.5
        share[k] = mask.sum() / fields.inside.sum()
        others = np.empty((3, 2))
        wide = filled_part(amplitude, fields.inside, 0.3)
        _fit_shift(field, wide.astype(float), y, x, shift[k, 0], shift[k, 1], 0.0, others[0])
        _fit_shift(field, mask.astype(float), y, x, shift[k, 0], shift[k, 1], 0.0, others[1])
        middle = (grid_y * mask).sum() / mask.sum(), (grid_x * mask).sum() / mask.sum()
        sigma = 0.2 * length[k]
        round_weight = np.exp(-((grid_y - middle[0]) ** 2 + (grid_x - middle[1]) ** 2) / (2 * sigma**2)) * mask
        _fit_shift(field, round_weight, y, x, shift[k, 0], shift[k, 1], 0.0, others[2])
        spread[k] = np.sqrt((((others - shift[k]) @ unit) ** 2).mean()) * length[k]
        if phase[k] > _BENT_PHASE:
            bend[k] = _bend(field, weight, y, x, shift[k])
        # noise of sum(w x y) / (A sum(w x^2)) against that of a wave of the mean amplitude over the whole region
        line = _along(weight, grid_y, grid_x, unit)
        mean = (weight * amplitude * line**2).sum()
        noise_share = np.sqrt((weight**2 * line**2).sum())
        whole = np.sqrt((fields.inside * _along(fields.inside.astype(float), grid_y, grid_x, unit) ** 2).sum())
        efficiency[k] = noise_share / max(mean, 1e-30) * whole * _level(amplitude, fields.inside)
    return CrystalFit(inner, shift, length, width, phase, plateau, one_sided, spread, share, bend, efficiency)


def _bend(
    field: NDArray[np.complex128],
    weight: NDArray[np.float64],
    y: NDArray[np.float64],
    x: NDArray[np.float64],
    shift: NDArray[np.float64],
) -> NDArray[np.float64]:
    """Return a twelfth of the squared difference between the frequencies of two halves, summed over both halvings."""
    total = np.zeros((2, 2))
    halves = np.empty((2, 2))
    for line in (y[:, None] + 0 * x[None], 0 * y[:, None] + x[None]):
        middle = (weight * line).sum() / weight.sum()
        _fit_shift(field, weight * (line < middle), y, x, shift[0], shift[1], 0.0, halves[0])
        _fit_shift(field, weight * (line >= middle), y, x, shift[0], shift[1], 0.0, halves[1])
        difference = halves[1] - halves[0]
        total += np.outer(difference, difference) / 12
    return total


def _level(amplitude: NDArray[np.float64], inside: NDArray[np.bool_]) -> float:
    """Return the amplitude that a wave of equal power over the whole region has."""
    return float(np.sqrt((amplitude[inside] ** 2).mean()))


def _along(
    weight: NDArray[np.float64], y: NDArray[np.float64], x: NDArray[np.float64], unit: NDArray[np.float64]
) -> NDArray[np.float64]:
    """Return the position along a direction from the weighted middle."""
    line = unit[0] * y + unit[1] * x
    return np.asarray(line - (weight * line).sum() / weight.sum())


def why_broken(crystal: CrystalFit) -> list[str | None]:
    """Say of each set of fringes why it gives no spacing, or None.

    Typical where the contrast reverses across a particle: then the fringes jump by half a period somewhere.
    """
    reasons: list[str | None] = []
    for phase, share, spread in zip(crystal.phase_rms, crystal.share, crystal.spread, strict=True):
        if phase > _BROKEN_PHASE:
            reasons.append(
                f"the fringes shift by {phase / (2 * np.pi):.2f} of a period (RMS) across the crystal: their contrast "
                "reverses or they bend"
            )
        elif share < _BROKEN_SHARE:
            reasons.append(f"the fringes hold together over {100 * share:.0f} % of the region only")
        elif spread > _BROKEN_SPREAD:
            reasons.append(
                f"parts of the crystal disagree by {spread:.2f} of a fringe over its width: the fringes are broken"
            )
        else:
            reasons.append(None)
    return reasons


@dataclass(frozen=True, eq=False, slots=True)
class CrystalUncertainty:
    """Standard uncertainties that one picture cannot show, in cycles over the crystal's extent.

    Attributes
    ----------
    along, across : ndarray, shape (n,)
        kappa of each peak along and across its g: the uncertainty of g is kappa / extent.
    lattice : float
        Of a length taken from the common lattice; 0 without one.
    """

    along: NDArray[np.float64]
    across: NDArray[np.float64]
    lattice: float


def lattice_tolerance(phase_rms: NDArray[np.float64], plateau_loss: NDArray[np.float64]) -> NDArray[np.float64]:
    """Return the kappa that weights each peak in the fit of the common lattice."""
    return np.sqrt(0.01**2 + (0.38 * phase_rms) ** 2 + (0.22 * plateau_loss) ** 2)


def crystal_uncertainty(
    crystal: CrystalFit,
    noise_cycles: NDArray[np.float64],
    lattice_residual_cycles: NDArray[np.float64] | None,
    on_lattice: NDArray[np.bool_],
    delocalisation_nm: NDArray[np.float64] | None,
) -> CrystalUncertainty:
    """Return the uncertainty that the thickness and the lens add, unseen in one picture.

    Parameters
    ----------
    crystal : CrystalFit
    noise_cycles : ndarray, shape (n,)
        Standard uncertainty of g along itself by the noise, times the extent.
    lattice_residual_cycles : ndarray, shape (n,), or None
        Residual along g against the common lattice, times the extent; None without a lattice.
    on_lattice : ndarray of bool, shape (n,)
    delocalisation_nm : ndarray, shape (n,), or None
        Signed delocalisation of each reflection where the lens is known.

    Returns
    -------
    CrystalUncertainty

    Notes
    -----
    Without a lattice kappa^2 = 0.003^2 + (phi / 2)^2 + (p / 4)^2. With one, kappa^2 = 0.002^2 + (1.2 kappa_lattice)^2 +
    (0.15 p)^2 + (0.2 phi)^2, where kappa_lattice^2 is the scatter of the residuals less the noise's share.
    """
    phi, p = crystal.phase_rms, crystal.plateau_loss
    alone = np.sqrt(0.003**2 + (0.5 * phi) ** 2 + (0.25 * p) ** 2)
    across = np.where(crystal.one_sided, 1.0, 0.25) * alone
    if lattice_residual_cycles is None:
        return CrystalUncertainty(alone, across, 0.0)
    scatter = lattice_scatter(
        lattice_residual_cycles[on_lattice], noise_cycles[on_lattice], lattice_tolerance(phi, p)[on_lattice]
    )
    along = np.sqrt(0.002**2 + (1.2 * scatter) ** 2 + (0.15 * p) ** 2 + (0.2 * phi) ** 2)
    if delocalisation_nm is not None:
        along = along * np.sqrt(0.6**2 + (1.1 * np.minimum(np.abs(delocalisation_nm), 1.0)) ** 2)
    lattice = float(np.sqrt((0.25 * np.median(p[on_lattice])) ** 2 + 0.0015**2))
    return CrystalUncertainty(np.where(on_lattice, along, alone), across, lattice)


def lattice_scatter(
    residual_cycles: NDArray[np.float64], noise_cycles: NDArray[np.float64], tolerance: NDArray[np.float64]
) -> float:
    """Return kappa_lattice: how far peaks lie off their common lattice, in cycles over the extent, beyond the noise."""
    count = len(residual_cycles)
    weight = 1 / (tolerance**2 + noise_cycles**2)
    squares = np.minimum(np.abs(residual_cycles), 0.3) ** 2
    scatter = (weight * squares).sum() / weight.sum() * count / max(count - 2, 1)
    return float(np.sqrt(max(scatter - (weight * noise_cycles**2).sum() / weight.sum(), 0.0)))
