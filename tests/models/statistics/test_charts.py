"""Charts and rules against plain definitions, and what a base period must and must not do."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from models.statistics.charts import (
    D2,
    Signal,
    chart_base,
    ewma_chart,
    individuals_chart,
    signals,
    western_electric,
)

# Halves, so that points fall on lines as well as beyond them.
points = st.lists(st.integers(-8, 8).map(lambda n: n / 2), min_size=1, max_size=40)


def plain_rules(x: list[float]) -> set[Signal]:
    """The rules as they are written, point by point, with centre 0 and sd 1."""
    found = set()
    for place in range(len(x)):
        for sign in (1, -1):
            y = [sign * value for value in x[: place + 1]]
            if y[-1] > 3:
                found.add(Signal(place, 1))
            if y[-1] > 2 and sum(value > 2 for value in y[-3:]) >= 2:
                found.add(Signal(place, 2))
            if y[-1] > 1 and sum(value > 1 for value in y[-5:]) >= 4:
                found.add(Signal(place, 3))
            if len(y) >= 8 and all(value > 0 for value in y[-8:]):
                found.add(Signal(place, 4))
    return found


@given(points)
def test_rules_are_what_they_say(x: list[float]) -> None:
    broken = western_electric(np.array(x), 0.0, 1.0)
    assert set(signals(broken)) == plain_rules(x)
    assert list(signals(broken)) == sorted(signals(broken))
    # What comes later changes nothing.
    half = len(x) // 2
    assert np.array_equal(western_electric(np.array(x[:half]), 0.0, 1.0), broken[:, :half])


@given(st.lists(points.map(lambda x: (x * 10)[:10]), min_size=1, max_size=4), st.floats(-5, 5))
def test_rules_of_several_sequences_at_once(rows: list[list[float]], centre: float) -> None:
    together = western_electric(np.array(rows), 0.0, 1.0)
    for number, row in enumerate(rows):
        assert np.array_equal(together[:, number], western_electric(np.array(row), 0.0, 1.0))
        moved = western_electric(np.array(row) * 4.0 + round(centre), float(round(centre)), 4.0)
        assert np.array_equal(together[:, number], moved)


def test_a_chart_without_spread_breaks_no_rule() -> None:
    assert not western_electric(np.ones(20), 0.0, np.nan).any()
    chart = individuals_chart(np.array([5.0, 6.0]), np.array([True, False]))
    assert np.isnan(chart.upper)
    assert not chart.beyond.any()
    assert chart.base.point_count == 1


def test_limits_rest_on_the_base_period_alone() -> None:
    random = np.random.default_rng(3)
    x = random.normal(60, 2, 60)
    in_base = np.arange(60) < 25
    chart = individuals_chart(x, in_base)
    x[40:] += 30
    shifted = individuals_chart(x, in_base)
    assert (shifted.lower, shifted.upper, shifted.base) == (chart.lower, chart.upper, chart.base)
    assert shifted.beyond[40:].all()
    assert shifted.moving_range_beyond[40]


def test_a_gap_in_the_base_period_makes_no_moving_range() -> None:
    x = np.array([1.0, 2.0, 100.0, 5.0, 6.0])
    base = chart_base(x, np.array([True, True, False, True, True]))
    assert base.moving_range == 1.0
    assert base.centre == 3.5


def test_the_moving_range_estimates_the_spread() -> None:
    random = np.random.default_rng(5)
    x = random.normal(0, 2.5, 200_000)
    assert chart_base(x).sd == pytest.approx(2.5, rel=0.01)
    ranges = np.abs(np.diff(x))
    # 3.267 mean moving ranges hold all but 0.9 % of them, as for |normal| beyond 3.686 / sqrt(2) sd.
    upper = individuals_chart(x).moving_range_upper
    assert np.mean(ranges > upper) == pytest.approx(0.00915, abs=0.001)
    # A slow drift hardly widens it.
    assert chart_base(x + np.linspace(0, 50, x.size)).sd == pytest.approx(2.5, rel=0.01)


@given(points, st.floats(0.05, 1.0))
def test_the_average_is_its_recursion(x: list[float], weight: float) -> None:
    chart = ewma_chart(np.array(x), 1.0, 2.0, weight)
    z = 1.0
    for place, value in enumerate(x):
        z = weight * value + (1 - weight) * z
        assert chart.ewma[place] == pytest.approx(z, abs=1e-9)


def test_a_weight_of_one_is_a_chart_of_single_points() -> None:
    x = np.array([0.0, 3.5, -3.1, 2.9])
    chart = ewma_chart(x, 0.0, 1.0, 1.0)
    assert chart.ewma == pytest.approx(x)
    assert chart.upper == pytest.approx(3.0)
    assert chart.beyond.tolist() == [False, True, True, False]


def test_first_limits_are_those_of_the_first_point() -> None:
    chart = ewma_chart(np.zeros(200), 0.0, 1.0, 0.2)
    assert chart.upper[0] == pytest.approx(3 * 0.2)
    assert chart.upper[-1] == pytest.approx(ewma_chart(np.zeros(1), 0.0, 1.0, 0.2, settled=True).upper[0])
    assert np.all(np.diff(chart.upper) >= 0)


def test_a_small_lasting_shift_is_seen_by_the_average_first() -> None:
    random = np.random.default_rng(9)
    x = random.normal(0, 1, 60)
    x[30:] += 1.2
    chart = ewma_chart(x, 0.0, 1.0, 0.2)
    assert not chart.beyond[:30].any()
    first = int(np.argmax(chart.beyond))
    assert 30 < first < 45
    assert not (np.abs(x[: first + 1]) > 3).any()


def test_points_that_are_not_known_are_refused() -> None:
    for chart in (chart_base, individuals_chart):
        with pytest.raises(ValueError, match="all known"):
            chart(np.array([1.0, np.nan]))
        with pytest.raises(ValueError, match="one sequence"):
            chart(np.ones(3), np.ones(2, dtype=bool))
    with pytest.raises(ValueError, match="all known"):
        western_electric(np.array([np.nan]), 0.0, 1.0)
    with pytest.raises(ValueError, match="weight"):
        ewma_chart(np.ones(3), 0.0, 1.0, 0.0)
    assert pytest.approx(1.128, abs=0.0005) == D2
