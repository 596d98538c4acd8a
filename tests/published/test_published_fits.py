"""Fits of published data agree with the published values on the digits that those carry."""

from __future__ import annotations

import numpy as np
import pytest

from models.kinetics.laws import law
from tests.published.published_laws import INHIBITION, aic, fit_inhibition, law_agreements
from tests.published.published_values import Agreement, agreements

ALL = [*agreements(), *law_agreements()]


@pytest.mark.parametrize("each", ALL, ids=[f"{a.dataset}, {a.quantity}" for a in ALL])
def test_value_agrees(each: Agreement) -> None:
    assert each.agrees, f"{each.found!r} against {each.published!r} ({each.source}): {each.digits:.1f} digits"


def test_the_inhibition_grid_is_uncompetitive_by_its_criterion() -> None:
    """INRA set: uncompetitive 173.70 < noncompetitive 192.89 < competitive 277.19 (R 4.2 nls)."""
    criteria = {name: aic(fit_inhibition(law(name))[0]) for name in INHIBITION}
    assert sorted(criteria, key=lambda name: criteria[name]) == [
        "uncompetitive_inhibition",
        "noncompetitive_inhibition",
        "competitive_inhibition",
    ]


def test_a_constant_that_the_grid_does_not_hold_is_not_reported_as_a_number() -> None:
    """INRA set: mixed inhibition has 1 / k_ic at zero; k_ic runs to its limit and has no interval."""
    fit, low, high = fit_inhibition(law("mixed_inhibition"))
    assert fit.at_limit[0]
    assert np.isnan(high[2, 0])
    assert np.isnan(low[2, 0])


def test_the_table_can_fail() -> None:
    assert not Agreement("made up", "off by 1 %", 1.0, 1.01, 3.0, "none").agrees
    assert not Agreement("made up", "not found", 1.0, float("nan"), 1.0, "none").agrees
