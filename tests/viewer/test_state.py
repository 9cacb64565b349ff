"""The state: what is asked for, in which order, and what stays when something fails. No window, no Qt."""

import subprocess
import sys
from dataclasses import replace

import numpy as np
import pytest

import fringespan as fs
from fringespan.exceptions import CalibrationError
from fringespan.viewer.state import Calibration, DrawnRegion, MeasuringState, Outcome, carry_out
from viewer.conftest import two_fringes


def square(id: int, top: float = 40, left: float = 40, side: float = 150, name: str | None = None) -> DrawnRegion:
    bottom, right = top + side, left + side
    corners = ((top, left), (top, right), (bottom, right), (bottom, left))
    return DrawnRegion(id, name or f"region {id}", corners, "rectangle")


def work_off(state: MeasuringState) -> int:
    count = 0
    while (job := state.next_job()) is not None:
        state.finish(job, carry_out(job))
        count += 1
    return count


@pytest.fixture
def state(micrograph) -> MeasuringState:
    state = MeasuringState()
    state.show_picture("first", micrograph)
    return state


def test_a_region_is_measured_as_the_library_measures_it(state, micrograph):
    state.set_regions([square(1)])
    assert state.current.is_pending
    assert work_off(state) == 1
    expected = fs.measure(micrograph, fs.Region("region 1", square(1).vertices_px, "rectangle"))
    assert [p.d_nm for p in state.current.measurement.peaks] == [p.d_nm for p in expected.peaks]
    assert not state.current.is_pending
    assert not state.current.is_stale


def test_only_the_newest_outline_is_measured_after_the_running_one(state):
    state.set_regions([square(1)])
    running = state.next_job()
    for top in (41, 42, 43):
        state.set_regions([square(1, top)], dragged=True)
    state.finish(running, carry_out(running))
    assert state.current.measurement.region.vertices_px == square(1).vertices_px
    assert state.current.is_stale, "an older result is shown meanwhile, and marked"
    following = state.next_job()
    assert following.drawn == square(1, 43)
    state.finish(following, carry_out(following))
    assert state.next_job() is None
    state.finish(running, Outcome(None, "a result that comes too late"))
    assert state.current.problem is None


def test_the_current_region_goes_first(state):
    state.set_regions([square(1), square(2, 60), square(3, 80)])
    state.select_region(2)
    assert [state.next_job().region_id] == [2]
    assert work_off(state) == 3


def test_a_result_for_what_is_gone_is_dropped(state):
    state.set_regions([square(1), square(2, 60)])
    job = state.next_job()
    state.set_regions([square(1)])
    state.finish(job, carry_out(job))
    assert [region.measurement for region in state.regions] == [None]
    job = state.next_job()
    state.forget_picture("first")
    state.finish(job, carry_out(job))
    assert state.regions == ()
    assert state.next_job() is None


def test_what_cannot_be_measured_keeps_the_last_good_result_and_is_told_once(state):
    said = []
    state.complained.connect(said.append)
    state.set_regions([square(1)])
    work_off(state)
    good = state.current.measurement
    state.set_regions([square(1, side=5)], dragged=True)
    work_off(state)
    assert state.current.measurement is good
    assert state.current.is_stale
    assert "draw it larger" in state.current.problem
    assert said == [], "nobody is told while the outline is still in the hand"
    state.set_regions([square(1, side=5)])
    assert said == [state.current.problem]


def test_an_outline_that_crosses_itself_is_a_problem_in_words(state):
    state.set_regions([DrawnRegion(1, "bow", ((10, 10), (90, 90), (10, 90), (90, 10)))])
    work_off(state)
    assert "crosses" in state.current.problem


def test_peaks_keep_their_rows_while_the_region_is_dragged_and_are_sorted_afterwards(state, micrograph):
    peaks = {}
    state.set_regions([square(1)])
    work_off(state)
    before = state.current.measurement
    peaks["chosen"] = before.peaks[1].g_per_px
    state.select_peak(1)
    state.set_regions([square(1, 41)], dragged=True)
    job = state.next_job()
    measured = carry_out(job).measurement
    # the same peaks in another order, as when the second becomes the stronger
    turned = replace(measured, peaks=measured.peaks[::-1])
    state.finish(job, Outcome(turned))
    count = len(turned.peaks)
    assert state.current.rows == tuple(range(count))[::-1]
    assert turned.peaks[state.peak].g_per_px == pytest.approx(peaks["chosen"], abs=1e-3)
    state.set_regions([square(1, 41)])
    assert state.current.rows == tuple(range(count))


def test_another_calibration_tells_all_regions_anew_without_a_transform_and_can_be_undone(state, micrograph):
    state.set_regions([square(1), square(2, 60)])
    work_off(state)
    before = [region.measurement for region in state.regions]
    calibration = replace(Calibration.of(micrograph), pixel_size_nm=(0.03, 0.03), voltage_kv=200.0)
    state.recalibrate(calibration)
    work_off(state)
    for old, region in zip(before, state.regions, strict=True):
        assert region.measurement.spectrum is old.spectrum
        assert region.measurement.peaks[0].d_nm == pytest.approx(1.5 * old.peaks[0].d_nm)
        assert region.measurement.peaks[0].two_theta_mrad is not None
    state.undo()
    work_off(state)
    assert state.micrograph.pixel_size_nm == micrograph.pixel_size_nm
    assert state.undo_text is None


def test_an_impossible_calibration_changes_nothing(state, micrograph):
    with pytest.raises(CalibrationError):
        state.recalibrate(replace(Calibration.of(micrograph), voltage_kv=-1))
    assert state.micrograph is micrograph
    assert state.undo_text is None


def test_another_frame_is_measured_with_what_was_typed(state, micrograph):
    state.set_regions([square(1)])
    work_off(state)
    state.recalibrate(replace(Calibration.of(micrograph), pixel_size_nm=(0.03, 0.03)))
    other = replace(micrograph, pixels=two_fringes(period_px=9), frame=1, frame_count=2)
    state.show_picture("first", other)
    work_off(state)
    peak = state.current.measurement.peaks[0]
    assert peak.d_nm == pytest.approx(9 * 0.03, rel=2e-3)


def test_each_picture_has_its_own_regions(state, micrograph):
    state.set_regions([square(1)])
    work_off(state)
    kept = state.current.measurement
    state.show_picture("second", replace(micrograph, pixels=np.array(micrograph.pixels)))
    assert state.regions == ()
    state.show_picture("first", micrograph)
    assert state.current.measurement is kept


def test_regions_are_stepped_through_in_a_ring(state):
    state.set_regions([square(1), square(2), square(3)])
    assert state.current.drawn.id == 3
    state.step_region(1)
    assert state.current.drawn.id == 1
    state.step_region(-1)
    assert state.current.drawn.id == 3


def test_the_state_and_the_desk_need_no_qt():
    code = (
        "import sys; import fringespan.viewer.state, fringespan.viewer.desk, fringespan.viewer.layers\n"
        "print([m for m in sys.modules if m.split('.')[0] in ('qtpy', 'PyQt6', 'PySide6')])"
    )
    done = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, check=True)
    assert done.stdout.strip() == "[]"
