"""Where a crystal's fringes are: local amplitude and phase, the part they fill, its outline."""

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from hypothesis.extra.numpy import arrays
from scipy import ndimage
from skimage.measure import find_contours, points_in_poly

from fringespan.extent import crystal_footprint, crystal_mask, filled_part, fringe_fields, outline
from fringespan.peaks.demodulation import demodulate
from simulated_fringes import Wave, ellipse_mask, fringes, noise, places, prepared

SHAPE = (200, 240)
WAVE = Wave((0.11, 0.17), 1.0, 0.7)


def disc(shape, centre, radius):
    """Return a disc, centre in pixels from the middle of the picture."""
    y, x = places(shape)
    return np.hypot(y - centre[0], x - centre[1]) < radius


def fields_of(values, waves=(WAVE,), width=6.0, mask=None, shift=(0.0, 0.0)):
    picture = prepared(values, mask)
    g = np.array([w.g for w in waves])
    demodulated = demodulate(picture.pixels, g + np.array(shift))
    return picture, fringe_fields(picture.footprint, demodulated, g, np.full(len(g), width))


# --- amplitude and phase ---------------------------------------------------------------------------------------------


@pytest.mark.parametrize("shape", [(200, 240), (123, 77), (450, 420)])
def test_a_plane_wave_has_its_amplitude_and_phase_everywhere(shape):
    _, fields = fields_of(fringes(shape, [WAVE]) + 100)
    inner = np.s_[0, 4:-4, 4:-4]
    assert np.abs(fields.field[inner]) == pytest.approx(np.full_like(fields.field[inner].real, 0.5), abs=0.02)
    assert np.angle(fields.field[inner]) == pytest.approx(np.full_like(fields.field[inner].real, 0.7), abs=0.05)
    assert max(fields.inside.shape) <= 40
    # a last row or column of cells that is mostly beyond the edge does not count
    assert fields.inside[:-1, :-1].all()


def test_the_phase_is_against_the_wanted_wave_wherever_the_pixels_were_demodulated():
    _, fields = fields_of(fringes(SHAPE, [WAVE]), shift=(0.3 / 200, -0.4 / 240))
    inner = np.angle(fields.field[0, 5:-5, 5:-5])
    assert inner == pytest.approx(np.full_like(inner, 0.7), abs=0.06)


def test_the_field_follows_an_envelope_and_a_bend():
    y, x = places(SHAPE)
    envelope = np.exp(-(y**2 + x**2) / (2 * 60**2))
    bend = 0.4 * np.sin(2 * np.pi * x / 240)
    values = envelope * np.cos(2 * np.pi * (WAVE.g[0] * y + WAVE.g[1] * x) + bend)
    _, fields = fields_of(values, width=5.0)
    i, j = np.meshgrid(np.arange(4, len(fields.y) - 4), np.arange(4, len(fields.x) - 4), indexing="ij")
    at_y, at_x = fields.y[i], fields.x[j]
    expected = np.exp(-(at_y**2 + at_x**2) / (2 * 60**2)) / 2
    assert np.abs(fields.field[0, i, j]) == pytest.approx(expected, abs=0.02)
    assert np.angle(fields.field[0, i, j]) == pytest.approx(0.4 * np.sin(2 * np.pi * at_x / 240), abs=0.05)


def test_cells_outside_the_region_are_not_inside():
    mask = ellipse_mask(SHAPE)
    _, fields = fields_of(fringes(SHAPE, [WAVE]), mask=mask)
    y, x = np.meshgrid(fields.y, fields.x, indexing="ij")
    radius = np.hypot(y / 100, x / 120)
    assert fields.inside[radius < 0.9].all()
    assert not fields.inside[radius > 1.1].any()


# --- the filled part -------------------------------------------------------------------------------------------------


@given(
    amplitude=arrays(float, st.tuples(st.integers(2, 12), st.integers(2, 12)), elements=st.floats(0, 1)),
    share=st.floats(0.1, 0.9),
    cut=st.integers(0, 3),
)
def test_the_filled_part_is_connected_and_has_no_holes(amplitude, share, cut):
    inside = np.ones(amplitude.shape, bool)
    inside[:, : min(cut, amplitude.shape[1] - 1)] = False
    part = filled_part(amplitude, inside, share)
    assert not (part & ~inside).any()
    assert ndimage.label(part)[1] <= 1
    assert (ndimage.binary_fill_holes(part) & inside == part).all()


def test_of_two_parts_the_larger_is_kept():
    amplitude = np.zeros((20, 30))
    amplitude[2:8, 2:8], amplitude[5:18, 12:28] = 1.2, 1.0
    amplitude[10:12, 15:18] = 0.0
    part = filled_part(amplitude, np.ones(amplitude.shape, bool), 0.5)
    expected = np.zeros(amplitude.shape, bool)
    expected[5:18, 12:28] = True
    assert (part == expected).all()


DISCS = [
    pytest.param((0, 0), 60, id="middle"),
    pytest.param((-25, 40), 55, id="off the middle"),
    pytest.param((30, -70), 40, id="near the edge"),
]


@pytest.mark.parametrize(("centre", "radius"), DISCS)
@pytest.mark.parametrize("speckle", [0.0, 0.5])
def test_the_mask_is_where_the_crystal_is(centre, radius, speckle):
    waves = [Wave((0.11, 0.17), 1.0, 0.7), Wave((-0.19, 0.1), 0.8, 0.2)]
    crystal = disc(SHAPE, centre, radius)
    values = fringes(SHAPE, waves) * crystal + speckle * noise(np.random.default_rng(1), SHAPE)
    _, fields = fields_of(values, waves)
    mask = crystal_mask(fields, np.array([20.0, 16.0]))
    cell = (fields.y[1] - fields.y[0]) * (fields.x[1] - fields.x[0])
    assert mask.sum() * cell == pytest.approx(np.pi * radius**2, rel=0.12)
    y, x = np.meshgrid(fields.y, fields.x, indexing="ij")
    # smoothed by 6 px, cells of 8: right to about a cell
    distance = np.hypot(y - centre[0], x - centre[1])
    assert mask[distance < radius - 9].all()
    assert not mask[distance > radius + 9].any()


def test_the_outline_surrounds_the_mask_by_half_its_cells():
    crystal = disc(SHAPE, (10, -20), 70)
    _, fields = fields_of(fringes(SHAPE, [WAVE]) * crystal)
    mask = crystal_mask(fields, np.array([20.0]))
    corners = outline(fields, mask)
    y, x = np.meshgrid(fields.y, fields.x, indexing="ij")
    inside = points_in_poly(np.stack([y.ravel(), x.ravel()], axis=1), corners).reshape(mask.shape)
    # a corner of one cell may be rounded off
    assert (inside != mask).mean() < 0.01
    distance = np.hypot(corners[:, 0] - 10, corners[:, 1] + 20)
    assert distance == pytest.approx(np.full(len(corners), 70.0), abs=10)
    # the same as scikit-image's contour, to a fraction of a cell
    (reference,) = find_contours(np.pad(mask, 1).astype(float), 0.5)
    cell = fields.y[1] - fields.y[0]
    reference = (reference - 1) * cell + (fields.y[0], fields.x[0])
    nearest = np.hypot(*(corners[:, None] - reference[None]).transpose(2, 0, 1)).min(axis=1)
    assert nearest.max() < cell


@pytest.mark.parametrize("masked", [False, True])
def test_the_footprint_of_the_crystal_lies_over_the_crystal(masked):
    region = ellipse_mask(SHAPE) if masked else None
    crystal = disc(SHAPE, (15, 30), 60)
    picture, fields = fields_of(fringes(SHAPE, [WAVE]) * crystal, mask=region)
    footprint, corner = crystal_footprint(picture.footprint, fields, crystal_mask(fields, np.array([20.0])))
    inside = np.zeros(SHAPE, bool)
    inside[corner[0] : corner[0] + footprint.shape[0], corner[1] : corner[1] + footprint.shape[1]] = footprint.mask
    wanted = crystal if region is None else crystal & region
    assert (inside != wanted).sum() < 0.12 * wanted.sum()
    if region is not None:
        assert not (inside & ~region).any()
    # it just holds its pixels
    assert footprint.mask[0].any()
    assert footprint.mask[-1].any()
    assert footprint.mask[:, 0].any()
    assert footprint.mask[:, -1].any()
