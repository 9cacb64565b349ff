"""`fringespan rank`."""

from __future__ import annotations

import json
from pathlib import Path

import pytest
from click.testing import CliRunner, Result

from fringespan.command_line import program

GOLD = "0.2355(4) 0.2039(5) @54.7(3)"


@pytest.fixture(autouse=True)
def _own_folders(tmp_path_factory: pytest.TempPathFactory, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setenv("FRINGESPAN_PHASES", str(tmp_path_factory.mktemp("phases")))
    monkeypatch.setenv("FRINGESPAN_CACHE", str(tmp_path_factory.getbasetemp() / "tables"))


def run(*arguments: str) -> Result:
    return CliRunner().invoke(program, ["rank", *arguments])


def test_the_spacings_of_gold(tmp_path: Path) -> None:
    file = tmp_path / "ranking.json"
    done = run(GOLD, "--scale-uncertainty", "0.5", "--json", str(file))
    assert done.exit_code == 0
    assert done.output.startswith("Ambiguous between")
    assert "not a certificate" in done.output
    [region] = json.loads(file.read_text())["regions"]
    assert "au" in region["credible_phases"]
    assert region["matches"][0]["zone"] == [1, 1, 0]


def test_elements_narrow_the_list() -> None:
    done = run(GOLD, "--elements", "Au", "--json", "-")
    assert {m["phase"] for m in json.loads(done.output)["regions"][0]["matches"]} == {"au"}


def test_one_spacing_is_not_an_identification() -> None:
    done = run("0.2355(4)", "--scale-uncertainty", "1")
    assert done.exit_code == 0
    assert "Too few reflections" in done.output


def test_regions_are_told_apart() -> None:
    done = run(f"{GOLD}; 0.2106(4) 0.2106(4) @90(0.4)", "--phases", "au,mgo", "--scale-uncertainty", "1")
    assert done.exit_code == 0
    assert "Region 1" in done.output
    assert "Region 2" in done.output


def test_the_best_pattern_is_drawn(tmp_path: Path) -> None:
    figure = tmp_path / "best.svg"
    assert run(GOLD, "--phases", "au", "--figure", str(figure)).exit_code == 0
    assert "Gold" in figure.read_text()


@pytest.mark.parametrize(
    ("arguments", "status", "words"),
    [
        (["gold"], 2, "is not a value"),
        (["23.55"], 2, "nm"),
        ([GOLD, "--phases", "unobtainium"], 1, "no phase called"),
        ([GOLD, "--elements", "Qq"], 1, "symbol"),
        ([GOLD, "--elements", "He"], 1, "no phases"),
        ([GOLD, "--scale-uncertainty", "-1"], 2, "pixel_size_relative_uncertainty"),
        (["0.2355(4)", "--phases", "au", "--figure", "x.png"], 1, "no zone to draw"),
    ],
)
def test_what_cannot_be_used_is_one_line(arguments: list[str], status: int, words: str) -> None:
    done = run(*arguments)
    assert done.exit_code == status
    assert words in done.output
    assert len(done.stderr.strip().splitlines()) == 1
