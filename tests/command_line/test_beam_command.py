"""`fringespan beam`: the numbers are those of `fringespan.beam`; here, that they are all there."""

import csv
import io
import json

import pytest


def test_the_wavelength_is_the_published_one_with_and_without_relativity(run):
    # 1.97 pm and 2.24 pm at 300 kV (common practice, no source)
    result = run("beam", "300")
    assert result.exit_code == 0
    assert "1.9687 pm" in result.stdout
    assert "2.2391 pm" in result.stdout
    assert "transfer" not in result.stdout


def test_with_a_lens_transfer_resolution_and_shift_are_told(run):
    text = run("beam", "300", "--cs", "1.2", "--defocus", "60").stdout
    for words in ("spherical aberration", "60.0 nm", "Scherzer's underfocus", "point resolution", "transfer", "shift"):
        assert words in text
    assert "finer ones" in text


def test_without_a_defocus_scherzers_is_taken_and_said(run):
    text = run("beam", "200", "--cs", "0.5").stdout
    assert "(Scherzer's underfocus)" in text


def test_envelopes_can_be_given(run):
    assert (
        "information limit" in run("beam", "200", "--cs", "0.5", "--focal-spread", "4", "--convergence", "0.2").stdout
    )


def test_the_table_and_the_document_hold_the_spacings_asked_for(run):
    rows = list(csv.DictReader(io.StringIO(run("beam", "200", "--d", "0.2355,0.2039", "--csv", "-").stdout)))
    assert [float(row["d_nm"]) for row in rows] == [0.2355, 0.2039]
    assert rows[0]["transfer"] == ""
    document = json.loads(run("beam", "200", "--d", "0.2355,0.2039", "--cs", "1", "--json", "-").stdout)
    assert document["voltage_kv"] == 200
    assert document["lens"]["cs_mm"] == 1
    # small angles: 2 theta = lambda / d
    assert document["reflections"][0]["two_theta_mrad"] == pytest.approx(document["wavelength_pm"] / 0.2355, rel=1e-4)


@pytest.mark.parametrize("name", ["t.png", "t.svg", "t.pdf"])
def test_the_transfer_is_drawn(run, tmp_path, name):
    assert run("beam", "300", "--cs", "1.2", "--figure", tmp_path / name).exit_code == 0
    assert (tmp_path / name).stat().st_size > 5_000
