"""Whole-curve benchmark on few plates; hundreds of each case: `python -m tests.benchmarks.progress`."""

from __future__ import annotations

import numpy as np
import pytest

from models.kinetics.rates import measure_rates
from tests.benchmarks.progress import (
    COMPARED,
    DEPLETED,
    RECOVERED,
    Case,
    Compared,
    Recovered,
    missed,
    plates,
    recover,
    report,
)


def test_no_initial_rate_is_left_within_the_depletion_limit() -> None:
    """Every level has used up 10 % of its substrate before the shortest window ends (DESIGN: 10 %)."""
    batch = plates(DEPLETED, 2, 3)
    rates = measure_rates(batch, [("michaelis_menten",)] * 2)
    assert (rates.loc[~batch.is_blank, "shortest_conversion"] > 0.10).all()
    highest = batch.substrate_um.max()
    top = (batch.substrate_um == highest) & ~batch.is_blank
    used = (batch.product_um[top, -1] - batch.product_um[top, 0]) / highest
    assert np.mean(used) == pytest.approx(0.8, abs=0.05)


@pytest.mark.parametrize("name", RECOVERED)
def test_constants_come_back(name: str) -> None:
    case = recover(name, 12)
    assert (case.refused, case.silent) == (0.0, 0.0)
    assert {row.constant for row in case.constants} >= {"vmax", "km"}
    for row in case.constants:
        assert abs(row.bias) < max(0.01, 4.0 * row.bias_error)


def test_the_table_fits_80_columns_and_tells_what_is_missed() -> None:
    bad = Case("made up", (Recovered("km", 80.0, 0.02, 0.001, 0.01, 0.95),), 0.0, 0.0, 5.0)
    liberal = Compared("clean, to 25 % converted", 200, 0.2, 0.1, 1.0, 1.0, 0.0)
    text = report([bad], [liberal], 200, 1)
    assert max(len(line) for line in text.splitlines()) <= 80
    assert len(missed([bad], [liberal])) == 3
    good = Compared("clean, to 25 % converted", 200, 0.05, 0.01, 1.0, 1.0, 0.0)
    assert missed([], [good]) == []
    assert liberal.name in COMPARED
