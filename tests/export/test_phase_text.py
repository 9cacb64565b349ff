"""Phases and zone patterns in words, tables and figures."""

from __future__ import annotations

import unicodedata
from dataclasses import replace

import pytest

from fringespan.crystal.library import built_in_phases, load_phase
from fringespan.crystal.reflections import expected_reflections
from fringespan.crystal.zone import zone_pattern
from fringespan.exceptions import SettingsError
from fringespan.export.figure import figure_bytes
from fringespan.export.phase_text import phase_lines, reflection_lines, reflections_table, zone_lines, zone_table
from fringespan.export.zone_figure import indices_in_math, zone_figure


def shown(text: str) -> str:
    return "".join(c for c in text if not unicodedata.combining(c))


def test_source_and_how_far_it_was_checked_are_told() -> None:
    text = "\n".join(line.text for line in phase_lines(load_phase("au"), 100))
    assert "Gold (Au)" in text
    assert "0.40786" in text
    assert "packaged data" in text
    assert "lattice parameter to 0.1 %" in text


def test_hazards_are_told_with_the_usual_care() -> None:
    lines = phase_lines(load_phase("quartz"), 100)
    assert any(line.emphasis == "warning" and "silicosis" in line.text for line in lines)


@pytest.mark.parametrize("phase", built_in_phases(), ids=lambda p: p.id)
def test_every_phase_fits_an_e_mail(phase) -> None:
    lines = [*phase_lines(phase, 80), *reflection_lines(expected_reflections(phase, 0.13, voltage_kv=200), 80)]
    assert max(len(shown(line.text)) for line in lines) <= 80


def test_the_table_lists_what_can_be_seen() -> None:
    text = [line.text for line in reflection_lines(expected_reflections(load_phase("si"), 0.19), 80)]
    assert any("111" in line and "1.000" in line for line in text)
    assert any("200" in line and "double scattering" in line for line in text)
    assert not any(line.strip().startswith("100") for line in text)  # extinguished by the centring


def test_columns_stand_beneath_each_other_under_overbars() -> None:
    lines = [shown(line.text) for line in zone_lines(zone_pattern(load_phase("mg"), (0, 0, 1), d_min_nm=0.13), 100)]
    points = [line.index("0.") for line in lines if "0." in line and line.startswith("  ")]
    assert len(set(points)) == 1


def test_four_indices_on_hexagonal_axes() -> None:
    text = "\n".join(line.text for line in zone_lines(zone_pattern(load_phase("ti"), (1, 0, 0), d_min_nm=0.2), 100))
    assert "[100] = [21\u03051\u03050]" in text


def test_tables_hold_every_digit() -> None:
    table = reflections_table(expected_reflections(load_phase("au"), 0.2))
    row = dict(zip(table.columns, next(r for r in table.rows if r[:3] == (1, 1, 1)), strict=True))
    assert row["d_nm"] == pytest.approx(0.407860 / 3**0.5, rel=1e-12)
    assert row["forbidden"] is None
    pattern = zone_pattern(load_phase("au"), (1, 1, 0), d_min_nm=0.2, voltage_kv=200)
    assert len(zone_table(pattern).rows) == len(pattern.spots)


def test_a_pattern_is_drawn_with_live_text_and_its_spots() -> None:
    svg = figure_bytes(zone_figure(zone_pattern(load_phase("si"), (1, 1, 0), d_min_nm=0.15)), "svg").decode()
    assert "Silicon" in svg
    assert "double scattering" in svg
    assert "<text" in svg


def test_an_empty_pattern_is_refused() -> None:
    empty = replace(zone_pattern(load_phase("au"), (1, 1, 0), d_min_nm=0.2), spots=())
    with pytest.raises(SettingsError, match="no reflection"):
        zone_figure(empty)


def test_bars_of_neighbouring_indices_stay_apart() -> None:
    assert indices_in_math((0, -2, -2)).count(r"\overline{2}") == 2
    assert r"\hspace" in indices_in_math((0, -2, -2))
