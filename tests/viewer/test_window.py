"""The whole in a real window with a real mouse and real keys."""

import numpy as np
import pytest
from qtpy.QtCore import Qt
from qtpy.QtGui import QGuiApplication

import fringespan as fs
from fringespan.export.measurement_text import spacing_text
from fringespan.viewer.layers import FROM_LAYER
from fringespan.viewer.open import open_docks
from viewer.conftest import two_fringes

LEFT = Qt.MouseButton.LeftButton


def corners(region) -> np.ndarray:
    return np.array(region.vertices_px)


def shown_column(here, column: int) -> list[str]:
    model = here.dock("Spacings").sorted
    return [model.index(row, column).data() for row in range(model.rowCount())]


@pytest.fixture
def here(desktop):
    """Return a viewer with a picture and one measured region."""
    here = desktop()
    here.layer = here.add_picture(two_fringes())
    here.draw_rectangle(here.layer, (40, 50), (200, 210))
    here.wait_until_measured()
    return here


def test_a_region_is_measured_while_it_is_drawn_and_equals_the_library(desktop):
    here = desktop()
    layer = here.add_picture(two_fringes())
    outlines = set()
    here.draw_rectangle(
        layer,
        (40, 50),
        (200, 210),
        steps=8,
        on_step=lambda: outlines.update(region.drawn for region in here.state.regions),
    )
    here.wait_until_measured()
    assert len(outlines) >= 3, "the outline was followed while it was drawn"
    (region,) = here.state.regions
    assert region.drawn.kind == "rectangle"
    assert corners(region.drawn).min(axis=0) == pytest.approx([40, 50], abs=1.5)
    assert corners(region.drawn).max(axis=0) == pytest.approx([200, 210], abs=1.5)
    micrograph = fs.Micrograph(layer.data, pixel_size_nm=0.02)
    expected = fs.measure(micrograph, fs.Region("region 1", region.drawn.vertices_px, "rectangle"))
    assert len(expected.peaks) >= 2
    assert [p.d_nm for p in region.measurement.peaks] == [p.d_nm for p in expected.peaks]
    assert shown_column(here, 1) == [spacing_text(peak, "nm") for peak in expected.peaks]
    assert here.dock("Spectrum").panel.marked == list(range(len(expected.peaks)))
    label = str(here.desk.regions_layer.features["label"][0])
    assert label == f"region 1\n{spacing_text(expected.peaks[0], 'nm')} nm"


def test_results_follow_a_region_that_is_dragged(here):
    before = here.state.current
    here.desk.select_and_move()
    measured = set()
    here.state.region_measured.connect(lambda _id: measured.add(here.state.current.measurement.region.vertices_px))
    mouse, layer = here.mouse, here.layer
    mouse.press(mouse.at(120, 130, layer))
    mouse.release(mouse.at(120, 130, layer))
    mouse.drag(mouse.at(120, 130, layer), mouse.at(150, 145, layer), steps=10)
    here.wait_until_measured()
    after = here.state.current
    assert after.drawn.id == before.drawn.id
    moved = corners(after.drawn).mean(axis=0) - corners(before.drawn).mean(axis=0)
    assert moved == pytest.approx([30, 15], abs=2)
    assert after.measurement.region.vertices_px == after.drawn.vertices_px, "the last outline was measured"
    assert len(measured) >= 2
    assert not here.state.is_dragged


def test_a_clicked_peak_is_selected_in_all_docks_and_its_fringes_are_drawn(here, qtbot):
    panel = here.dock("Spectrum").panel
    qtbot.mouseClick(panel.viewport(), LEFT, pos=panel.view_position(1).toPoint())
    assert here.state.peak == 1
    table = here.dock("Spacings").table
    assert [index.row() for index in table.selectionModel().selectedRows()] == [1]
    lines = here.viewer.layers["fringes of the selected spacing"].data
    peak = here.state.current.measurement.peaks[1]
    assert len(lines) >= 10
    # the middle of each line lies on a crest of the fitted wave
    middles = lines[:, 0] + lines[:, 1] / 2
    cycles = (middles - peak.phase_origin_px) @ peak.g_per_px + peak.phase_rad / (2 * np.pi)
    assert np.abs(cycles - np.round(cycles)).max() < 1e-3
    place = table.visualRect(table.model().index(0, 1)).center()
    qtbot.mouseClick(table.viewport(), LEFT, pos=place)
    assert here.state.peak == 0
    qtbot.mouseClick(panel.viewport(), LEFT, pos=panel.rect().topLeft() + (panel.rect().center() / 30))
    assert here.state.peak is None
    assert len(here.viewer.layers["fringes of the selected spacing"].data) == 0


def test_a_typed_pixel_size_changes_every_result_the_layers_and_can_be_undone(here, qtbot):
    dock = here.dock("Picture and regions")
    before = [peak.d_nm for peak in here.state.current.measurement.peaks]
    spectrum = here.state.current.measurement.spectrum
    qtbot.mouseClick(dock.calibrate, LEFT)
    assert dock.form.isVisible()
    assert dock.pixel_size.text() == "0.02"
    dock.pixel_size.setFocus()
    dock.pixel_size.selectAll()
    qtbot.keyClicks(dock.pixel_size, "0.025")
    qtbot.keyClick(dock.pixel_size, Qt.Key.Key_Return)
    qtbot.keyClicks(dock.uncertainty, "1.5")
    qtbot.keyClick(dock.uncertainty, Qt.Key.Key_Return)
    here.wait_until_measured()
    measurement = here.state.current.measurement
    assert [peak.d_nm for peak in measurement.peaks] == pytest.approx([1.25 * d for d in before])
    assert measurement.peaks[0].d_uncertainty_nm == pytest.approx(0.015 * measurement.peaks[0].d_nm, rel=0.05)
    assert measurement.spectrum is spectrum, "nothing was transformed again"
    assert measurement.micrograph.pixel_size_source == "typed"
    for layer in here.viewer.layers:
        assert layer.scale[-2:] == pytest.approx([0.025, 0.025])
        assert [str(unit) for unit in layer.units] == ["nanometer", "nanometer"]
    qtbot.mouseClick(dock.undo, LEFT)
    qtbot.mouseClick(dock.undo, LEFT)
    here.wait_until_measured()
    assert [peak.d_nm for peak in here.state.current.measurement.peaks] == pytest.approx(before)
    assert here.layer.scale == pytest.approx([0.02, 0.02])


def test_an_impossible_pixel_size_is_refused_in_words_and_changes_nothing(here, qtbot):
    dock = here.dock("Picture and regions")
    before = here.state.current.measurement
    dock.calibrate.setChecked(True)
    for typed, said in (("0,02,1", "numbers"), ("two", "not a number"), ("-3", "pixel_size_nm must lie between")):
        dock.pixel_size.selectAll()
        qtbot.keyClicks(dock.pixel_size, typed)
        qtbot.keyClick(dock.pixel_size, Qt.Key.Key_Return)
        assert said in dock.form_problem.text()
        assert dock.form_problem.isVisible()
    assert here.state.current.measurement is before


def test_a_region_that_became_too_small_keeps_its_last_good_result_and_says_why(here, qtbot):
    said = []
    here.state.complained.connect(said.append)
    before = here.state.current.measurement
    layer = here.desk.regions_layer
    data = np.array(layer.data[0])
    layer.data = [data[0] + (data - data[0]) * 0.1]
    here.wait_until_measured()
    region, dock = here.state.current, here.dock("Spacings")
    assert region.measurement is before
    assert region.is_stale
    assert dock.banner.isVisible()
    assert "draw it larger" in dock.banner.text()
    assert "last good" in dock.banner.text()
    assert shown_column(here, 1) == [spacing_text(peak, "nm") for peak in before.peaks]
    assert len(said) == 1


def test_two_regions_have_names_and_results_of_their_own_and_keep_them_when_one_is_removed(here, qtbot):
    dock = here.dock("Picture and regions")
    here.draw_rectangle(here.layer, (10, 10), (90, 120))
    here.wait_until_measured()
    assert [region.drawn.name for region in here.state.regions] == ["region 1", "region 2"]
    assert dock.region_name.text() == "region 2"
    dock.region_name.selectAll()
    qtbot.keyClicks(dock.region_name, "grain B")
    qtbot.keyClick(dock.region_name, Qt.Key.Key_Return)
    here.wait_until_measured()
    second = here.state.current
    qtbot.mouseClick(dock.previous, LEFT)
    assert here.state.current.drawn.name == "region 1"
    qtbot.mouseClick(dock.tools["Remove"], LEFT)
    (left,) = here.state.regions
    assert (left.drawn.id, left.drawn.name) == (second.drawn.id, "grain B")
    assert left.measurement is second.measurement
    here.draw_rectangle(here.layer, (20, 20), (120, 120))
    here.wait_until_measured()
    assert [region.drawn.name for region in here.state.regions] == ["grain B", "region 3"]


def test_the_copied_table_holds_every_digit(here, qtbot):
    dock = here.dock("Spacings")
    qtbot.mouseClick(dock.copy, LEFT)
    lines = [line.split("\t") for line in QGuiApplication.clipboard().text().splitlines()]
    peaks = here.state.current.measurement.peaks
    assert lines[1][:3] == ["peak", "d (nm)", "u(d) (nm)"]
    assert [float(line[1]) for line in lines[2 : 2 + len(peaks)]] == pytest.approx([p.d_nm for p in peaks], rel=1e-6)
    assert ["peak", "peak", "angle (deg)", "u(angle) (deg)"] in lines


def test_the_unit_is_chosen_and_remembered_for_the_next_viewer(here, desktop):
    dock = here.dock("Spacings")
    in_nm = [peak.d_nm for peak in here.state.current.measurement.peaks]
    dock.unit.setCurrentIndex(2)
    shown = [float(text.split("(")[0]) for text in shown_column(here, 1)]
    assert shown == pytest.approx([1000 * d for d in in_nm], rel=1e-3)
    assert desktop().state.unit == "pm"


def test_the_shown_frame_of_a_stack_is_measured(desktop):
    here = desktop()
    stack = np.stack([two_fringes(period_px=period) for period in (10.0, 11.0, 12.0)])
    layer = here.add_picture(stack)
    here.viewer.dims.set_current_step(0, 0)
    here.draw_rectangle(layer, (40, 50), (200, 210))
    here.wait_until_measured()
    periods = []
    for frame in range(3):
        here.viewer.dims.set_current_step(0, frame)
        here.wait_until_measured()
        assert here.state.micrograph.frame == frame
        periods.append(here.state.current.measurement.peaks[0].period_px)
    assert periods == pytest.approx([10, 11, 12], rel=3e-3)


def test_a_scale_that_somebody_else_sets_is_taken_over(here):
    here.layer.scale = (0.03, 0.03)
    here.wait_until_measured()
    micrograph = here.state.micrograph
    assert micrograph.pixel_size_nm == (0.03, 0.03)
    assert micrograph.pixel_size_source == FROM_LAYER
    peak = here.state.current.measurement.peaks[0]
    assert peak.d_nm == pytest.approx(0.03 * peak.period_px)


def test_layers_and_pictures_may_be_deleted_while_measuring(here):
    layer = here.desk.regions_layer
    layer.data = [np.array(layer.data[0]) + 1]
    here.viewer.layers.remove(layer)
    assert here.state.regions == ()
    here.draw_rectangle(here.layer, (40, 50), (200, 210))
    here.viewer.layers.remove(here.layer)
    assert here.state.micrograph is None
    assert here.dock("Picture and regions").picture_name.text() == "No picture"
    here.qtbot.waitUntil(lambda: here.workplace.measurer.is_idle, timeout=30_000)
    assert shown_column(here, 1) == []


def test_docks_are_closed_in_any_order_and_lose_nothing(here):
    before = here.state.current
    for names in (("Picture and regions", "Spectrum", "Spacings"), ("Spacings", "Picture and regions", "Spectrum")):
        for name in names:
            here.viewer.window.remove_dock_widget(here.dock(name))
        assert here.workplace.measurer is None, "nothing is left that would show a result"
        open_docks(here.viewer)
        here.wait_until_measured()
        assert here.state.current.measurement is before.measurement
        assert shown_column(here, 1) == [spacing_text(peak, "nm") for peak in before.measurement.peaks]


def test_two_viewers_do_not_mix(here, desktop):
    other = desktop()
    assert other.state is not here.state
    layer = other.add_picture(two_fringes(period_px=9))
    other.draw_rectangle(layer, (60, 60), (190, 190))
    other.wait_until_measured()
    assert len(here.state.regions) == 1
    assert other.state.current.measurement.peaks[0].period_px == pytest.approx(9, rel=3e-3)
    assert here.state.current.measurement.peaks[0].period_px == pytest.approx(11, rel=3e-3)


def test_closing_the_window_while_measuring_ends_the_thread(here):
    for shift in range(3):
        layer = here.desk.regions_layer
        layer.data = [np.array(layer.data[0]) + shift + 1]
    measurer = here.workplace.measurer
    here.viewer.close()
    here.qtbot.waitUntil(lambda: here.workplace.measurer is None, timeout=10_000)
    assert measurer.join(20)


def test_angles_to_a_line_appear_while_it_is_drawn_and_go_with_it(here, qtbot):
    dock = here.dock("Spacings")
    column = [dock.model.headerData(k, Qt.Orientation.Horizontal) for k in range(dock.model.columnCount())].index(
        "to line (°)"
    )
    assert dock.table.isColumnHidden(column)
    qtbot.mouseClick(here.dock("Picture and regions").tools["Line"], LEFT)
    mouse = here.mouse
    mouse.drag(mouse.at(220, 40, here.layer), mouse.at(220, 200, here.layer))
    assert not dock.table.isColumnHidden(column)
    (region,) = here.state.regions
    # of the spacings at 20 and 80 degrees, the fringes run at 110 and 170: 70 and 10 degrees off a level line
    shown = sorted(float(text.split("(")[0]) for text in shown_column(here, column)[:2])
    assert shown == pytest.approx([10, 70], abs=0.8)
    layer = here.desk.regions_layer
    layer.selected_data = {1}
    layer.remove_selected()
    assert dock.table.isColumnHidden(column)
    assert here.state.regions == (region,)
    here.draw_rectangle(here.layer, (20, 20), (100, 100))
    assert here.state.regions[-1].drawn.name == "region 2", "a line takes no number"
    here.wait_until_measured()
