"""Progress curves by the closed form agree with published ones, and give back their constants."""

from __future__ import annotations

import pytest

from tests.published.progress_curves import progress_agreements
from tests.published.published_values import Agreement

ALL = progress_agreements()


def test_all_curves_and_constants_are_there() -> None:
    assert len(ALL) == 5


@pytest.mark.parametrize("each", ALL, ids=[f"{a.dataset}, {a.quantity}" for a in ALL])
def test_value_agrees(each: Agreement) -> None:
    assert each.agrees, f"{each.found!r} against {each.published!r} ({each.source}): {each.digits:.1f} digits"
