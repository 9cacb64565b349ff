"""The budget adds up as the GUM says; its worked examples come out with their printed digits.

The examples are from JCGM 100:2008 (GUM), annex H, and JCGM 106:2012. Their figures are quoted from memory.
"""

import math

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from fringespan.exceptions import SettingsError
from fringespan.magnification.budget import (
    Budget,
    BudgetLine,
    combined_standard_uncertainty,
    coverage_factor,
    effective_degrees_of_freedom,
    excess_variance,
    judge,
)

# GUM H.1, end-gauge calibration, table H.1: lengths in nm
END_GAUGE_DIFFERENCE = Budget(
    quantity="measured difference",
    lines=(
        BudgetLine(source="repeated observations", standard_uncertainty=5.8, degrees_of_freedom=24),
        BudgetLine(source="random effects of comparator", standard_uncertainty=3.9, degrees_of_freedom=5),
        BudgetLine(source="systematic effects of comparator", standard_uncertainty=6.7, degrees_of_freedom=8),
    ),
)
END_GAUGE = Budget(
    quantity="length of the end gauge",
    lines=(
        BudgetLine(source="standard end gauge", standard_uncertainty=25, degrees_of_freedom=18),
        BudgetLine(source="measured difference", standard_uncertainty=9.7, degrees_of_freedom=25.6),
        # sensitivities: minus the length of the standard, 50 mm, times the mean temperature deviation, -0.1 degrees; minus
        # the length times the expansion coefficient, 11.5e-6 per degree
        BudgetLine(
            source="difference in expansion coefficients",
            standard_uncertainty=0.58e-6,
            sensitivity=-50e6 * -0.1,
            degrees_of_freedom=50,
        ),
        BudgetLine(
            source="difference in temperatures",
            standard_uncertainty=0.029,
            sensitivity=-50e6 * 11.5e-6,
            degrees_of_freedom=2,
        ),
    ),
)


def test_end_gauge_the_measured_difference():
    assert round(END_GAUGE_DIFFERENCE.standard_uncertainty, 1) == 9.7
    # the GUM goes on with the rounded 9.7 nm: 25.6; without that rounding it is 25.4
    assert (
        round(END_GAUGE_DIFFERENCE.degrees_of_freedom * (9.7 / END_GAUGE_DIFFERENCE.standard_uncertainty) ** 4, 1)
        == 25.6
    )


def test_end_gauge_the_contributions_of_temperature():
    contributions = [round(line.contribution, 1) for line in END_GAUGE.lines[2:]]
    assert contributions == [2.9, 16.7]  # printed as 2.9 and 16.6, the latter cut, not rounded, from 16.675


def test_end_gauge_combined_and_expanded():
    assert round(END_GAUGE.standard_uncertainty) == 32
    assert round(END_GAUGE.degrees_of_freedom, 1) == 16.7
    k = coverage_factor(END_GAUGE.degrees_of_freedom, "from t", probability=0.99)
    assert round(k, 2) == 2.92
    assert round(k * 32) == 93
    assert END_GAUGE.largest.source == "standard end gauge"


def test_thermometer_calibration_by_least_squares():
    """GUM H.3: eleven corrections of a thermometer, a straight line, and its value at 30 degrees."""
    t = np.array([21.521, 22.012, 22.512, 23.003, 23.507, 23.999, 24.513, 25.002, 25.503, 26.010, 26.511])
    b = np.array([-0.171, -0.169, -0.166, -0.159, -0.164, -0.165, -0.156, -0.157, -0.159, -0.161, -0.160])
    design = np.stack([np.ones(11), t - 20], axis=1)
    line, squares, *_ = np.linalg.lstsq(design, b, rcond=None)
    covariance = squares[0] / 9 * np.linalg.inv(design.T @ design)
    u = np.sqrt(np.diag(covariance))
    r = covariance[0, 1] / u[0] / u[1]
    assert [round(v, 4) for v in (line[0], u[0])] == [-0.1712, 0.0029]
    assert [round(v, 5) for v in (line[1], u[1])] == [0.00218, 0.00067]
    assert round(r, 3) == -0.930
    # correlated inputs combine with their correlation: 4.1 millidegrees, not 7.3
    at_30 = combined_standard_uncertainty([1, 10], u, [[1, r], [r, 1]])
    assert round(line @ [1, 10], 4) == -0.1494
    assert round(at_30, 4) == 0.0041
    assert combined_standard_uncertainty([1, 10], u) == pytest.approx(math.hypot(u[0], 10 * u[1]))


def test_resistance_and_reactance_from_correlated_means():
    """GUM H.2: five sets of voltage, current and phase angle, measured together."""
    voltage = np.array([5.007, 4.994, 5.005, 4.990, 4.999])
    current = np.array([19.663, 19.639, 19.640, 19.685, 19.678]) * 1e-3
    phase = np.array([1.0456, 1.0438, 1.0468, 1.0428, 1.0433])
    means = np.array([voltage.mean(), current.mean(), phase.mean()])
    u = np.array([v.std(ddof=1) / math.sqrt(5) for v in (voltage, current, phase)])
    r = np.corrcoef([voltage, current, phase])
    assert [round(u[0], 4), round(u[1] * 1e3, 4), round(u[2], 5)] == [0.0032, 0.0095, 0.00075]
    assert [round(x, 2) for x in (r[0, 1], r[0, 2], r[1, 2])] == [-0.36, 0.86, -0.65]
    v, i, angle = means
    impedance = v / i
    resistance = impedance * math.cos(angle)
    reactance = impedance * math.sin(angle)
    u_r = combined_standard_uncertainty([resistance / v, -resistance / i, -reactance], u, r)
    u_x = combined_standard_uncertainty([reactance / v, -reactance / i, resistance], u, r)
    u_z = combined_standard_uncertainty([impedance / v, -impedance / i, 0], u, r)
    assert [round(x, 3) for x in (resistance, reactance, impedance)] == [127.732, 219.847, 254.260]
    # remembered as 0.071, 0.295 and 0.236; the readings give 0.2956 for the second
    assert [u_r, u_x, u_z] == pytest.approx([0.071, 0.295, 0.236], abs=7e-4)


def test_zener_voltage_between_days():
    """GUM H.5: the means of ten days of five readings each scatter by 43 microvolts beyond the readings' own scatter."""
    day_means = [172, 116, 13, 144, 106, 31, 60, 125, 163, 41]  # microvolts above 10 V
    of_a_day = np.array([60, 77, 111, 101, 67, 93, 80, 73, 88, 86])
    within = (of_a_day**2).mean()
    assert round(math.sqrt(within)) == 85
    between, degrees = excess_variance([day_means], [np.full(10, within / 5)])
    assert round(math.sqrt(between)) == 43
    assert degrees == 9


T_TABLE = [  # GUM, table G.2: t for 95.45 % and 99 %
    pytest.param(1, 13.97, 63.66, id="1"),
    pytest.param(2, 4.53, 9.92, id="2"),
    pytest.param(4, 2.87, 4.60, id="4"),
    pytest.param(10, 2.28, 3.17, id="10"),
    pytest.param(16, 2.17, 2.92, id="16"),
    pytest.param(50, 2.05, 2.68, id="50"),
    pytest.param(math.inf, 2.00, 2.576, id="infinite"),
]


@pytest.mark.parametrize(("degrees", "t95", "t99"), T_TABLE)
def test_coverage_factor_from_t(degrees, t95, t99):
    assert coverage_factor(degrees, "from t") == pytest.approx(t95, abs=0.005)
    assert coverage_factor(degrees, "from t", probability=0.99) == pytest.approx(t99, abs=0.006)
    assert coverage_factor(degrees) == 2


def test_degrees_of_freedom_are_rounded_down():
    assert coverage_factor(4.99, "from t") == coverage_factor(4, "from t")
    assert coverage_factor(0.3, "from t") == coverage_factor(1, "from t")


@given(
    st.lists(st.tuples(st.floats(1e-6, 1e3), st.one_of(st.just(math.inf), st.floats(1, 1e4))), min_size=1, max_size=8)
)
def test_effective_degrees_lie_between_the_fewest_and_the_sum(parts):
    contributions, degrees = zip(*parts, strict=True)
    effective = effective_degrees_of_freedom(contributions, degrees)
    assert min(degrees) * (1 - 1e-9) <= effective <= sum(degrees) * (1 + 1e-9)


def test_excess_variance_comes_back_from_simulated_groups():
    rng = np.random.default_rng(3)
    own = rng.uniform(0.5, 2.0, (400, 4))
    values = rng.normal(0, 5, (400, 1)) + rng.normal(0, np.sqrt(own + 1.5))
    variance, degrees = excess_variance(values, own)
    assert degrees == 1200
    assert variance == pytest.approx(1.5, rel=0.12)


def test_values_that_scatter_less_than_their_own_have_no_excess():
    assert excess_variance([[1.0, 1.01]], [[1.0, 1.0]]) == (0.0, 1.0)
    assert excess_variance([[1.0], [2.0]], [[1.0], [1.0]]) == (0.0, 0.0)


# JCGM 106:2012: simple acceptance looks at the value; with a guard band of one expanded uncertainty only the inner part of
# the tolerance accepts
VERDICTS = [
    pytest.param(0.008, 0.003, "simple", "within tolerance", id="inside"),
    pytest.param(0.010, 0.003, "simple", "within tolerance", id="on the limit"),
    pytest.param(0.011, 0.003, "simple", "outside tolerance", id="just outside"),
    pytest.param(0.006, 0.003, "guarded", "within tolerance", id="guarded, inside the guard band"),
    pytest.param(0.008, 0.003, "guarded", "not decided", id="guarded, in the guard band"),
    pytest.param(-0.012, 0.003, "guarded", "not decided", id="guarded, beyond but not clearly"),
    pytest.param(-0.014, 0.003, "guarded", "outside tolerance", id="guarded, clearly beyond"),
]


@pytest.mark.parametrize(("deviation", "expanded", "acceptance", "verdict"), VERDICTS)
def test_verdict(deviation, expanded, acceptance, verdict):
    assert judge([deviation], [expanded], 0.01, acceptance) == verdict
    # the worst of several decides
    assert judge([0.0, deviation], [0.001, expanded], 0.01, acceptance) == verdict


def test_without_a_tolerance_nothing_is_judged():
    assert judge([0.5], [0.1], None) == "no tolerance stated"


@pytest.mark.parametrize(
    ("call", "words"),
    [
        (lambda: judge([0.0], [0.0], 0.0), "tolerance.*above 0"),
        (lambda: judge([0.0], [0.0], 0.1, "generous"), "'simple' or 'guarded'"),
        (lambda: coverage_factor(5, "k = 3"), "'k = 2' or 'from t'"),
        (lambda: coverage_factor(5, "from t", probability=1.0), "between 0 and 1"),
        (lambda: BudgetLine(source="x", standard_uncertainty=-1.0), "at least 0"),
        (lambda: BudgetLine(source="x", standard_uncertainty=math.nan), "finite"),
        (lambda: BudgetLine(source="x", standard_uncertainty=1.0, sensitivity=math.inf), "sensitivity"),
        (lambda: BudgetLine(source="x", standard_uncertainty=1.0, degrees_of_freedom=0), "above 0"),
        (lambda: Budget(quantity="scale", lines=()), "at least one line"),
    ],
)
def test_nonsense_is_refused(call, words):
    with pytest.raises(SettingsError, match=words):
        call()
