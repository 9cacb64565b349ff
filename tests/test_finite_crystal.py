"""Fringes that do not fill their region evenly: measured over their own extent, and how wrong they may be."""

import dataclasses
import math

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from fringespan.extent import fringe_fields
from fringespan.finite_crystal import CrystalFit, crystal_uncertainty, fit_crystal, smoothing_width_px, why_broken
from fringespan.peaks.demodulation import demodulate
from simulated_fringes import noise, places, prepared

SHAPE = (240, 240)
RADIUS = 80.0
G = np.array([0.11, 0.17])
UNIT = G / np.hypot(*G)


def along_and_across():
    """Return positions along and across g, in pixels from the middle."""
    y, x = places(SHAPE)
    return UNIT[0] * y + UNIT[1] * x, UNIT[1] * y - UNIT[0] * x


def disc():
    along, across = along_and_across()
    return (np.hypot(along, across) < RADIUS).astype(float)


def dome():
    along, across = along_and_across()
    return np.sqrt(np.maximum(1 - (along**2 + across**2) / RADIUS**2, 0))


def wedge():
    along, _ = along_and_across()
    return disc() * np.clip(0.55 + along / RADIUS / 2, 0, None)


def square():
    along, across = along_and_across()
    return (np.maximum(np.abs(along), np.abs(across)) < 70).astype(float)


def crystal_of(envelope, phase=0.0, offset=(0.0, 0.0), speckle=0.05):
    """Return the fit of a crystal with an envelope and a phase against a wave at G - offset."""
    y, x = places(SHAPE)
    values = envelope * np.cos(2 * np.pi * (G[0] * y + G[1] * x) + phase)
    picture = prepared(values + speckle * noise(np.random.default_rng(1), SHAPE))
    at = (G - np.array(offset))[None]
    power_ratio = np.array([(envelope**2).sum() / 4 / speckle**2])
    width = smoothing_width_px(picture.footprint.count, power_ratio, at)
    fields = fringe_fields(picture.footprint, demodulate(picture.pixels, at), at, width)
    return fit_crystal(fields, at, power_ratio, picture.footprint.count)


# --- the fit over the crystal's own extent ---------------------------------------------------------------------------


@pytest.mark.parametrize("envelope", [disc, dome, wedge, square])
@pytest.mark.parametrize("offset", [(0.0, 0.0), (0.002, -0.001), (-0.003, 0.003)])
def test_the_frequency_is_that_of_the_crystal_whatever_its_shape(envelope, offset):
    crystal = crystal_of(envelope(), offset=offset)
    # a hundredth of a period over the extent
    assert np.abs(crystal.shift[0] - offset).max() * 160 < 0.01


@pytest.mark.parametrize(
    ("envelope", "length", "width"),
    [
        # sqrt(12 var): a disc of radius r has variance r^2 / 4 along any direction, a square of side a has a^2 / 12
        pytest.param(disc, math.sqrt(3) * RADIUS, math.sqrt(3) * RADIUS, id="disc"),
        pytest.param(square, 140, 140, id="square"),
    ],
)
def test_the_extent_along_and_across_g_is_that_of_an_even_crystal(envelope, length, width):
    crystal = crystal_of(envelope())
    assert crystal.length[0] == pytest.approx(length, rel=0.06)
    assert crystal.width[0] == pytest.approx(width, rel=0.06)
    assert crystal.share[0] == pytest.approx(envelope().mean(), rel=0.12)


def test_an_oblong_crystal_is_longer_one_way():
    along, across = along_and_across()
    crystal = crystal_of(((np.abs(along) < 40) & (np.abs(across) < 90)).astype(float))
    assert crystal.length[0] == pytest.approx(80, rel=0.1)
    assert crystal.width[0] == pytest.approx(180, rel=0.1)


def test_an_even_crystal_shows_no_phase_and_keeps_its_plateau():
    for envelope in (disc(), square()):
        crystal = crystal_of(envelope)
        assert crystal.phase_rms[0] < 0.05
        assert crystal.plateau_loss[0] < 0.2
        assert not crystal.one_sided[0]
        assert crystal.spread[0] < 0.02
        assert why_broken(crystal) == [None]


def test_a_dome_loses_its_plateau():
    assert crystal_of(dome()).plateau_loss[0] > crystal_of(disc()).plateau_loss[0] + 0.1


def test_a_wedge_is_one_sided():
    assert crystal_of(wedge()).one_sided[0]
    assert not crystal_of(dome()).one_sided[0]


@pytest.mark.parametrize("rms", [0.1, 0.3])
def test_a_wavy_phase_is_measured(rms):
    along, _ = along_and_across()
    crystal = crystal_of(disc(), phase=rms * math.sqrt(2) * np.cos(2 * np.pi * along / 100))
    # smoothing takes some of it, the fitted slope a little more
    assert 0.6 * rms < crystal.phase_rms[0] < 1.1 * rms


# --- broken fringes --------------------------------------------------------------------------------------------------


def reversal():
    along, _ = along_and_across()
    return np.where(along > 10, np.pi, 0.0)


def ring_reversal():
    along, across = along_and_across()
    return np.where(np.hypot(along, across) < RADIUS / math.sqrt(2), np.pi, 0.0)


def parabola():
    along, _ = along_and_across()
    return 2 * np.pi * 1.0 * (along / RADIUS) ** 2


@pytest.mark.parametrize(
    "phase",
    [
        pytest.param(ring_reversal, id="contrast reverses towards the rim"),
        pytest.param(parabola, id="bent by a whole period"),
    ],
)
def test_broken_fringes_say_why(phase):
    (reason,) = why_broken(crystal_of(disc(), phase()))
    assert reason is not None
    assert "fringe" in reason


def test_of_a_crystal_in_two_halves_of_opposite_contrast_the_larger_is_measured():
    crystal = crystal_of(disc(), reversal())
    assert why_broken(crystal) == [None]
    # a disc cut at r / 8 beyond its middle: variance of the larger part, by numbers
    along, _ = along_and_across()
    part = along[(disc() > 0) & (along < 10)]
    assert crystal.length[0] == pytest.approx(math.sqrt(12 * part.var()), rel=0.15)
    assert np.abs(crystal.shift[0]).max() * crystal.length[0] < 0.03


@pytest.mark.parametrize("envelope", [disc, dome, wedge, square])
def test_sound_fringes_are_not_called_broken(envelope):
    assert why_broken(crystal_of(envelope())) == [None]
    assert why_broken(crystal_of(envelope(), 0.2 * np.cos(2 * np.pi * along_and_across()[0] / 90))) == [None]


# --- how far the field is smoothed -----------------------------------------------------------------------------------


def test_stronger_fringes_are_smoothed_less_and_close_neighbours_more():
    apart = np.array([(0.1, 0.1), (-0.2, 0.3)])
    weak, strong = (smoothing_width_px(240.0**2, np.full(2, t), apart) for t in (40.0, 4000.0))
    assert (strong < weak).all()
    close = np.array([(0.1, 0.1), (0.1, 0.1 + 10 / 240)])
    assert (smoothing_width_px(240.0**2, np.full(2, 4000.0), close) > strong).all()


@given(st.floats(10, 1e7), st.floats(1e3, 1e7))
def test_smoothing_never_exceeds_an_eighth_of_the_region(power_ratio, area):
    (width,) = smoothing_width_px(area, np.array([power_ratio]), np.array([(0.2, 0.2)]))
    assert 0 < width <= math.sqrt(area) / 8


# --- the uncertainty that one picture cannot show --------------------------------------------------------------------


def stated(phase, plateau, one_sided=None, n=4):
    """Return a fit with these features; all else as in a crystal of extent 1."""
    values = {field.name: np.zeros(n) for field in dataclasses.fields(CrystalFit)}
    values |= {
        "length": np.ones(n), "width": np.ones(n), "share": np.ones(n), "phase_rms": np.broadcast_to(phase, n).astype(float),
        "plateau_loss": np.broadcast_to(plateau, n).astype(float),
        "one_sided": np.zeros(n, bool) if one_sided is None else one_sided,
    }  # fmt: skip
    return CrystalFit(**values)


def kappa(phase, plateau, residual=None, lens=None, one_sided=None):
    on_lattice = np.ones(4, bool)
    residual = None if residual is None else np.asarray(residual, float)
    return crystal_uncertainty(stated(phase, plateau, one_sided), np.full(4, 1e-3), residual, on_lattice, lens)


def test_an_even_crystal_keeps_a_small_uncertainty():
    """Median error of slabs on simulated particles: some thousandths of a fringe over the extent."""
    assert 0.001 < kappa(0.0, 0.0).along[0] < 0.01
    assert 0.001 < kappa(0.0, 0.0, residual=[0, 0, 0, 0]).along[0] < 0.01


@given(st.floats(0, 0.5), st.floats(0, 0.8), st.floats(0.001, 0.2))
def test_more_phase_or_less_plateau_never_means_less_uncertainty(phase, plateau, more):
    for residual in (None, [0.01, -0.01, 0.02, 0.0]):
        before = kappa(phase, plateau, residual).along[0]
        assert kappa(phase + more, plateau, residual).along[0] >= before * 0.999
        assert kappa(phase, plateau + more, residual).along[0] >= before * 0.999


def test_reflections_that_agree_on_a_lattice_halve_it_and_those_that_do_not_raise_it():
    alone = kappa(0.2, 0.2).along[0]
    agreeing = kappa(0.2, 0.2, [0.001, -0.001, 0.001, 0.0]).along[0]
    differing = kappa(0.2, 0.2, [0.15, -0.12, 0.1, -0.14]).along[0]
    assert agreeing < 0.6 * alone
    assert differing > 1.2 * alone


def test_across_g_it_is_several_times_smaller_unless_the_crystal_is_a_wedge():
    even = kappa(0.2, 0.2)
    assert even.across[0] == pytest.approx(even.along[0] / 4)
    tilted = kappa(0.2, 0.2, one_sided=np.ones(4, bool))
    assert tilted.across[0] == pytest.approx(tilted.along[0])


def test_a_known_lens_lowers_it_for_reflections_that_it_does_not_shift_and_raises_it_for_others():
    unknown = kappa(0.2, 0.2, [0.02, -0.02, 0.01, 0.0]).along
    known = kappa(0.2, 0.2, [0.02, -0.02, 0.01, 0.0], lens=np.array([0.0, 0.3, 1.0, -5.0])).along
    assert known[0] < known[1] < unknown[1]
    assert known[2] > unknown[2]
    # beyond one nm it grows no more, and the sign does not matter
    assert known[3] == pytest.approx(known[2])


def test_a_length_from_the_lattice_is_uncertain_by_the_plateau_that_is_lost():
    assert kappa(0.2, 0.4, [0, 0, 0, 0]).lattice > kappa(0.2, 0.0, [0, 0, 0, 0]).lattice > 0
