"""The region: which outlines are accepted, and exactly which pixels belong to one."""

import math
from dataclasses import FrozenInstanceError, replace

import numpy as np
import pytest
from hypothesis import assume, given
from hypothesis import strategies as st
from skimage.measure import points_in_poly

from fringespan.exceptions import FringespanError, RegionError
from fringespan.region import SMALLEST_WIDTH_PX, Region, place_region

PICTURE = (60, 50)


def pixels_of(region, picture_shape=PICTURE):
    """Return which pixels of a picture belong to a region."""
    placed = place_region(region, picture_shape)
    mask = np.zeros(picture_shape, bool)
    footprint = placed.footprint
    mask[placed.rows, placed.columns] = True if footprint.mask is None else footprint.mask
    from_spans = np.zeros(picture_shape, bool)
    for row, first, stop in footprint.spans.tolist():
        from_spans[placed.rows.start + row, placed.columns.start + first : placed.columns.start + stop] = True
    # two descriptions of one set
    assert (mask == from_spans).all()
    assert footprint.count == mask.sum()
    return mask


def star(centre, corners, scale):
    """Return corners (row, column) that turn once around the centre, so that their outline cannot cross itself."""
    angles = np.linspace(0, 2 * np.pi, len(corners), endpoint=False)
    return [
        (centre[0] + scale * r * math.sin(a), centre[1] + scale * r * math.cos(a))
        for a, r in zip(angles, corners, strict=True)
    ]


def inside_or_on(row, column, corners):
    """Say in whole numbers, hence exactly, whether a point is inside or on an outline of whole-number corners."""
    inside = False
    for (ay, ax), (by, bx) in zip(corners, [*corners[1:], corners[0]], strict=True):
        cross = (by - ay) * (column - ax) - (bx - ax) * (row - ay)
        between = min(ay, by) <= row <= max(ay, by) and min(ax, bx) <= column <= max(ax, bx)
        if cross == 0 and between:
            return True
        if (ay > row) != (by > row):
            # the ray to the right crosses the edge where the edge passes to the right of the point
            inside ^= (cross < 0) == (by > ay)
    return inside


# --- pixels that belong ----------------------------------------------------------------------------------------------


@given(
    centre=st.tuples(st.integers(10, 50), st.integers(10, 40)),
    radii=st.lists(st.integers(18, 45), min_size=3, max_size=12),
)
def test_a_pixel_belongs_when_its_centre_is_inside_or_on_the_outline(centre, radii):
    corners = [(round(y), round(x)) for y, x in star(centre, radii, 1.0)]
    try:
        region = Region("grain", corners)
        mask = pixels_of(region)
    except RegionError:
        assume(False)
    expected = np.array([[inside_or_on(r, c, corners) for c in range(PICTURE[1])] for r in range(PICTURE[0])])
    assert (mask == expected).all()


@given(
    centre=st.tuples(st.floats(10, 50), st.floats(10, 40)),
    radii=st.lists(st.floats(18, 45), min_size=3, max_size=12),
)
def test_the_pixels_are_those_of_a_general_point_in_polygon_test(centre, radii):
    """scikit-image's test says nothing of points on the outline: those within 1e-6 px of it are left out."""
    corners = np.array(star(centre, radii, 1.0)) + 0.0137
    try:
        mask = pixels_of(Region("grain", corners.tolist()))
    except RegionError:
        assume(False)
    points = np.argwhere(np.ones(PICTURE, bool))
    start, step = corners, np.roll(corners, -1, axis=0) - corners
    away = points[:, None] - start[None]
    along = np.clip((away * step).sum(-1) / (step * step).sum(-1), 0, 1)
    distance = np.hypot(*(away - along[..., None] * step).transpose(2, 0, 1)).min(axis=1)
    clear = distance > 1e-6
    expected = points_in_poly(points, corners)
    assert (mask.ravel() == expected)[clear].all()


def test_the_outline_of_a_rectangle_belongs():
    mask = pixels_of(Region.rectangle("box", 10, 5, 39, 44))
    expected = np.zeros(PICTURE, bool)
    expected[10:40, 5:45] = True
    assert (mask == expected).all()


@given(
    top=st.floats(-0.5, 20), left=st.floats(-0.5, 12), height=st.floats(26, 39.5), width=st.floats(26, 37),
    turn=st.integers(0, 3), backwards=st.booleans(),
)  # fmt: skip
def test_a_rectangle_holds_the_same_pixels_however_its_corners_are_listed(top, left, height, width, turn, backwards):
    region = Region.rectangle("box", top, left, top + height, left + width)
    corners = list(region.vertices_px)
    if backwards:
        corners.reverse()
    listed = Region("box", corners[turn:] + corners[:turn])
    # one more corner on an edge takes the general way
    general = Region("box", [*region.vertices_px[:1], (top, left + width / 2), *region.vertices_px[1:]])
    assert (pixels_of(listed) == pixels_of(region)).all()
    assert (pixels_of(general) == pixels_of(region)).all()


def test_no_region_is_the_whole_picture():
    assert pixels_of(Region.whole(PICTURE)).all()
    assert Region.whole(PICTURE).kind == "whole picture"
    assert place_region(Region.whole(PICTURE), PICTURE).cautions == ()


@pytest.mark.parametrize(
    ("rotation_deg", "tip"),
    [
        pytest.param(0, (0, 40), id="wide"),
        pytest.param(30, (-20, 34.64), id="turned counter-clockwise on the screen, so its right end goes up"),
        pytest.param(90, (-40, 0), id="upright"),
    ],
)
def test_an_ellipse_is_turned_counter_clockwise_on_the_screen(rotation_deg, tip):
    ellipse = Region.ellipse("grain", (100, 100), (20, 40), rotation_deg)
    corners = np.array(ellipse.vertices_px) - 100
    farthest = corners[np.hypot(*corners.T).argmax()]
    farthest *= np.sign(farthest @ tip)
    assert farthest == pytest.approx(tip, abs=0.05)
    assert ellipse.kind == "ellipse"
    assert pixels_of(ellipse, (200, 200)).sum() == pytest.approx(math.pi * 20 * 40, rel=0.01)


def test_regions_moved_by_whole_pixels_share_what_depends_on_the_outline_alone():
    corners = np.array([(3.2, 4.7), (45.1, 9.4), (28.8, 50.0)])
    first = place_region(Region("a", corners.tolist()), (90, 90))
    moved = place_region(Region("b", (corners + np.array([20, 31])).tolist()), (90, 90))
    assert moved.footprint is first.footprint
    assert (moved.rows.start - first.rows.start, moved.columns.start - first.columns.start) == (20, 31)


# --- the edge of the picture -----------------------------------------------------------------------------------------


def test_corners_half_a_pixel_beyond_the_last_centre_are_still_inside():
    edge = Region("all", [(-0.5, -0.5), (-0.5, 49.5), (59.5, 49.5), (59.5, -0.5)])
    placed = place_region(edge, PICTURE)
    assert placed.cautions == ()
    assert pixels_of(edge).all()


@pytest.mark.parametrize(
    "corners",
    [
        pytest.param([(-0.6, 0), (-0.6, 40), (40, 40), (40, 0)], id="above"),
        pytest.param([(5, 10), (5, 49.6), (50, 30)], id="right"),
        pytest.param([(-900, -900), (-900, 900), (900, 900), (900, -900)], id="all around"),
    ],
)
def test_a_region_beyond_the_edge_is_clipped_and_says_so(corners):
    region = Region("grain", corners)
    (caution,) = place_region(region, PICTURE).cautions
    assert caution.code == "region-clipped"
    assert caution.gravity == "note"
    inside = pixels_of(region)
    larger = pixels_of(Region("grain", (np.array(corners) + 1000).tolist()), (2000, 2000))
    assert (inside == larger[1000:1060, 1000:1050]).all()


# --- refusals --------------------------------------------------------------------------------------------------------

OUTLINES = [
    pytest.param([(0, 0), (40, 40)], "three", id="a line"),
    pytest.param([], "three", id="nothing"),
    pytest.param([(0, 0, 0), (0, 40, 0), (40, 40, 0)], "corners", id="three coordinates"),
    pytest.param([(0, 0), (0, 40), (40,)], "corners", id="ragged"),
    pytest.param([(0, 0), (0, "right"), (40, 40)], "corners", id="words"),
    pytest.param([(0, 0), (0, math.nan), (40, 40)], "finite", id="not a number"),
    pytest.param([(0, 0), (0, math.inf), (40, 40)], "finite", id="infinite"),
    pytest.param([(0, 0), (20, 20), (40, 40)], "no area", id="all on a line"),
    pytest.param([(5, 5), (5, 5), (5, 5), (5, 5)], "no area", id="one point"),
    pytest.param([(0, 0), (0, 40), (20, 0), (40, 40), (40, 0)], "crosses", id="touching its own side"),
    pytest.param([(0, 0), (40, 40), (0, 40), (40, 10)], "crosses", id="bow tie"),
    pytest.param([(0, 0), (0, 40), (40, 40), (40, 0), (20, 50)], "crosses", id="one corner through the far side"),
    pytest.param(
        [(0, 20), (40, 35), (12, 0), (12, 40), (40, 5)], "crosses", id="five-pointed star, drawn in one stroke"
    ),
    pytest.param(
        [(0, 0), (20, 20), (45, 45), (45, 0), (20, 20), (0, 30)], "crosses", id="crossing in a corner of both lines"
    ),
]


@pytest.mark.parametrize(("corners", "problem"), OUTLINES)
def test_an_impossible_outline_is_refused_by_the_name_of_the_region(corners, problem):
    with pytest.raises(RegionError, match=rf"region 'grain B': .*{problem}") as refusal:
        Region("grain B", corners)
    assert isinstance(refusal.value, FringespanError)


@pytest.mark.parametrize("kind", ["polygon", "rectangle", "ellipse", "whole picture"])
def test_a_crossing_is_refused_whatever_the_outline_was_drawn_as(kind):
    with pytest.raises(RegionError, match="crosses"):
        Region("grain", [(0, 0), (40, 40), (0, 40), (30, 10)], kind)


def test_an_unknown_kind_is_refused():
    with pytest.raises(RegionError, match=r"kind must be one of .*rectangle.*, got 'circle'"):
        Region("grain", [(0, 0), (0, 40), (40, 40)], "circle")


CLOSED = [
    pytest.param([(0, 0), (0, 40), (40, 40), (40, 0), (0, 0)], id="first corner repeated at the end"),
    pytest.param([(0, 0), (0, 40), (0, 40), (40, 40), (40, 0), (40, 0)], id="corners clicked twice"),
    pytest.param([(0, 0), (0, 20), (0, 40), (40, 40), (40, 0)], id="corner on a straight edge"),
]


@pytest.mark.parametrize("corners", CLOSED)
def test_repeated_and_needless_corners_do_no_harm(corners):
    assert (pixels_of(Region("grain", corners)) == pixels_of(Region.rectangle("grain", 0, 0, 40, 40))).all()


@given(
    centre=st.tuples(st.floats(-20, 20), st.floats(-20, 20)),
    radii=st.lists(st.floats(5, 45), min_size=5, max_size=20),
)
def test_an_outline_that_turns_once_around_a_point_does_not_cross_itself(centre, radii):
    Region("grain", star(centre, radii, 1.0))


@pytest.mark.parametrize(
    ("region", "problem"),
    [
        pytest.param(Region.rectangle("a", 100, 5, 140, 45), "no pixel of the picture", id="below the picture"),
        pytest.param(Region("a", [(-40, -40), (-40, -1), (-1, -40)]), "no pixel of the picture", id="left of it"),
        pytest.param(Region("a", [(5.1, 5.1), (5.1, 5.9), (5.9, 5.5)]), "no pixel of the picture", id="between pixels"),
        pytest.param(Region("a", [(70, 40), (40, 70), (70, 70)]), "no pixel", id="its box in the picture, itself not"),
        pytest.param(Region.rectangle("a", 0, 0, 22, 40), "23 px across, at least 24 px", id="too low"),
        pytest.param(Region.rectangle("a", 0, 0, 40, 22), "23 px across, at least 24 px", id="too narrow"),
        pytest.param(Region("a", [(0, 0), (0, 12), (49, 49), (49, 37)]), "px across, at least 24", id="oblique strip"),
        pytest.param(Region.rectangle("a", 50, 0, 90, 40), "10 px across, at least 24 px", id="too little left inside"),
    ],
)
def test_a_region_with_too_few_pixels_of_the_picture_is_refused(region, problem):
    with pytest.raises(RegionError, match=rf"region 'a': .*{problem}"):
        place_region(region, PICTURE)


def test_the_smallest_region_is_24_px_wide():
    assert SMALLEST_WIDTH_PX == 24
    assert pixels_of(Region.rectangle("a", 3, 4, 26, 27)).sum() == 24 * 24


@given(
    corners=st.lists(
        st.tuples(*[st.floats(allow_nan=True, allow_infinity=True) | st.floats(-100, 100)] * 2), min_size=0, max_size=8
    )
)
def test_whatever_the_corners_only_a_named_refusal_comes_out(corners):
    message, mask = "", np.zeros(0)
    try:
        mask = pixels_of(Region("drawn", corners))
    except FringespanError as refusal:
        message = str(refusal)
    assert mask.any() or "region 'drawn'" in message


def test_a_region_is_immutable_and_checked_again_when_replaced():
    region = Region("grain", [[0, 0], [0, 40], [40, 40]])
    assert region.vertices_px == ((0.0, 0.0), (0.0, 40.0), (40.0, 40.0))
    with pytest.raises(FrozenInstanceError):
        region.name = "other"
    with pytest.raises(RegionError):
        replace(region, vertices_px=((0, 0), (1, 1)))
    assert region == Region("grain", np.array([[0, 0], [0, 40], [40, 40]]))
    assert hash(region) == hash(replace(region))
