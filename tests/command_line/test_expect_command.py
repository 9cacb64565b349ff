"""`fringespan expect`."""

from __future__ import annotations

import json
from pathlib import Path

import pytest
from click.testing import CliRunner, Result

from fringespan.command_line import program


def run(*arguments: str) -> Result:
    return CliRunner().invoke(program, ["expect", *arguments])


def test_gold_is_listed() -> None:
    done = run("gold", "--d-min", "0.2")
    assert done.exit_code == 0
    assert "0.23548" in done.output
    assert "0.20393" in done.output


def test_the_record_holds_every_family(tmp_path: Path) -> None:
    file = tmp_path / "gold.json"
    assert run("Au", "--voltage", "300", "--json", str(file)).exit_code == 0
    document = json.loads(file.read_text())
    assert document["phase"] == "au"
    first = next(r for r in document["reflections"] if not r["forbidden"])
    assert (first["hkl"], first["multiplicity"], first["relative_intensity"]) == ([1, 1, 1], 8, pytest.approx(1))
    assert first["two_theta_mrad"] == pytest.approx(1.9687 / 0.23548, rel=1e-3)
    assert "centring" in {r["forbidden"] for r in document["reflections"]}


@pytest.mark.parametrize("suffix", [".png", ".svg", ".pdf"])
def test_a_zone_is_drawn(tmp_path: Path, suffix: str) -> None:
    figure = tmp_path / f"zone{suffix}"
    done = run("tio2_a", "--zone", "1,0,0", "--figure", str(figure))
    assert done.exit_code == 0
    assert "Seen along [100]" in done.output
    assert figure.stat().st_size > 1000


def test_the_table_goes_to_standard_output() -> None:
    done = run("gold", "--zone", "110", "--d-min", "0.2", "--csv", "-")
    assert done.exit_code == 0
    assert done.output.splitlines()[0].startswith("h,k,l,")


@pytest.mark.parametrize(
    ("arguments", "status", "words"),
    [
        (["unobtainium"], 1, "no phase called"),
        (["TiO2"], 1, "tio2_r"),
        (["missing.cif"], 1, "missing.cif: cannot be read"),
        (["gold", "--zone", "0,0,0"], 2, "--zone"),
        (["gold", "--d-min", "-1"], 2, "d_min_nm"),
        (["gold", "--voltage", "-5"], 2, "voltage"),
        (["gold", "--figure", "x.png"], 2, "--zone"),
        ([], 2, "PHASE"),
    ],
)
def test_what_cannot_be_used_is_one_line(arguments: list[str], status: int, words: str) -> None:
    done = run(*arguments)
    assert done.exit_code == status
    assert words in done.output
    assert len(done.output.strip().splitlines()) == 1
