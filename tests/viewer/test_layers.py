"""Between napari layers and our objects: geometry, frames, outlines. On layers alone, without a window."""

import numpy as np
import pytest
from napari.components import Dims
from napari.layers import Image

from fringespan.exceptions import UnreadablePictureError
from fringespan.region import Region, place_region
from fringespan.viewer.layers import (
    drawn_regions,
    name_regions,
    new_lines_layer,
    new_regions_layer,
    pixel_geometry,
    set_pixel_size,
    shown_picture,
)
from fringespan.viewer.reader import layer_of, layers_of_file
from viewer.conftest import two_fringes


def picture(**options) -> Image:
    return Image(np.zeros((60, 80), np.float32), **options)


def dims_of(layer: Image, step: tuple[int, ...] = ()) -> Dims:
    dims = Dims(ndim=layer.ndim, range=[(0, n - 1, 1) for n in layer.data.shape[: layer.ndim]])
    for axis, value in enumerate(step):
        dims.set_current_step(axis, value)
    return dims


TURN = np.radians(30)

GEOMETRIES = [
    pytest.param({}, None, 0, id="pixels"),
    pytest.param({"scale": (0.02, 0.02)}, None, 0, id="a scale without a unit is none"),
    pytest.param({"scale": (0.02, 0.02), "units": "nm"}, (0.02, 0.02), 0, id="nm"),
    pytest.param({"scale": (0.2, 0.25), "units": "angstrom"}, (0.02, 0.025), 0, id="angstrom, not square"),
    pytest.param({"scale": (2e-5, 2e-5), "units": "um"}, (0.02, 0.02), 0, id="micrometres"),
    pytest.param({"scale": (0.02, 0.02), "units": "px"}, None, 0, id="napari's css pixel is no length"),
    pytest.param({"scale": (0.02, 0.02), "units": ("nm", "pixel")}, None, 0, id="one axis in pixels"),
    pytest.param({"scale": (1, 1), "units": "m"}, None, 0, id="beyond belief"),
    pytest.param({"scale": (0.02, 0.03), "units": "nm", "rotate": 30}, (0.02, 0.03), 0, id="turned"),
    pytest.param(
        # one row further is 0.02 nm down and 0.1 * 0.03 nm to the right
        {"affine": np.array([[0.02, 0, 0], [0.003, 0.03, 0], [0, 0, 1]]), "units": "nm"},
        (0.02, 0.03),
        0.1,
        id="sheared",
    ),
    pytest.param({"scale": (-0.02, 0.03), "units": "nm"}, (0.02, 0.03), 0, id="upside down"),
]


@pytest.mark.parametrize(("options", "size", "shear"), GEOMETRIES)
def test_pixel_geometry_is_what_scale_units_and_transform_say(options, size, shear):
    assert pixel_geometry(picture(**options)) == (size, pytest.approx(shear))


def test_the_shown_frame_of_a_stack_is_taken():
    stack = np.stack([np.full((20, 30), n, np.uint16) for n in range(6)]).reshape(2, 3, 20, 30)
    layer = Image(stack, scale=(1, 1, 0.02, 0.02), units=("pixel", "pixel", "nm", "nm"))
    micrograph = shown_picture(layer, dims_of(layer, (1, 2)))
    assert (micrograph.frame, micrograph.frame_count) == (5, 6)
    assert (np.asarray(micrograph.pixels) == 5).all()
    assert micrograph.pixel_size_nm == (0.02, 0.02)


def test_axes_in_another_order_are_refused_in_words():
    layer = Image(np.zeros((4, 20, 30)))
    dims = dims_of(layer)
    dims.order = (1, 0, 2)
    with pytest.raises(UnreadablePictureError, match="put the axes back"):
        shown_picture(layer, dims)


def test_a_colour_picture_is_measured_by_its_luminance_and_says_so():
    layer = Image(np.full((20, 30, 3), (10, 20, 30), np.uint8), rgb=True)
    micrograph = shown_picture(layer, dims_of(layer))
    # Rec. ITU-R BT.709 luminance
    assert np.asarray(micrograph.pixels) == pytest.approx(0.2126 * 10 + 0.7152 * 20 + 0.0722 * 30)
    assert [caution.code for caution in micrograph.cautions] == ["colour-picture"]


@pytest.mark.parametrize(
    "options",
    [
        pytest.param({}, id="plain"),
        pytest.param({"scale": (0.02, 0.03), "units": "nm", "translate": (3, 4)}, id="scaled and shifted"),
        pytest.param({"rotate": 25, "scale": (0.02, 0.02), "units": "nm"}, id="turned"),
    ],
)
def test_outlines_come_in_pixels_of_the_picture_whatever_its_scale(options):
    layer = picture(**options)
    shapes = new_regions_layer(layer)
    shapes.add_rectangles(np.array([[5, 10], [5, 50], [45, 50], [45, 10]]))
    shapes.add_polygons(np.array([[5, 10], [5, 50], [45, 30.5]]))
    shapes.add_lines(np.array([[0, 0], [10, 10]]))
    first, second = drawn_regions(shapes, layer)
    assert first.vertices_px == ((5, 10), (5, 50), (45, 50), (45, 10))
    assert (first.kind, second.kind) == ("rectangle", "polygon")
    assert second.vertices_px == ((5, 10), (5, 50), (45, 30.5))


def test_an_ellipse_is_the_one_that_the_library_draws():
    layer = picture()
    shapes = new_regions_layer(layer)
    shapes.add_ellipses(np.array([[10, 20], [10, 60], [50, 60], [50, 20]]))
    (drawn,) = drawn_regions(shapes, layer)
    region = Region(drawn.name, drawn.vertices_px, drawn.kind)
    same = Region.ellipse("same", (30, 40), (20, 20))
    count = [place_region(r, (60, 80)).footprint.count for r in (region, same)]
    assert count[0] == pytest.approx(count[1], rel=0.005)


def test_a_rectangle_with_a_moved_corner_is_a_polygon():
    layer = picture()
    shapes = new_regions_layer(layer)
    shapes.add_rectangles(np.array([[5, 10], [5, 50], [45, 50], [45, 10]]))
    data = np.array(shapes.data[0])
    data[2] = (55, 60)
    shapes.data = [(data, "rectangle")]
    assert drawn_regions(shapes, layer)[0].kind == "polygon"


def test_numbers_are_never_given_twice():
    layer = picture()
    shapes = new_regions_layer(layer)
    corners = np.array([[5, 10], [5, 50], [45, 50], [45, 10]])

    def draw():
        shapes.add_rectangles(corners)
        name_regions(shapes, drawn_regions(shapes, layer), {})

    for _ in range(3):
        draw()
    shapes.selected_data = {1, 2}
    shapes.remove_selected()
    draw()
    assert [(r.id, r.name) for r in drawn_regions(shapes, layer)] == [(1, "region 1"), (4, "region 4")]


def test_another_pixel_size_leaves_outlines_where_they_are_in_pixels():
    layer = picture(scale=(0.02, 0.02), units="nm", translate=(1, 2))
    shapes, lines = new_regions_layer(layer), new_lines_layer(layer, "lines", "white", 1)
    shapes.add_rectangles(np.array([[5, 10], [5, 50], [45, 50], [45, 10]]))
    before = drawn_regions(shapes, layer)
    set_pixel_size([layer, shapes, lines], (0.03, 0.031))
    assert drawn_regions(shapes, layer) == before
    assert pixel_geometry(layer)[0] == pixel_geometry(shapes)[0] == pixel_geometry(lines)[0] == (0.03, 0.031)
    set_pixel_size([layer, shapes, lines], None)
    assert pixel_geometry(layer)[0] is None
    assert drawn_regions(shapes, layer) == before


def test_a_file_becomes_a_layer_with_its_scale_and_comes_back_as_it_was(tmp_path):
    import fringespan as fs
    from fringespan.sample_pictures import sample_file

    path = sample_file("two_grains.ome.tif")
    ((pixels, options, kind),) = layers_of_file(str(path))
    assert kind == "image"
    layer = Image(pixels, **options)
    back, file = shown_picture(layer, dims_of(layer)), fs.read(path)
    assert back.pixel_size_nm == file.pixel_size_nm
    assert back.pixel_size_source == file.pixel_size_source
    assert back.name == file.name
    assert back.sha256() == file.sha256()
    assert np.array_equal(np.asarray(back.pixels), np.asarray(file.pixels[:, :]))


def test_a_stack_becomes_one_layer(tmp_path):
    from fringespan.sample_pictures import sample_file

    ((pixels, options, _),) = layers_of_file(str(sample_file("heating_gold.ome.tif")))
    assert pixels.shape[0] == 8
    assert options["units"] == ("pixel", "nm", "nm")


def test_what_is_typed_at_the_command_line_reaches_the_layer(micrograph):
    pixels, options, _ = layer_of(micrograph)
    back = shown_picture(layer := Image(pixels, **options), dims_of(layer))
    assert back.pixel_size_relative_uncertainty == micrograph.pixel_size_relative_uncertainty
    assert np.array_equal(np.asarray(back.pixels), two_fringes())
