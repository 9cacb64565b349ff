"""What people read: the picture, the region, the spacings with their uncertainty, and what to do next."""

import dataclasses
import re

import numpy as np
import pytest

from fringespan.cautions import Caution
from fringespan.export.measurement_text import measurement_lines
from fringespan.micrograph import Micrograph
from fringespan.record import Identification, Match, record_of
from fringespan.region import Region


def text_of(*measurements, width=100, identifications=None):
    return "\n".join(line.text for line in measurement_lines(record_of(measurements, identifications), width))


def cautions(count, gravity="note"):
    return tuple(Caution(f"{gravity}-{i}", gravity, f"Caution {gravity} {i}.", f"Remedy {i}.") for i in range(count))


def test_the_whole_text_of_a_measurement(make_measurement):
    assert text_of(make_measurement(), width=80) == "\n".join(
        [
            "particle.tif",
            "  300 x 280 px, 0.02 nm/px, known to 1.5 % (given by the user), 300 kV",
            "",
            "grain A",
            "  crystal 4.6 x 4.0 nm, 25 fringes across, 3 peaks",
            "           d   fit  crystal  direction  S/N  lattice  combines  visibility",
            "        (nm)   (%)      (%)      (deg)",
            " 1  0.235(4)  0.10     0.05   35.26(6)   23   1  0                    0.21",
            " 2  0.235(4)  0.10     0.05  144.74(6)   23   0  1                    0.21",
            " 3  0.204(3)  0.10     0.05   90.00(6)   23   1  1    1, 2            0.21",
            "  angles (deg): 1-2 109.47(9), 1-3 54.74(9), 2-3 54.74(9)",
            "  Warning: Only 6 fringes lie in the region. Draw it larger.",
        ]
    )


@pytest.mark.parametrize("width", [40, 60, 80, 120, 200])
def test_lines_keep_to_the_width(make_measurement, square_lattice, width):
    measurement = make_measurement(cautions=cautions(2), lattice=square_lattice)
    for line in measurement_lines(record_of([measurement]), width):
        assert len(line.text) <= width


def test_what_has_no_room_is_named(make_measurement):
    text = text_of(make_measurement(), width=45)
    assert "No room for: crystal, S/N, combines, visibility; widen the window, or write --csv." in " ".join(
        text.split()
    )


def test_without_a_pixel_size_everything_is_in_pixels_and_the_way_to_one_is_named(make_measurement, make_peak):
    in_pixels = dict.fromkeys(("g_per_nm", "g_covariance_per_nm2", "d_nm", "d_fit_uncertainty_nm", "d_uncertainty_nm"))
    measurement = make_measurement(Micrograph(np.ones((300, 300))), peaks=(make_peak(0.2, 30, **in_pixels),))
    text = text_of(measurement)
    assert "pixel size not stated: everything is in pixels; give --pixel-size NM" in text
    # covariance diag(1e-4, 2e-4) / d^2 and g at 30 degrees: u(T) = T sqrt(1e-4 sin^2 30 + 2e-4 cos^2 30) = 0.132 px
    assert "10.00(13)" in text
    assert "nm)" not in text


def test_while_the_pixel_sizes_uncertainty_is_not_stated_the_text_says_what_the_parentheses_leave_out(
    make_measurement, make_peak
):
    micrograph = Micrograph(np.ones((300, 300)), pixel_size_nm=0.02)
    text = text_of(make_measurement(micrograph, peaks=(make_peak(0.2355, 30, stated_uncertainty=None),)))
    assert "uncertainty not stated" in text
    assert "0.2355(3)" in text
    assert "leaves out that of the pixel size" in text
    assert "--pixel-size-uncertainty PERCENT" in text


@pytest.mark.parametrize(
    ("uncertainty", "words"), [(0.015, "known to 1.5 %"), ((0.01, 0.02), "known to 1 % (down) and 2 % (right)")]
)
def test_the_heading_tells_how_well_the_pixel_size_is_known(make_measurement, uncertainty, words):
    micrograph = Micrograph(
        np.ones((300, 300)), pixel_size_nm=(0.02, 0.021), pixel_size_relative_uncertainty=uncertainty
    )
    text = text_of(make_measurement(micrograph))
    assert words in text
    assert ("pixel" in text.split("peaks")[1]) is False
    assert "0.02 (down) x 0.021 (right) nm/px" in text


def test_a_frame_of_a_stack_is_named(make_measurement):
    micrograph = dataclasses.replace(make_measurement().micrograph, frame=2, frame_count=5)
    assert "particle.tif, frame 2 of 0 to 4" in text_of(make_measurement(micrograph))


def test_no_fringe_is_said_in_words(make_measurement):
    assert "no fringe found" in text_of(make_measurement(peaks=()))


def test_at_most_three_cautions_are_shown_gravest_first(make_measurement):
    text = text_of(make_measurement(cautions=(*cautions(3), *cautions(2, "grave"), *cautions(1, "warning"))))
    shown = [line.split(":")[0].strip() for line in text.splitlines() if "Caution" in line]
    assert shown == ["Grave", "Grave", "Warning"]
    assert "3 more in the record (--json FILE)." in text


def test_a_caution_of_several_peaks_stands_once_with_their_numbers(make_measurement, make_peak):
    (caution,) = cautions(1)
    peaks = (make_peak(0.2, 0, cautions=(caution,)), make_peak(0.3, 10), make_peak(0.4, 20, cautions=(caution,)))
    text = text_of(make_measurement(peaks=peaks, cautions=()))
    assert text.count("Caution note 0.") == 1
    assert "Note: peaks 1, 3: Caution note 0. Remedy 0." in text


def test_a_withheld_spacing_gives_its_reason_and_no_number(make_measurement, make_peak):
    nothing = dict.fromkeys(("d_nm", "d_fit_uncertainty_nm", "d_crystal_uncertainty_nm", "d_uncertainty_nm"))
    text = text_of(make_measurement(peaks=(make_peak(0.2, 0, withheld="its contrast reverses", **nothing),)))
    assert "withheld" in text
    assert "1: no d: its contrast reverses." in text


def test_harmonics_and_lattice_points_are_remarked(make_measurement, make_peak):
    peaks = (
        make_peak(0.2, 0),
        make_peak(0.1, 0, combination_of=(0, 0)),
        make_peak(0.3, 50, origin="lattice point"),
        make_peak(0.4, 60, origin="lattice point"),
    )
    text = text_of(make_measurement(peaks=peaks))
    assert re.search(r"^ 2 .* 1, 1", text, re.MULTILINE)
    assert "3, 4: lattice point." in text


def test_of_many_peaks_the_angles_between_the_strongest_are_shown(make_measurement, make_peak):
    text = text_of(make_measurement(peaks=tuple(make_peak(0.2, 4.0 * i) for i in range(40))))
    assert "774 more in the record" in " ".join(text.split())


def test_the_lattice_is_described(make_measurement, square_lattice):
    text = " ".join(text_of(make_measurement(lattice=square_lattice)).split())
    assert "2 on one lattice of 0.200(3) x 0.200(3) nm, 90.000(10) deg" in text


def test_the_verdict_names_phase_and_zone(make_measurement):
    gold = Match(
        phase="au",
        zone=(1, -1, 0),
        probability=0.93,
        hkl=((1, 1, 1),),
        rotation_deg=0.0,
        scale=1.0,
        scale_uncertainty=None,
        fits=True,
        pulls=(0.1,),
    )
    found = Identification(verdict="ambiguous", matches=(gold,))
    text = text_of(make_measurement(), identifications=[found])
    assert "Ambiguous." in text
    assert "au along [11\u03050], probability 0.93." in text
    assert re.search(r"^ 1 .* 111", text, re.MULTILINE)


def test_hostile_names_stay_on_their_line(make_measurement):
    region = Region("evil\n\x1b[2J" + "x" * 500, ((0, 0), (0, 99), (99, 99)))
    text = text_of(make_measurement(region=region), width=80)
    assert "\x1b" not in text
    assert max(map(len, text.splitlines())) <= 80
