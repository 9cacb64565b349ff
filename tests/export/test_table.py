"""CSV for other programs: every digit, units in the headings."""

import csv
import io

import pytest

from fringespan.export.table import Table, csv_text, peak_table
from fringespan.record import record_of


def read_back(table):
    return list(csv.DictReader(io.StringIO(csv_text(table))))


def test_a_row_a_peak_with_every_digit(make_measurement, make_peak):
    peak = make_peak(0.2355123456789, 35.264)
    (row,) = read_back(peak_table([record_of([make_measurement(peaks=(peak,))])]))
    assert row["picture"] == "particle.tif"
    assert row["region"] == "grain A"
    assert row["peak"] == "1"
    assert float(row["d_nm"]) == peak.d_nm
    assert float(row["d_uncertainty_nm"]) == peak.d_uncertainty_nm
    assert float(row["g_row_per_nm"]) == peak.g_per_nm[0]
    assert float(row["g_column_per_px"]) == peak.g_per_px[1]
    assert float(row["g_variance_column_per_nm2"]) == peak.g_covariance_per_nm2[1, 1]
    assert float(row["two_theta_mrad"]) == peak.two_theta_mrad


def test_peaks_are_counted_from_one_and_combinations_too(make_measurement):
    rows = read_back(peak_table([record_of([make_measurement()])]))
    assert [row["peak"] for row in rows] == ["1", "2", "3"]
    assert rows[2]["combination_of_peaks"] == "1 2"
    assert (rows[2]["lattice_m"], rows[2]["lattice_n"]) == ("1", "1")


def test_the_angle_to_the_strongest_peak_stands_in_its_row(make_measurement):
    rows = read_back(peak_table([record_of([make_measurement()])]))
    assert rows[0]["angle_to_peak_1_deg"] == ""
    assert float(rows[1]["angle_to_peak_1_deg"]) == pytest.approx(109.472)
    assert float(rows[1]["angle_to_peak_1_uncertainty_deg"]) == 0.09


def test_what_is_not_known_is_empty(make_measurement, make_peak):
    peak = make_peak(0.2, 10, d_nm=None, d_uncertainty_nm=None, g_per_nm=None, withheld="broken fringe")
    (row,) = read_back(peak_table([record_of([make_measurement(peaks=(peak,))])]))
    assert row["d_nm"] == row["g_row_per_nm"] == row["lattice_m"] == row["cautions"] == ""
    assert row["withheld"] == "broken fringe"


def test_a_region_without_fringes_has_no_row_but_the_headings_stay(make_measurement):
    table = peak_table([record_of([make_measurement(peaks=())])])
    assert table.rows == ()
    assert csv_text(table).startswith("picture,frame,region,peak,d_nm,")


def test_several_records_follow_each_other(make_measurement):
    records = [record_of([make_measurement()]), record_of([make_measurement()])]
    assert len(peak_table(records).rows) == 6


def test_every_heading_of_a_number_with_a_unit_names_it(make_measurement):
    for name in peak_table([]).columns:
        if name.startswith(("d_", "g_", "period", "direction", "angle", "two_theta")):
            assert name.endswith(("_nm", "_per_nm", "_per_nm2", "_px", "_per_px", "_deg", "_mrad")), name


def test_commas_quotes_and_line_breaks_in_names_are_quoted():
    assert csv_text(Table(("a", "b"), (('x,"y"\nz', None),))) == 'a,b\n"x,""y""\nz",\n'


def test_a_ragged_table_is_refused():
    with pytest.raises(ValueError, match="every row must have 2 cells"):
        Table(("a", "b"), ((1,),))
