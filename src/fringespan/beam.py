"""The beam and the lens: wavelength, scattering angles, and what the objective lens transfers.

Lengths are in nm unless a name says otherwise, g = 1/d in 1/nm without 2 pi, defocus is positive for underfocus. With
lambda the wavelength, Cs the spherical aberration and df the underfocus, the aberration phase of a beam g is

    chi(g) = pi lambda g^2 (Cs lambda^2 g^2 / 2 - df),

and a weak phase object is seen with the contrast sin(chi): negative means that atoms look dark. The articles named
below are cited from memory.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import Literal

import numpy as np
import scipy.constants as codata
from numpy.typing import ArrayLike, NDArray

from fringespan.exceptions import CalibrationError

__all__ = [
    "VOLTAGE_LIMITS_KV",
    "BeamSummary",
    "Envelopes",
    "Lens",
    "Reflection",
    "aberration_phase_rad",
    "beam_summary",
    "bragg_angle_mrad",
    "delocalisation_nm",
    "electron_wavelength_pm",
    "envelopes",
    "excitation_error_per_nm",
    "focus_without_delocalisation_nm",
    "information_limit_nm",
    "interaction_constant_per_v_nm",
    "nonrelativistic_wavelength_pm",
    "parabolic_excitation_error_per_nm",
    "phase_contrast_transfer",
    "point_resolution_nm",
    "scattering_angle_mrad",
    "scherzer_underfocus_nm",
    "signed_delocalisation_nm",
    "speed_over_light",
    "transfer_zeros_per_nm",
]

VOLTAGE_LIMITS_KV = (1.0, 3000.0)
"""From the slowest scanning beam to the fastest microscope ever built."""

_CS_LIMIT_MM = 50.0
_DEFOCUS_LIMIT_NM = 1e5
_MOST_ZEROS = 10_000_000
_SPACINGS_NM = (0.5, 0.4, 0.35, 0.3, 0.25, 0.2, 0.175, 0.15, 0.125, 0.1, 0.08)


def _number(value: float, name: str, low: float, high: float, advice: str) -> float:
    try:
        number = float(value)
    except (TypeError, ValueError):
        raise CalibrationError(f"{name} must be a number, got {value!r}; {advice}") from None
    if not low <= number <= high:  # also refuses NaN
        raise CalibrationError(f"{name} must lie between {low:g} and {high:g}, got {number:g}; {advice}")
    return number


def _kilovolts(voltage_kv: float) -> float:
    return _number(voltage_kv, "voltage_kv", *VOLTAGE_LIMITS_KV, "give the accelerating voltage in kV (300 for 300 kV)")


def _cs(cs_mm: float) -> float:
    return _number(cs_mm, "cs_mm", -_CS_LIMIT_MM, _CS_LIMIT_MM, "give the spherical aberration in mm (1.2 for 1.2 mm)")


def _magnitudes(values: ArrayLike, name: str) -> NDArray[np.float64]:
    try:
        numbers = np.asarray(values, dtype=np.float64)
    except (TypeError, ValueError):
        raise CalibrationError(f"{name} must be numbers, got {values!r}") from None
    if not (np.isfinite(numbers) & (numbers >= 0)).all():
        raise CalibrationError(f"{name} must be finite and not negative, got {values!r}; give magnitudes")
    return numbers


def _spacings(d_nm: ArrayLike) -> NDArray[np.float64]:
    spacings = _magnitudes(d_nm, "d_nm")
    if not (spacings > 0).all():
        raise CalibrationError(f"d_nm must be greater than 0, got {d_nm!r}; give spacings in nm")
    return spacings


def electron_wavelength_pm(voltage_kv: float) -> float:
    """Return the relativistic wavelength of electrons.

    lambda = h / sqrt(2 m e V (1 + e V / (2 m c^2))), de Broglie's relation with the relativistic momentum and the
    CODATA constants.

    Parameters
    ----------
    voltage_kv : float
        Accelerating voltage, 1 to 3000 kV.

    Returns
    -------
    float
        Wavelength in pm.

    Raises
    ------
    CalibrationError
        If the voltage lies outside these limits.

    Examples
    --------
    >>> round(electron_wavelength_pm(300.0), 4)
    1.9687
    """
    energy = codata.e * _kilovolts(voltage_kv) * 1e3
    rest = codata.m_e * codata.c**2
    return 1e12 * codata.h * codata.c / math.sqrt(energy * (energy + 2 * rest))


def nonrelativistic_wavelength_pm(voltage_kv: float) -> float:
    """Return the wavelength in pm that electrons would have without relativity, for comparison only.

    lambda = h / sqrt(2 m e V). It is 14 % too long at 300 kV. Limits and errors as for `electron_wavelength_pm`.

    Examples
    --------
    >>> round(nonrelativistic_wavelength_pm(300.0), 4)
    2.2391
    """
    return 1e12 * codata.h / math.sqrt(2 * codata.m_e * codata.e * _kilovolts(voltage_kv) * 1e3)


def speed_over_light(voltage_kv: float) -> float:
    """Return the speed of the electrons as a fraction of the speed of light.

    Limits and errors as for `electron_wavelength_pm`.
    """
    gamma = 1 + codata.e * _kilovolts(voltage_kv) * 1e3 / (codata.m_e * codata.c**2)
    return math.sqrt((gamma - 1) * (gamma + 1)) / gamma


def interaction_constant_per_v_nm(voltage_kv: float) -> float:
    """Return the phase in rad that a projected potential of 1 V nm gives the beam.

    sigma = 2 pi gamma m e lambda / h^2 = 2 pi / (lambda V) (1 + x) / (2 + x) with x = e V / (m c^2). Limits and errors
    as for `electron_wavelength_pm`.

    Examples
    --------
    >>> round(interaction_constant_per_v_nm(300.0), 6)
    0.006526
    """
    gamma = 1 + codata.e * _kilovolts(voltage_kv) * 1e3 / (codata.m_e * codata.c**2)
    wavelength = electron_wavelength_pm(voltage_kv) * 1e-12
    return 1e-9 * 2 * math.pi * gamma * codata.m_e * codata.e * wavelength / codata.h**2


def bragg_angle_mrad(d_nm: ArrayLike, voltage_kv: float) -> NDArray[np.float64]:
    """Return Bragg's angle theta = asin(lambda / 2 d).

    Parameters
    ----------
    d_nm : array_like
        Spacings in nm, any shape.
    voltage_kv : float
        Accelerating voltage.

    Returns
    -------
    ndarray
        Angles in mrad, shaped like `d_nm`.

    Raises
    ------
    CalibrationError
        If the voltage is impossible or a spacing is not greater than half the wavelength.
    """
    spacings = _spacings(d_nm)
    sine = electron_wavelength_pm(voltage_kv) * 1e-3 / (2 * spacings)
    if not (sine <= 1).all():
        raise CalibrationError(
            f"d_nm must be at least half the wavelength, {electron_wavelength_pm(voltage_kv) / 2:.3g} pm at "
            f"{voltage_kv:g} kV, got {spacings.min():g} nm; finer planes cannot diffract this beam"
        )
    return np.asarray(1e3 * np.arcsin(sine))


def scattering_angle_mrad(d_nm: ArrayLike, voltage_kv: float) -> NDArray[np.float64]:
    """Return the scattering angle 2 theta = 2 asin(lambda / 2 d) in mrad; otherwise as `bragg_angle_mrad`.

    Examples
    --------
    >>> scattering_angle_mrad([0.2, 0.1], 300.0).round(4)
    array([ 9.8438, 19.6878])
    """
    return np.asarray(2 * bragg_angle_mrad(d_nm, voltage_kv))


def excitation_error_per_nm(g_per_nm: ArrayLike, voltage_kv: float) -> NDArray[np.float64]:
    """Return how far a reflection of the zone plane lies from the Ewald sphere, along the beam.

    The beam runs exactly along the zone axis: s = sqrt(1/lambda^2 - g^2) - 1/lambda, negative because the reflection
    lies outside the sphere.

    Parameters
    ----------
    g_per_nm : array_like
        Magnitudes of g in 1/nm, any shape.
    voltage_kv : float
        Accelerating voltage.

    Returns
    -------
    ndarray
        s in 1/nm, shaped like `g_per_nm`.

    Raises
    ------
    CalibrationError
        If the voltage is impossible or a g is longer than the sphere's radius 1/lambda.
    """
    g = _magnitudes(g_per_nm, "g_per_nm")
    wavelength = electron_wavelength_pm(voltage_kv) * 1e-3
    if not (g * wavelength <= 1).all():
        raise CalibrationError(
            f"g_per_nm must not exceed the radius of the Ewald sphere, {1 / wavelength:.4g} 1/nm at {voltage_kv:g} kV, "
            f"got {g.max():g}"
        )
    # the difference of two nearly equal roots, written without their cancellation
    return np.asarray(-wavelength * g**2 / (1 + np.sqrt(1 - (wavelength * g) ** 2)))


def parabolic_excitation_error_per_nm(g_per_nm: ArrayLike, voltage_kv: float) -> NDArray[np.float64]:
    """Return the small-angle form of `excitation_error_per_nm`: s = -lambda g^2 / 2, in 1/nm."""
    g = _magnitudes(g_per_nm, "g_per_nm")
    return np.asarray(-electron_wavelength_pm(voltage_kv) * 1e-3 * g**2 / 2)


def scherzer_underfocus_nm(voltage_kv: float, cs_mm: float) -> float:
    """Return Scherzer's underfocus sqrt(4/3 Cs lambda) in nm.

    It is the defocus of the widest band of one sign of the transfer [1]_. With a negative Cs it is an overfocus and
    hence negative; with Cs = 0 it is 0.

    Parameters
    ----------
    voltage_kv : float
        Accelerating voltage.
    cs_mm : float
        Spherical aberration, -50 to 50 mm.

    Raises
    ------
    CalibrationError
        If the voltage or the aberration is impossible.

    References
    ----------
    .. [1] O. Scherzer, J. Appl. Phys. 20 (1949) 20, doi:10.1063/1.1698233; in the form with 4/3 common today.

    Examples
    --------
    >>> round(scherzer_underfocus_nm(200.0, 1.0), 2)
    57.83
    """
    cs_nm = _cs(cs_mm) * 1e6
    return math.copysign(math.sqrt(4 / 3 * abs(cs_nm) * electron_wavelength_pm(voltage_kv) * 1e-3), cs_nm)


def point_resolution_nm(voltage_kv: float, cs_mm: float) -> float:
    """Return the finest spacing transferred with one sign at Scherzer's underfocus, in nm.

    It is 1/g at the first zero of the transfer there: (2 sqrt(4/3))^(-1/2) Cs^(1/4) lambda^(3/4), the textbooks'
    0.66 Cs^(1/4) lambda^(3/4) with its factor in full.

    Parameters
    ----------
    voltage_kv : float
        Accelerating voltage.
    cs_mm : float
        Spherical aberration, -50 to 50 mm, not 0; its sign does not matter.

    Raises
    ------
    CalibrationError
        If the voltage or the aberration is impossible, or the aberration is 0.

    Examples
    --------
    >>> round(point_resolution_nm(200.0, 1.0), 4)
    0.2332
    """
    cs_nm = abs(_cs(cs_mm)) * 1e6
    if cs_nm == 0:
        raise CalibrationError(
            "cs_mm must not be 0 for a point resolution: without spherical aberration it does not limit the picture; "
            "use the information limit"
        )
    wavelength = electron_wavelength_pm(voltage_kv) * 1e-3
    return math.sqrt(math.sqrt(cs_nm * wavelength**3) / (2 * math.sqrt(4 / 3)))


@dataclass(frozen=True, slots=True, kw_only=True)
class Lens:
    """The objective lens as far as it shapes the transfer of weak phase contrast.

    Parameters
    ----------
    voltage_kv : float
        Accelerating voltage, 1 to 3000 kV.
    cs_mm : float
        Spherical aberration, -50 to 50 mm.
    defocus_nm : float
        Positive for underfocus, within 1e5 nm.
    focal_spread_nm : float, optional
        Standard deviation of the defocus over energies and lens currents.
    convergence_mrad : float, optional
        Half angle at which the illumination has fallen to 1/e of its intensity, taken as Gaussian.
    image_spread_nm : float, optional
        Standard deviation, along each axis, of the picture's shift by stray fields and vibration.

    Raises
    ------
    CalibrationError
        If a value is outside its range.
    """

    voltage_kv: float
    cs_mm: float
    defocus_nm: float
    focal_spread_nm: float = 0.0
    convergence_mrad: float = 0.0
    image_spread_nm: float = 0.0

    def __post_init__(self) -> None:
        def put(name: str, value: float) -> None:
            object.__setattr__(self, name, value)

        put("voltage_kv", _kilovolts(self.voltage_kv))
        put("cs_mm", _cs(self.cs_mm))
        limit = _DEFOCUS_LIMIT_NM
        put("defocus_nm", _number(self.defocus_nm, "defocus_nm", -limit, limit, "give nm, positive for underfocus"))
        put("focal_spread_nm", _number(self.focal_spread_nm, "focal_spread_nm", 0, 1e4, "give nm, 0 for none"))
        put("convergence_mrad", _number(self.convergence_mrad, "convergence_mrad", 0, 100, "give mrad, 0 for none"))
        put("image_spread_nm", _number(self.image_spread_nm, "image_spread_nm", 0, 100, "give nm, 0 for none"))

    @property
    def wavelength_nm(self) -> float:
        """Relativistic wavelength."""
        return electron_wavelength_pm(self.voltage_kv) * 1e-3

    @property
    def cs_nm(self) -> float:
        """Spherical aberration in nm."""
        return self.cs_mm * 1e6


@dataclass(frozen=True, slots=True, eq=False)
class Envelopes:
    """What is left of the transfer at each g, from 0 to 1.

    Attributes
    ----------
    focal_spread, convergence, image_spread : ndarray
        Each cause alone.
    """

    focal_spread: NDArray[np.float64]
    convergence: NDArray[np.float64]
    image_spread: NDArray[np.float64]

    @property
    def total(self) -> NDArray[np.float64]:
        """Product of the three."""
        return np.asarray(self.focal_spread * self.convergence * self.image_spread)


def aberration_phase_rad(g_per_nm: ArrayLike, lens: Lens) -> NDArray[np.float64]:
    """Return chi = pi lambda g^2 (Cs lambda^2 g^2 / 2 - df), the phase that the lens gives each beam.

    Parameters
    ----------
    g_per_nm : array_like
        Magnitudes of g in 1/nm, any shape.
    lens : Lens

    Returns
    -------
    ndarray
        Phases in rad, shaped like `g_per_nm`.

    Raises
    ------
    CalibrationError
        If a g is negative or not finite.
    """
    x = _magnitudes(g_per_nm, "g_per_nm") ** 2
    wavelength = lens.wavelength_nm
    return np.asarray(math.pi * wavelength * x * (lens.cs_nm * wavelength**2 * x / 2 - lens.defocus_nm))


def envelopes(g_per_nm: ArrayLike, lens: Lens) -> Envelopes:
    """Return the damping of the transfer by incoherent effects.

    With Delta the focal spread, alpha the convergence [1]_ and sigma the image spread [2]_:
    exp(-(pi lambda Delta g^2)^2 / 2), exp(-(pi alpha)^2 (Cs lambda^2 g^3 - df g)^2), exp(-2 (pi sigma g)^2). They hold
    for weak contrast, and their product for small convergence (no cross term).

    Parameters and errors as for `aberration_phase_rad`.

    References
    ----------
    .. [1] J. Frank, Optik 38 (1973) 519.
    .. [2] S. Uhlemann et al., Phys. Rev. Lett. 111 (2013) 046101, doi:10.1103/PhysRevLett.111.046101.
    """
    g = _magnitudes(g_per_nm, "g_per_nm")
    wavelength = lens.wavelength_nm
    shift = signed_delocalisation_nm(g, lens) / wavelength
    return Envelopes(
        np.asarray(np.exp(-((math.pi * wavelength * lens.focal_spread_nm * g**2) ** 2) / 2)),
        np.asarray(np.exp(-((math.pi * lens.convergence_mrad * 1e-3 * shift) ** 2))),
        np.asarray(np.exp(-2 * (math.pi * lens.image_spread_nm * g) ** 2)),
    )


def phase_contrast_transfer(g_per_nm: ArrayLike, lens: Lens) -> NDArray[np.float64]:
    """Return sin(chi) times the envelopes: the transfer of a weak phase object, from -1 to 1.

    Negative: atoms look dark (as at Scherzer's underfocus with a positive Cs); positive: bright. Parameters and errors
    as for `aberration_phase_rad`.
    """
    return np.asarray(np.sin(aberration_phase_rad(g_per_nm, lens)) * envelopes(g_per_nm, lens).total)


def transfer_zeros_per_nm(lens: Lens, g_max_per_nm: float) -> NDArray[np.float64]:
    """Return where the transfer vanishes, apart from g = 0.

    The zeros solve chi = n pi: g^2 = (df +- sqrt(df^2 + 2 n Cs lambda)) / (Cs lambda^2), or -n / (lambda df) if Cs = 0.

    Parameters
    ----------
    lens : Lens
    g_max_per_nm : float
        How far to look, 1/nm.

    Returns
    -------
    ndarray, shape (n,)
        Rising g in 1/nm. Empty without Cs and defocus, when nothing is transferred at all.

    Raises
    ------
    CalibrationError
        If `g_max_per_nm` is not a positive number, or there are more than ten million zeros.
    """
    g_max = float(_magnitudes(g_max_per_nm, "g_max_per_nm"))
    wavelength = lens.wavelength_nm
    # chi / pi = square x^2 + linear x with x = g^2
    square, linear = lens.cs_nm * wavelength**3 / 2, -lens.defocus_nm * wavelength
    if square == 0 and linear == 0:
        return np.empty(0)
    x_max = g_max**2
    turns = [0.0, square * x_max**2 + linear * x_max]
    if square != 0 and 0 < -linear / (2 * square) < x_max:
        turns.append(-(linear**2) / (4 * square))
    first, last = math.ceil(min(turns)), math.floor(max(turns))
    if last - first > _MOST_ZEROS:
        raise CalibrationError(
            f"g_max_per_nm must be small enough for ten million zeros of the transfer, got {g_max:g} with about "
            f"{last - first:.2g} of them; take a smaller one"
        )
    n = np.arange(first, last + 1, dtype=np.float64)
    if square == 0:
        x = n / linear
    else:
        # at a vertex that just touches n pi, rounding may leave a root of a tiny negative number
        root = np.sqrt(np.maximum(linear**2 + 4 * square * n, 0))
        larger = -(linear + math.copysign(1, linear) * root) / 2
        with np.errstate(divide="ignore", invalid="ignore", over="ignore"):
            x = np.concatenate([larger / square, -n / larger])
    x = x[np.isfinite(x) & (x > 0) & (x <= x_max)]
    return np.unique(np.sqrt(x))


def information_limit_nm(lens: Lens) -> float | None:
    """Return the finest spacing of which the envelopes leave at least exp(-2).

    Returns
    -------
    float or None
        Spacing in nm; None if no spacing down to half the wavelength is damped that far.
    """
    from scipy.optimize import brentq

    wavelength, convergence = lens.wavelength_nm, math.pi * lens.convergence_mrad * 1e-3
    cubic, defocus = lens.cs_nm * wavelength**2, lens.defocus_nm
    focal, shift = math.pi * wavelength * lens.focal_spread_nm, math.pi * lens.image_spread_nm

    def excess(x: float) -> float:
        """Return minus the logarithm of the envelopes at x = g^2, less 2: a cubic polynomial."""
        return x * (convergence * (cubic * x - defocus)) ** 2 + (focal * x) ** 2 / 2 + 2 * shift**2 * x - 2

    finest = 4 / wavelength**2
    if excess(finest) <= 0:
        return None
    # the cubic may rise above 0, dip, and rise again; its last root lies beyond the dip if that reaches below 0
    bend, slope = focal**2 - 4 * convergence**2 * cubic * defocus, (convergence * defocus) ** 2 + 2 * shift**2
    steep = 3 * (convergence * cubic) ** 2
    low, high = 0.0, finest
    if steep > 0 and bend < 0 and bend**2 > 4 * steep * slope:
        peak, dip = ((-bend + sign * math.sqrt(bend**2 - 4 * steep * slope)) / (2 * steep) for sign in (-1, 1))
        if excess(dip) <= 0:
            low = min(dip, finest)
        elif peak > 0:
            high = min(peak, finest)
    return float(1 / math.sqrt(brentq(excess, low, high, xtol=1e-12)))


def signed_delocalisation_nm(g_per_nm: ArrayLike, lens: Lens) -> NDArray[np.float64]:
    """Return R = lambda g (Cs lambda^2 g^2 - df): how far, and to which side, fringes are shifted from their crystal.

    It is the slope of the aberration phase, R = (d chi / d g) / (2 pi) [1]_. Parameters and errors as for
    `aberration_phase_rad`; nm.

    References
    ----------
    .. [1] H. Lichte, Ultramicroscopy 38 (1991) 13, doi:10.1016/0304-3991(91)90105-F.
    """
    g = _magnitudes(g_per_nm, "g_per_nm")
    wavelength = lens.wavelength_nm
    return np.asarray(wavelength * g * (lens.cs_nm * wavelength**2 * g**2 - lens.defocus_nm))


def delocalisation_nm(g_per_nm: ArrayLike, lens: Lens) -> NDArray[np.float64]:
    """Return |Cs lambda^3 g^3 - df lambda g|: how far fringes are shifted sideways from their crystal, in nm.

    Parameters and errors as for `aberration_phase_rad`.
    """
    return np.abs(signed_delocalisation_nm(g_per_nm, lens))


def focus_without_delocalisation_nm(g_per_nm: ArrayLike, voltage_kv: float, cs_mm: float) -> NDArray[np.float64]:
    """Return the underfocus Cs lambda^2 g^2 at which the fringes of g stand where their crystal is, in nm.

    At this defocus the lens moves and bends them least; their contrast may be low there.

    Parameters
    ----------
    g_per_nm : array_like
        Magnitudes of g in 1/nm, any shape.
    voltage_kv, cs_mm : float
        Accelerating voltage and spherical aberration.

    Raises
    ------
    CalibrationError
        If a value is impossible.
    """
    g = _magnitudes(g_per_nm, "g_per_nm")
    return np.asarray(_cs(cs_mm) * 1e6 * (electron_wavelength_pm(voltage_kv) * 1e-3) ** 2 * g**2)


@dataclass(frozen=True, slots=True, kw_only=True)
class Reflection:
    """What beam and lens do to one spacing; the last four are None while the lens is not known.

    Attributes
    ----------
    d_nm, g_per_nm : float
        Spacing and its inverse.
    bragg_angle_mrad, two_theta_mrad : float
        Bragg's angle and the scattering angle.
    excitation_error_per_nm : float
        Distance from the Ewald sphere with the beam along the zone axis.
    transfer : float or None
        Phase-contrast transfer with its envelopes.
    envelope : float or None
        The envelopes alone.
    delocalisation_nm : float or None
        Sideways shift of the fringes.
    focus_without_delocalisation_nm : float or None
        Underfocus at which this shift vanishes.
    """

    d_nm: float
    g_per_nm: float
    bragg_angle_mrad: float
    two_theta_mrad: float
    excitation_error_per_nm: float
    transfer: float | None
    envelope: float | None
    delocalisation_nm: float | None
    focus_without_delocalisation_nm: float | None


@dataclass(frozen=True, slots=True, kw_only=True)
class BeamSummary:
    """Beam and lens in numbers; what needs a spherical aberration is None while that is not known.

    Attributes
    ----------
    voltage_kv : float
    wavelength_pm, nonrelativistic_wavelength_pm : float
    speed_over_light : float
    interaction_constant_per_v_nm : float
    lens : Lens or None
        What the transfer was computed with.
    defocus_origin : {"given", "Scherzer's underfocus"} or None
        Where the lens's defocus comes from.
    scherzer_underfocus_nm, point_resolution_nm : float or None
        The latter is also None for Cs = 0.
    information_limit_nm : float or None
        None as well while no envelope is known.
    transfer_zeros_nm : tuple of float
        Spacings that are not transferred, coarsest first, down to the finest of `reflections`.
    reflections : tuple of Reflection
        Coarsest first.
    """

    voltage_kv: float
    wavelength_pm: float
    nonrelativistic_wavelength_pm: float
    speed_over_light: float
    interaction_constant_per_v_nm: float
    lens: Lens | None
    defocus_origin: Literal["given", "Scherzer's underfocus"] | None
    scherzer_underfocus_nm: float | None
    point_resolution_nm: float | None
    information_limit_nm: float | None
    transfer_zeros_nm: tuple[float, ...]
    reflections: tuple[Reflection, ...]


def beam_summary(
    voltage_kv: float,
    *,
    cs_mm: float | None = None,
    defocus_nm: float | None = None,
    focal_spread_nm: float = 0.0,
    convergence_mrad: float = 0.0,
    image_spread_nm: float = 0.0,
    d_nm: ArrayLike = _SPACINGS_NM,
) -> BeamSummary:
    """Return what the beam, and the lens if it is known, do to a list of spacings.

    Parameters
    ----------
    voltage_kv : float
        Accelerating voltage, 1 to 3000 kV.
    cs_mm : float, optional
        Spherical aberration. Without it nothing is said about the lens.
    defocus_nm : float, optional
        Positive for underfocus. Without it Scherzer's is taken, and the summary says so.
    focal_spread_nm, convergence_mrad, image_spread_nm : float, optional
        Envelopes, as in `Lens`.
    d_nm : array_like, optional
        Spacings of the table, nm.

    Raises
    ------
    CalibrationError
        If a value is impossible, or a lens value is given without `cs_mm`.
    """
    wavelength = electron_wavelength_pm(voltage_kv)
    lens: Lens | None = None
    origin: Literal["given", "Scherzer's underfocus"] | None = None
    if cs_mm is not None:
        origin = "Scherzer's underfocus" if defocus_nm is None else "given"
        lens = Lens(
            voltage_kv=voltage_kv,
            cs_mm=cs_mm,
            defocus_nm=scherzer_underfocus_nm(voltage_kv, cs_mm) if defocus_nm is None else defocus_nm,
            focal_spread_nm=focal_spread_nm,
            convergence_mrad=convergence_mrad,
            image_spread_nm=image_spread_nm,
        )
    elif defocus_nm is not None or focal_spread_nm or convergence_mrad or image_spread_nm:
        raise CalibrationError(
            "cs_mm must be given for a contrast transfer, got None with other lens values; give the spherical "
            "aberration in mm, 0 for a corrected lens"
        )
    d = np.sort(np.unique(_spacings(d_nm)))[::-1]
    reflections = _reflections(d, float(voltage_kv), lens)
    zeros = () if lens is None or not d.size else tuple((1 / transfer_zeros_per_nm(lens, 1 / d[-1])).tolist())
    return BeamSummary(
        voltage_kv=float(voltage_kv),
        wavelength_pm=wavelength,
        nonrelativistic_wavelength_pm=nonrelativistic_wavelength_pm(voltage_kv),
        speed_over_light=speed_over_light(voltage_kv),
        interaction_constant_per_v_nm=interaction_constant_per_v_nm(voltage_kv),
        lens=lens,
        defocus_origin=origin,
        scherzer_underfocus_nm=None if lens is None else scherzer_underfocus_nm(voltage_kv, lens.cs_mm),
        point_resolution_nm=None if lens is None or lens.cs_mm == 0 else point_resolution_nm(voltage_kv, lens.cs_mm),
        information_limit_nm=None if lens is None else information_limit_nm(lens),
        transfer_zeros_nm=zeros,
        reflections=reflections,
    )


def _reflections(d_nm: NDArray[np.float64], voltage_kv: float, lens: Lens | None) -> tuple[Reflection, ...]:
    def row(d: float) -> Reflection:
        g = 1 / d
        return Reflection(
            d_nm=d,
            g_per_nm=g,
            bragg_angle_mrad=float(bragg_angle_mrad(d, voltage_kv)),
            two_theta_mrad=float(scattering_angle_mrad(d, voltage_kv)),
            excitation_error_per_nm=float(excitation_error_per_nm(g, voltage_kv)),
            transfer=None if lens is None else float(phase_contrast_transfer(g, lens)),
            envelope=None if lens is None else float(envelopes(g, lens).total),
            delocalisation_nm=None if lens is None else float(delocalisation_nm(g, lens)),
            focus_without_delocalisation_nm=None
            if lens is None
            else float(focus_without_delocalisation_nm(g, voltage_kv, lens.cs_mm)),
        )

    return tuple(row(float(d)) for d in d_nm)
