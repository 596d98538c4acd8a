"""Shift of constants with a modulator: found where it is, not where it is not, and honest error rate."""

from __future__ import annotations

import numpy as np
import pandas as pd
import pytest

from models.errors import UnknownName
from models.kinetics.laws import MICHAELIS_MENTEN, at_levels
from models.kinetics.shift import Group, compare_shared, modulator_shift
from tests.models.kinetics.test_fit_rates import series_rows


def lot(k_halves: tuple[float, ...], n: float = 2.0, seed: int = 0) -> pd.DataFrame:
    return pd.concat(
        [
            series_rows(0, km=k, n=n, seed=100 * seed + number, plate=0).assign(modulator_um=10.0 * number)
            for number, k in enumerate(k_halves)
        ],
        ignore_index=True,
    )


def test_a_shift_of_k_half_alone_is_told_from_one_of_n() -> None:
    shift = modulator_shift(lot((80.0, 60.0, 45.0)))
    np.testing.assert_array_equal(shift.modulator_um, [0.0, 10.0, 20.0])
    by_name = {test.shared: test for test in shift.tests}
    assert set(by_name) == {("k_half",), ("hill_n",), ("k_half", "hill_n")}
    assert by_name["k_half",].is_real
    assert by_name["k_half",].p_value < 1e-6
    assert not by_name["hill_n",].is_real
    assert by_name["k_half", "hill_n"].numerator_degrees == 4
    together = by_name["hill_n",].together
    assert np.ptp(together[2]) == 0.0
    assert together[1] == pytest.approx([80.0, 60.0, 45.0], rel=0.05)


def test_without_a_shift_one_in_twenty_is_called_real() -> None:
    generator = np.random.default_rng(11)
    levels = np.repeat(np.geomspace(10.0, 960.0, 8), 2)[:, None]
    exact = levels / (80.0 + levels)
    p = []
    for _ in range(150):
        groups = [
            Group(at_levels(levels), top * (exact + 0.02 * generator.standard_normal(exact.shape)), exact**0)
            for top in (1.0, 1.0)
        ]
        p.append(compare_shared(MICHAELIS_MENTEN, groups, ["km"]).p_value)
    # Three standard errors of a share of 0.05, and of a mean of evenly spread values, among 150.
    assert np.mean(np.array(p) < 0.05) < 0.05 + 3.0 * np.sqrt(0.05 * 0.95 / 150)
    assert abs(np.mean(p) - 0.5) < 3.0 / np.sqrt(12 * 150)


def test_a_level_that_cannot_be_fitted_is_refused_and_the_rest_compared() -> None:
    rows = lot((80.0, 60.0))
    bad = series_rows(0, plate=0).assign(v_um_per_s=0.0, modulator_um=30.0)
    shift = modulator_shift(pd.concat([rows, bad], ignore_index=True))
    assert shift.fits.refusals["series"].tolist() == [2]
    assert len(shift.tests) == 3
    assert modulator_shift(rows[rows["modulator_um"] == 0.0]).tests == ()


def test_what_cannot_be_shared_is_refused() -> None:
    levels = np.geomspace(10.0, 960.0, 8)[:, None]
    group = Group(at_levels(levels), 0.05 * levels / (80.0 + levels), np.ones_like(levels))
    with pytest.raises(UnknownName, match="hill_n"):
        compare_shared(MICHAELIS_MENTEN, [group, group], ["hill_n"])
    with pytest.raises(ValueError, match="at least two"):
        compare_shared(MICHAELIS_MENTEN, [group], ["km"])
    few = Group(at_levels(levels[:2]), group.rates[:2], group.weights[:2])
    with pytest.raises(ValueError, match="outnumber"):
        compare_shared(MICHAELIS_MENTEN, [few, few], ["km"])
