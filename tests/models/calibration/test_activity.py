"""Activity units: definitions, dilution, protein, and units as people write them."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from models.calibration.activity import activity, activity_factor, nkat_from_u, u_from_nkat
from models.errors import UnknownName


def test_a_worked_sample() -> None:
    """10 uL of a sample diluted 100 times in 200 uL, 0.5 umol/L/s, 2 mg/mL: from the definitions.

    0.5 umol/L/s in 200 uL is 1e-4 umol/s; from 10 uL of diluted, 0.1 uL of undiluted sample: 1 umol/s/mL.
    """
    found = activity(np.array([0.5]), 200.0, 10.0, 100.0, 2.0)
    assert found.nkat_per_ml[0] == pytest.approx(1000.0, rel=1e-12)
    assert found.u_per_ml[0] == pytest.approx(60.0, rel=1e-12)
    assert found.nkat_per_mg[0] == pytest.approx(500.0, rel=1e-12)
    assert found.u_per_mg[0] == pytest.approx(30.0, rel=1e-12)


def test_what_cannot_be_is_nan() -> None:
    found = activity(
        np.ones(5),
        np.array([200.0, 200.0, 5.0, 200.0, 200.0]),
        np.array([0.0, -1.0, 10.0, 10.0, 10.0]),
        np.array([1.0, 1.0, 1.0, 0.01, 1.0]),
    )
    assert np.isnan(found.u_per_ml).tolist() == [True, True, True, True, False]
    assert np.isnan(found.u_per_mg).all()


@given(st.floats(1e-9, 1e9))
def test_units_and_katal_round_trip(value: float) -> None:
    assert u_from_nkat(nkat_from_u(np.array(value))) == pytest.approx(value, rel=1e-12)


@pytest.mark.parametrize(
    ("unit", "kind", "factor"),
    [
        ("U", "activity", 1.0),
        ("kat", "activity", 6e7),
        ("U/mL", "per_volume", 1.0),
        ("kU/L", "per_volume", 1.0),
        ("mU/mL", "per_volume", 1e-3),
        ("nkat/mL", "per_volume", 0.06),
        ("µkat/L", "per_volume", 0.06),
        ("μkat/L", "per_volume", 0.06),
        ("umol/min/mL", "per_volume", 1.0),
        ("U/mg", "per_mass", 1.0),
        ("kat/kg", "per_mass", 60.0),
        ("nkat/mg", "per_mass", 0.06),
    ],
)
def test_units_as_written(unit: str, kind: str, factor: float) -> None:
    """By the definitions of the unit and the katal."""
    found_kind, found = activity_factor(unit)
    assert found_kind == kind
    assert found == pytest.approx(factor, rel=1e-12)


@pytest.mark.parametrize("unit", ["IU/L", "mg/mL", "", "U/mL; import os", "9**9", "U" * 50, "umol/L", "U/s"])
def test_other_units_are_refused(unit: str) -> None:
    with pytest.raises(UnknownName):
        activity_factor(unit)
