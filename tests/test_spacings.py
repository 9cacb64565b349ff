"""From reciprocal vectors in pixels to spacings, directions and angles: exact geometry, propagated uncertainties."""

import math

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from fringespan.micrograph import Micrograph
from fringespan.spacings import Scale, diagonal_blocks, pair_angles, spacings_of

PIXELS = np.zeros((30, 30))


def scale_of(row_nm=0.02, column_nm=0.02, shear=0.0, uncertainty=None):
    return Scale.of(
        Micrograph(PIXELS, pixel_size_nm=(row_nm, column_nm), shear=shear, pixel_size_relative_uncertainty=uncertainty)
    )


def spacings(g, covariance=None, along=0.0, across=0.0, scale=None):
    g = np.atleast_2d(np.asarray(g, float))
    n = len(g)
    covariance = np.zeros((n, 2, 2)) if covariance is None else np.broadcast_to(covariance, (n, 2, 2))
    return spacings_of(g, covariance, np.full(n, along), np.full(n, across), scale or scale_of())


vectors = st.tuples(st.floats(-0.5, 0.5), st.floats(-0.5, 0.5)).filter(lambda g: math.hypot(*g) > 0.02)
geometries = st.tuples(st.floats(0.005, 0.1), st.floats(0.005, 0.1), st.floats(-0.5, 0.5))


# --- geometry --------------------------------------------------------------------------------------------------------


@given(g=vectors, geometry=geometries)
def test_the_spacing_is_the_distance_between_the_fringes_in_the_specimen(g, geometry):
    """By a road of its own: two fringes cross the axes of the picture; the distance between the lines is elementary."""
    row_nm, column_nm, shear = geometry
    got = spacings(g, scale=scale_of(row_nm, column_nm, shear))
    # v row + u column = 0 and = 1 are neighbouring fringes; in nm, row = y / row_nm, column = x / column_nm - shear row
    a = g[0] / row_nm - g[1] * shear / row_nm
    b = g[1] / column_nm
    assert got.d[0] == pytest.approx(1 / math.hypot(a, b))
    assert np.hypot(*got.g[0]) == pytest.approx(1 / got.d[0])
    # the fringes run at right angles to the direction of g
    along_fringe = np.array([-b, a])
    direction = math.radians(got.direction[0])
    assert along_fringe @ (-math.sin(direction), math.cos(direction)) == pytest.approx(0, abs=1e-9 * math.hypot(a, b))


@pytest.mark.parametrize(
    ("g", "direction"),
    [
        pytest.param((0.0, 0.2), 0.0, id="to the right"),
        pytest.param((-0.2, 0.2), 45.0, id="up and to the right"),
        pytest.param((-0.2, 0.0), 90.0, id="up"),
        pytest.param((-0.2, -0.2), 135.0, id="up and to the left"),
        pytest.param((0.2, 0.2), 135.0, id="down and to the right, the same fringes"),
        pytest.param((0.2, 0.0), 90.0, id="down"),
        pytest.param((0.0, -0.2), 0.0, id="to the left"),
        pytest.param((-0.1, 0.2), math.degrees(math.atan2(1, 2)), id="slightly up"),
    ],
)
def test_directions_count_counter_clockwise_from_the_right_of_the_screen(g, direction):
    assert spacings(g).direction[0] == pytest.approx(direction)


@given(g=vectors, geometry=geometries)
def test_of_opposite_vectors_the_one_to_the_right_or_straight_up_is_reported(g, geometry):
    scale = scale_of(*geometry)
    one, other = spacings(g, scale=scale), spacings((-g[0], -g[1]), scale=scale)
    row, column = one.g_px[0]
    assert column > 0 or (column == 0 and row < 0)
    assert (one.g_px == other.g_px).all()
    assert one.direction == pytest.approx(other.direction)
    assert 0 <= one.direction[0] < 180
    assert one.flipped[0] != other.flipped[0]


def test_without_a_pixel_size_all_is_in_pixels():
    scale = Scale.of(Micrograph(PIXELS))
    got = spacings((0.0, 0.125), covariance=np.eye(2) * 1e-8, scale=scale)
    assert scale.geometry is None
    assert got.d[0] == pytest.approx(8.0)
    assert got.fit[0] == pytest.approx(64 * 1e-4)
    assert np.isnan(got.scale[0])


# --- uncertainties ---------------------------------------------------------------------------------------------------


def monte_carlo(g, covariance, geometry, relative, count=40_000):
    """Return spread of d and direction when g and the pixel size vary, by drawing them."""
    rng = np.random.default_rng(1)
    draws = rng.multivariate_normal(g, covariance, count)
    row_nm, column_nm, shear = geometry
    error = rng.standard_normal((count, 2)) * relative
    rows, columns = row_nm * (1 + error[:, 0]), column_nm * (1 + error[:, 1])
    y = (draws[:, 0] - shear * draws[:, 1]) / rows
    x = draws[:, 1] / columns
    turn = np.angle((x - 1j * y) / (x - 1j * y).mean())
    return (1 / np.hypot(x, y)).std(), np.degrees(turn.std())


CASES = [
    pytest.param((0.11, 0.23), (0.02, 0.02, 0.0), id="square pixels"),
    pytest.param((-0.31, 0.12), (0.02, 0.035, 0.0), id="oblong pixels"),
    pytest.param((0.15, 0.15), (0.03, 0.02, 0.2), id="sheared pixels"),
]
COVARIANCE = np.array([[4e-8, 1.5e-8], [1.5e-8, 2e-8]])


@pytest.mark.parametrize(("g", "geometry"), CASES)
def test_the_fit_part_is_that_of_repeated_draws(g, geometry):
    got = spacings(g, COVARIANCE, scale=scale_of(*geometry, uncertainty=0.0))
    d, direction = monte_carlo(g, COVARIANCE, geometry, (0, 0))
    assert got.fit[0] == pytest.approx(d, rel=0.02)
    assert got.direction_uncertainty[0] == pytest.approx(direction, rel=0.02)


@pytest.mark.parametrize(("g", "geometry"), CASES[:2])
def test_the_pixel_size_part_is_that_of_repeated_draws(g, geometry):
    relative = (0.01, 0.004)
    got = spacings(g, scale=scale_of(*geometry, uncertainty=relative))
    d, direction = monte_carlo(g, np.zeros((2, 2)), geometry, relative)
    assert got.scale[0] == pytest.approx(d, rel=0.03)
    assert got.direction_uncertainty[0] == pytest.approx(direction, rel=0.03)


@given(g=vectors, relative=st.floats(1e-4, 0.1))
def test_a_pixel_size_error_common_to_both_axes_scales_d_and_turns_nothing(g, relative):
    got = spacings(g, scale=scale_of(uncertainty=relative))
    assert got.scale[0] == pytest.approx(relative * got.d[0])
    assert got.direction_uncertainty[0] == pytest.approx(0)


@given(g=vectors, along=st.floats(1e-6, 1e-3), across=st.floats(1e-6, 1e-3))
def test_the_crystal_part_is_relative_along_g_and_turns_it_by_what_is_across(g, along, across):
    got = spacings(g, along=along, across=across)
    length = math.hypot(*g)
    assert got.crystal[0] == pytest.approx(got.d[0] * along / length)
    assert got.direction_uncertainty[0] == pytest.approx(math.degrees(across / length))
    assert got.fit[0] == 0


# --- angles ----------------------------------------------------------------------------------------------------------


def angles(g, joint, scale=None, across=0.0):
    scale = scale or scale_of()
    return pair_angles(spacings(g, diagonal_blocks(joint), scale=scale), joint, scale, np.full(len(g), across))


@given(first=vectors, second=vectors, geometry=geometries)
def test_the_angle_is_between_the_vectors_as_reported(first, second, geometry):
    scale = scale_of(*geometry)
    got = spacings([first, second], scale=scale)
    (angle,) = pair_angles(got, np.zeros((4, 4)), scale, np.zeros(2))
    assert angle.peaks == (0, 1)
    a, b = got.g
    expected = math.degrees(math.atan2(abs(a[0] * b[1] - a[1] * b[0]), a @ b))
    assert angle.angle_deg == pytest.approx(expected, abs=1e-9)
    turned = abs(got.direction[0] - got.direction[1])
    assert min(abs(angle.angle_deg - turned), abs(180 - angle.angle_deg - turned)) < 1e-6


def test_there_is_one_angle_for_every_pair():
    g = np.array([(0.0, 0.2), (-0.2, 0.2), (-0.2, 0.0), (0.1, 0.3)])
    got = angles(g, np.zeros((8, 8)))
    assert [a.peaks for a in got] == [(0, 1), (0, 2), (0, 3), (1, 2), (1, 3), (2, 3)]
    assert got[1].angle_deg == pytest.approx(90)
    assert angles(g[:1], np.zeros((2, 2))) == ()


@pytest.mark.parametrize("signs", [(1, 1), (1, -1), (-1, -1)])
@pytest.mark.parametrize("geometry", [(0.02, 0.02, 0.0), (0.02, 0.03, 0.15)])
def test_the_angle_scatters_as_its_uncertainty_says_also_where_errors_are_shared(signs, geometry):
    g = np.array([(-0.11, 0.23), (0.05, 0.21)]) * np.array(signs)[:, None]
    root = np.random.default_rng(2).standard_normal((4, 4)) * 1e-4
    joint = root @ root.T
    (angle,) = angles(g, joint, scale_of(*geometry))
    draws = np.random.default_rng(3).multivariate_normal(g.ravel(), joint, 40_000).reshape(-1, 2, 2)
    transform = scale_of(*geometry).to_per_nm
    a, b = (draws[:, k] * signs[k] @ transform for k in (0, 1))
    drawn = np.degrees(np.arctan2(np.abs(a[:, 0] * b[:, 1] - a[:, 1] * b[:, 0]), (a * b).sum(axis=1)))
    assert angle.angle_uncertainty_deg == pytest.approx(drawn.std(), rel=0.02)


def test_an_uneven_pixel_size_turns_both_vectors_together():
    relative = (0.01, 0.004)
    scale = scale_of(uncertainty=relative)
    g = np.array([(-0.11, 0.23), (0.05, 0.21)])
    (angle,) = angles(g, np.zeros((4, 4)), scale)
    error = np.random.default_rng(4).standard_normal((40_000, 2)) * relative
    a, b = (g[k] / (1 + error) for k in (0, 1))
    drawn = np.degrees(np.arctan2(np.abs(a[:, 0] * b[:, 1] - a[:, 1] * b[:, 0]), (a * b).sum(axis=1)))
    assert angle.angle_uncertainty_deg == pytest.approx(drawn.std(), rel=0.03)
    # an even one turns nothing
    (even,) = angles(g, np.zeros((4, 4)), scale_of(uncertainty=0.05))
    assert even.angle_uncertainty_deg == pytest.approx(0)


def test_the_crystal_part_across_turns_each_vector_on_its_own():
    g = np.array([(0.0, 0.2), (-0.1, 0.0)])
    (angle,) = angles(g, np.zeros((4, 4)), across=1e-4)
    assert angle.angle_uncertainty_deg == pytest.approx(math.degrees(math.hypot(1e-4 / 0.2, 1e-4 / 0.1)))


def test_blocks_are_those_on_the_diagonal():
    joint = np.arange(36.0).reshape(6, 6)
    assert (diagonal_blocks(joint) == [joint[:2, :2], joint[2:4, 2:4], joint[4:, 4:]]).all()
