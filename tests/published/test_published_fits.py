"""Fits of published data agree with the published values on the digits that those carry."""

from __future__ import annotations

import pytest

from tests.published.published_values import Agreement, agreements

ALL = agreements()


@pytest.mark.parametrize("each", ALL, ids=[f"{a.dataset}, {a.quantity}" for a in ALL])
def test_value_agrees(each: Agreement) -> None:
    assert each.agrees, f"{each.found!r} against {each.published!r} ({each.source}): {each.digits:.1f} digits"


def test_the_table_can_fail() -> None:
    assert not Agreement("made up", "off by 1 %", 1.0, 1.01, 3.0, "none").agrees
    assert not Agreement("made up", "not found", 1.0, float("nan"), 1.0, "none").agrees
