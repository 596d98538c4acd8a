"""Conformity, equivalence and control charts against published numbers, each with its source beside it."""

from __future__ import annotations

import json
from pathlib import Path

import numpy as np
import pytest
from scipy.stats import norm

from models.statistics.change_points import largest_t_p
from models.statistics.charts import ewma_chart, individuals_chart, western_electric
from models.statistics.conformity import conformity_probability, decide_by_probability, global_risks
from models.statistics.equivalence import two_one_sided_tests, welch

SHARED = Path(__file__).resolve().parents[3] / "shared" / "reference"
here = pytest.mark.skipif(
    not (SHARED / "README.md").is_file(), reason="the reference data (../shared/reference) are not here"
)

# NIST/SEMATECH e-Handbook (doi:10.18434/M32189), 6.3.2.2: flow rates of ten batches; d2 = 1.128 as printed.
FLOW_RATES = np.array([49.6, 47.6, 49.9, 51.3, 47.8, 51.2, 52.6, 52.4, 53.6, 52.1])
# The same, 6.3.2.4: twenty points, target 50, sd 2.0539, weight 0.3, limits of many points; the average is
# printed to 0.01.
_EWMA_TEXT = """
52.0 50.60  47.0 49.52  53.0 50.56  49.3 50.18  50.1 50.16  47.0 49.21  51.0 49.75  50.1 49.85  51.2 50.26
50.5 50.33  49.6 50.11  47.6 49.36  49.9 49.52  51.3 50.05  47.8 49.38  51.2 49.92  52.6 50.73  52.4 51.23
53.6 51.94  52.1 51.99
"""
EWMA_POINTS, EWMA_PRINTED = np.array(_EWMA_TEXT.split(), dtype=float).reshape(-1, 2).T


def test_individuals_chart_of_flow_rates() -> None:
    chart = individuals_chart(FLOW_RATES, d2=1.128)
    assert chart.base.centre == pytest.approx(50.81, abs=5e-5)
    assert chart.base.moving_range == pytest.approx(1.8778, abs=5e-5)
    assert (chart.lower, chart.upper) == pytest.approx((45.8159, 55.8041), abs=5e-5)
    assert chart.moving_range[1:] == pytest.approx([2.0, 2.3, 1.4, 3.5, 3.4, 1.4, 0.2, 1.2, 1.5])
    # D4 = 3.267 of printed tables.
    assert chart.moving_range_upper == pytest.approx(3.267 * 1.87778, abs=0.002)
    assert not chart.beyond.any()
    assert not chart.moving_range_beyond.any()
    # With the exact d2 = 2 / sqrt(pi).
    exact = individuals_chart(FLOW_RATES)
    assert (exact.lower, exact.upper) == pytest.approx((45.817588319949465, 55.80241168005054), abs=1e-10)


def test_ewma_chart_of_twenty_points() -> None:
    chart = ewma_chart(EWMA_POINTS, 50.0, 2.0539, 0.3, settled=True)
    assert chart.ewma == pytest.approx(EWMA_PRINTED, abs=0.005)
    # The handbook prints 52.5884 and 47.4115; unrounded the latter is 47.41157.
    assert (chart.lower[0], chart.upper[0]) == pytest.approx((47.4115, 52.5884), abs=1e-4)
    assert not chart.beyond.any()


@here
def test_the_handbooks_files_are_what_is_typed_here() -> None:
    flow = np.loadtxt(SHARED / "nist_handbook_individuals_flowrate.csv", skiprows=1, delimiter=",")
    assert flow[:, 1].tolist() == FLOW_RATES.tolist()
    ewma = np.loadtxt(SHARED / "nist_handbook_ewma.csv", skiprows=1, delimiter=",")
    assert ewma[:, 1].tolist() == EWMA_POINTS.tolist()
    assert ewma[:, 2].tolist() == EWMA_PRINTED.tolist()


@here
def test_check_standard_137() -> None:
    """NIST/SEMATECH e-Handbook, 2.6.2 (MPC62.DAT): 25 occasions; limits computed in the reference file."""
    readings = np.loadtxt(SHARED / "nist_handbook_checkstandard_137.csv", skiprows=1, delimiter=",")
    reference = json.loads((SHARED / "nist_handbook_checkstandard_137.json").read_text())
    resistivity = readings[:, 6]
    chart = individuals_chart(resistivity, d2=1.128)
    assert resistivity.std(ddof=1) == pytest.approx(reference["values"]["level2_sd"], abs=5e-5)
    assert chart.base.centre == pytest.approx(reference["values"]["mean"], abs=5e-4)
    assert chart.base.moving_range == pytest.approx(reference["computed"]["mrbar"], rel=1e-12)
    assert chart.lower == pytest.approx(reference["computed"]["I_lcl"], rel=1e-12)
    assert chart.upper == pytest.approx(reference["computed"]["I_ucl"], rel=1e-12)
    assert not chart.beyond.any()


@pytest.mark.parametrize(
    ("rules", "run_length"),
    [((1,), 370.40), ((1, 2), 225.44), ((1, 3), 166.05), ((1, 4), 152.73), ((1, 2, 3, 4), 91.75)],
)
def test_points_until_a_false_alarm(rules: tuple[int, ...], run_length: float) -> None:
    """Average run lengths in control: Champ and Woodall 1987, table 1 (doi:10.1080/00401706.1987.10488266),
    digits from memory. Simulated here, within four standard errors."""
    random = np.random.default_rng(1987)
    runs, length = 2000, 1500
    broken = western_electric(random.normal(size=(runs, length)), 0.0, 1.0)[[rule - 1 for rule in rules]]
    alarmed = broken.any(axis=0)
    last = alarmed.any(axis=1)
    seen = np.where(last, alarmed.argmax(axis=1) + 1, length)
    # Points watched over alarms seen: runs that end without one count too.
    found = float(seen.sum() / last.sum())
    assert found == pytest.approx(run_length, rel=4 / np.sqrt(runs))


@pytest.mark.parametrize(
    ("weight", "limit_sd", "run_length"),
    [(0.40, 3.054, 14.3), (0.25, 2.998, 11.1), (0.20, 2.962, 10.5), (0.10, 2.814, 10.3)],
)
def test_points_until_a_shift_of_one_sd_is_seen(weight: float, limit_sd: float, run_length: float) -> None:
    """Lucas and Saccucci 1990, table 1 (doi:10.1080/00401706.1990.10484583), digits from memory, limits of
    many points; simulated here, within four standard errors of at most 13 points each."""
    random = np.random.default_rng(1990)
    runs, length = 3000, 150
    points = random.normal(1.0, 1.0, (runs, length))
    beyond = np.array([ewma_chart(row, 0.0, 1.0, weight, limit_sd, settled=True).beyond for row in points])
    assert beyond.any(axis=1).all()
    assert float(np.mean(beyond.argmax(axis=1) + 1)) == pytest.approx(run_length, abs=4 * 13 / np.sqrt(runs))


def test_the_zener_diode_of_jcgm_106() -> None:
    # JCGM 106:2012, 7.3: y = -5.47 V, u = 0.05 V, upper limit -5.40 V: p_c = Phi(1.4) = 0.92.
    probability = float(conformity_probability(-5.47, 0.05, upper=-5.40))
    assert probability == pytest.approx(0.92, abs=0.005)
    assert probability == pytest.approx(0.9192433407662289, abs=1e-12)
    assert decide_by_probability(probability, 0.95) == "undecided"
    assert decide_by_probability(probability, 0.90) == "conforms"


@pytest.mark.parametrize(
    ("probability", "z"), [(0.80, 0.84), (0.90, 1.28), (0.95, 1.64), (0.99, 2.33), (0.999, 3.09)]
)
def test_guard_bands_that_reach_a_probability(probability: float, z: float) -> None:
    # JCGM 106:2012, table 1: distance from the limit in u that gives p_c, printed to 0.01.
    assert float(conformity_probability(-float(norm.ppf(probability)), 1.0, upper=0.0)) == pytest.approx(
        probability
    )
    assert float(conformity_probability(-z, 1.0, upper=0.0)) == pytest.approx(
        probability, abs=0.005 * float(norm.pdf(z)) + 1e-9
    )


def test_the_resistors_of_jcgm_106() -> None:
    # JCGM 106:2012, 9.5.4: production 1500 and 0.12 ohm, u_m 0.04 ohm, limits 1500 +- 0.2, accepted +- 0.18:
    # R_C = 1 %, R_P = 7 %. Further digits: quadrature in the reference file, to 1e-8.
    specification = (1499.8, 1500.2)
    guarded = global_risks(1500.0, 0.12, 0.04, specification, (1499.82, 1500.18))
    assert (guarded.consumer, guarded.producer) == pytest.approx((0.01, 0.07), abs=0.005)
    assert guarded.consumer == pytest.approx(0.00987829152172808, abs=1e-8)
    assert guarded.producer == pytest.approx(0.0690265104613329, abs=1e-8)
    simple = global_risks(1500.0, 0.12, 0.04, specification, specification)
    assert (simple.consumer, simple.producer) == pytest.approx(
        (0.01894220671694175, 0.037207800177953596), abs=1e-8
    )
    wide = global_risks(1500.0, 0.12, 0.04, specification, (1499.88, 1500.12))
    assert (wide.consumer, wide.producer) == pytest.approx(
        (0.0004686335988623219, 0.24766964020146195), abs=1e-8
    )
    assert float(conformity_probability(1500.0, 0.12, *specification)) == pytest.approx(
        0.9044192954543706, abs=1e-10
    )


# Cushny and Peebles 1905, as Student 1908 (doi:10.1093/biomet/6.1.1) gives them: hours of sleep gained.
SLEEP_1 = np.array([0.7, -1.6, -0.2, -1.2, -0.1, 3.4, 3.7, 0.8, 0.0, 2.0])
SLEEP_2 = np.array([1.9, 0.8, 1.1, 0.1, -0.1, 4.4, 5.5, 1.6, 4.6, 3.4])


def test_welchs_degrees_and_interval_of_students_sleep_data() -> None:
    # R 4.2 t.test: df and 95 % interval.
    errors = tuple(float(x.std(ddof=1) / np.sqrt(x.size)) for x in (SLEEP_1, SLEEP_2))
    found = welch((SLEEP_1.mean(), SLEEP_2.mean()), (errors[0], errors[1]), (9, 9))
    assert found.degrees == pytest.approx(17.7764735161785, rel=1e-10)
    assert found.difference / found.standard_error == pytest.approx(-1.86081346748685, rel=1e-10)
    tests = two_one_sided_tests(
        found.difference, found.standard_error, found.degrees, (-5.0, 5.0), alpha=0.025
    )
    assert (float(tests.low), float(tests.high)) == pytest.approx(
        (-3.36548323071171, 0.20548323071171), rel=1e-10
    )


A = np.log([61.2, 59.8, 63.0, 60.1, 62.4, 58.9])
B = np.log([60.0, 58.1, 61.7, 59.5, 60.8, 59.9, 62.2, 57.7])


@pytest.mark.parametrize(
    ("margins", "p_below", "p_above"),
    [
        ((0.9, 1 / 0.9), 1.7776517324684011e-06, 2.600917310545893e-05),
        ((0.99, 1.015), 0.05140468079707824, 0.506364624944009),
    ],
)
def test_two_one_sided_tests_of_independent_samples(
    margins: tuple[float, float], p_below: float, p_above: float
) -> None:
    # Expected: statsmodels 0.15.0, ttost_ind(A, B, ln margins, usevar="unequal"); invented data.
    errors = [float(x.std(ddof=1) / np.sqrt(x.size)) for x in (A, B)]
    found = welch((A.mean(), B.mean()), (errors[0], errors[1]), (A.size - 1, B.size - 1))
    assert found.degrees == pytest.approx(11.015560192219887, rel=1e-12)
    logs = float(np.log(margins[0])), float(np.log(margins[1]))
    tests = two_one_sided_tests(found.difference, found.standard_error, found.degrees, logs)
    assert float(tests.p_below) == pytest.approx(p_below, rel=1e-9)
    assert float(tests.p_above) == pytest.approx(p_above, rel=1e-9)


def test_two_one_sided_tests_of_pairs() -> None:
    # Expected: statsmodels 0.15.0, ttost_paired(A, B[:6], ln 0.9, -ln 0.9): t 17.5416 and -13.2261, df 5.
    difference = A - B[:6]
    tests = two_one_sided_tests(
        difference.mean(), difference.std(ddof=1) / np.sqrt(6), 5, (np.log(0.9), -np.log(0.9))
    )
    assert float(tests.p_below) == pytest.approx(5.51978710735603e-06, rel=1e-9)
    assert float(tests.p_above) == pytest.approx(2.2073462662485218e-05, rel=1e-9)


@pytest.mark.parametrize(("alpha", "critical"), [(0.10, 3.14), (0.05, 3.66), (0.01, 4.93)])
def test_worsleys_critical_values_of_ten_points(alpha: float, critical: float) -> None:
    """Worsley 1979 (doi:10.1080/01621459.1979.10481650), largest t of a change in ten points; from memory."""
    assert largest_t_p(critical, 10) == pytest.approx(alpha, rel=0.04)
