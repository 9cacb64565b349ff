"""Random trials of the ranking: right as often as it says, and never sure without reason.

The recipe and the full table: `python tests/benchmarks/ranking_trials.py`.
"""

from __future__ import annotations

import importlib.util
import sys
from pathlib import Path
from types import ModuleType

import numpy as np
import pytest
from scipy.special import bdtrc


@pytest.fixture(scope="module")
def trials() -> ModuleType:
    path = Path(__file__).parent.parent / "benchmarks" / "ranking_trials.py"
    spec = importlib.util.spec_from_file_location("ranking_trials", path)
    assert spec is not None
    assert spec.loader is not None
    module = importlib.util.module_from_spec(spec)
    sys.modules["ranking_trials"] = module
    spec.loader.exec_module(module)
    return module


def test_a_few_trials_come_out_right(trials: ModuleType) -> None:
    known = trials.run(trials.Case("", peaks=4, scale=0.001), 60, seed=5)
    assert known.right >= 50
    assert known.covered >= 57
    assert known.identified_right == known.identified > 0
    alone = trials.run(trials.Case("", peaks=4, listed=1), 60, seed=6)
    assert alone.zone_right >= 57


def test_a_few_trials_without_the_truth_are_not_identified(trials: ModuleType) -> None:
    left_out = trials.run(trials.Case("", peaks=4, listed=20, truth_listed=False), 60, seed=7)
    assert left_out.identified <= 4
    assert left_out.unlisted > 30


@pytest.mark.slow
@pytest.mark.parametrize(
    ("settings", "least"),
    [
        ({"peaks": 2}, {"covered": 0.97}),
        ({"peaks": 4}, {"covered": 0.97}),
        ({"peaks": 8}, {"covered": 0.97}),
        ({"peaks": 4, "noise": 0.01}, {"covered": 0.97}),
        ({"peaks": 4, "false_peaks": 2}, {"covered": 0.97}),
        ({"peaks": 4, "scale": 0.001}, {"covered": 0.97, "right": 0.9}),
        ({"peaks": 8, "scale": 0.001}, {"covered": 0.97, "right": 0.94}),
        ({"peaks": 2, "listed": 5}, {"covered": 0.97, "right": 0.93}),
        ({"peaks": 4, "listed": 1}, {"zone_right": 0.97}),
    ],
    ids=str,
)
def test_many_trials_reach_their_goals(trials: ModuleType, settings: dict[str, float], least: dict[str, float]) -> None:
    number = 500
    tally = trials.run(trials.Case("", **settings), number, seed=101)
    for name, share in least.items():
        assert getattr(tally, name) >= share * number, name
    # at most one identification in a hundred is wrong: the number of errors is no rarer than that explains
    wrong = tally.identified - tally.identified_right
    assert wrong == 0 or bdtrc(wrong - 1, tally.identified, 0.01) > 0.01
    # what it says is what comes true
    if "listed" not in settings:
        assert tally.said / number == pytest.approx(tally.right / number, abs=0.08)


@pytest.mark.slow
@pytest.mark.parametrize(("scale", "most"), [(0.001, 0.06), (0.02, 0.05)])
@pytest.mark.parametrize("peaks", [2, 4, 8])
def test_many_trials_without_the_truth(trials: ModuleType, scale: float, peaks: int, most: float) -> None:
    tally = trials.run(trials.Case("", scale=scale, peaks=peaks, truth_listed=False), 500, seed=101)
    assert tally.identified <= most * 500


@pytest.mark.slow
def test_a_region_costs_a_fraction_of_a_transform(trials: ModuleType) -> None:
    trials.run(trials.Case("", peaks=8), 3, seed=1)
    tally = trials.run(trials.Case("", peaks=8), 100, seed=2)
    # the goal is 0.15; a busy machine is given more
    assert np.median(tally.seconds) < 0.3 * trials.fft_time()
