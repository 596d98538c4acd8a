"""Concentration units as people write them. Factors follow from the SI prefixes and the litre."""

from __future__ import annotations

import pytest
from hypothesis import given
from hypothesis import strategies as st

from models.errors import UnknownName
from models.records.units import concentration_factor

PREFIXES = {"": 1.0, "m": 1e-3, "u": 1e-6, "µ": 1e-6, "μ": 1e-6, "n": 1e-9, "p": 1e-12}


@pytest.mark.parametrize(
    "form", ["{}mol/L", "{}mol/l", "{}M", "{}mol L-1", "{}mol·L⁻¹", "{}mol/dm3", "{}mol/dm^3"]
)
@pytest.mark.parametrize("prefix", PREFIXES)
def test_amounts(form: str, prefix: str) -> None:
    kind, factor = concentration_factor(form.format(prefix))
    assert kind == "amount"
    assert factor == pytest.approx(PREFIXES[prefix] * 1e6, rel=1e-12)


@pytest.mark.parametrize("prefix", PREFIXES)
def test_masses(prefix: str) -> None:
    kind, factor = concentration_factor(f"{prefix}g/mL")
    assert kind == "mass"
    assert factor == pytest.approx(PREFIXES[prefix] * 1e9, rel=1e-12)


def test_factors_are_decimal() -> None:
    assert concentration_factor("mmol/L") == ("amount", 1000.0)
    assert concentration_factor("nmol/L") == ("amount", 0.001)
    assert 0.1 * concentration_factor("mM")[1] == 100.0


@pytest.mark.parametrize("text", ["", "mm", "m", "s", "%", "U/mL", "kat/L", "mol", "1/L", "mol/L/s", "degC"])
def test_other_dimensions(text: str) -> None:
    with pytest.raises(UnknownName, match=r"neither amount|is not a unit"):
        concentration_factor(text)


@given(st.text(max_size=50))
def test_no_text_does_anything_else(text: str) -> None:
    try:
        kind, factor = concentration_factor(text)
    except UnknownName as unknown:
        told = unknown.remedy
    else:
        told = kind
        assert factor > 0
    assert told in ("amount", "mass", "write a concentration, such as umol/L, mM, nmol/L or ng/mL")


@pytest.mark.parametrize("text", ["m**9**9**9", "mol/L**99999999", "__import__('os')", "mol/L" * 40])
def test_text_made_to_do_harm_is_refused(text: str) -> None:
    with pytest.raises(UnknownName):
        concentration_factor(text)
