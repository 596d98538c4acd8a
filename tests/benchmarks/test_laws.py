"""Recovery of laws on few series; a thousand a law: `python -m tests.benchmarks.laws`."""

from __future__ import annotations

import pytest

from models.kinetics.laws import LAWS, law
from tests.benchmarks.laws import HELD_TO, REPORT, recover


@pytest.mark.parametrize("name", HELD_TO)
def test_constants_come_back_without_bias_and_with_honest_intervals(name: str) -> None:
    outcome = recover(law(name), series=200)
    assert outcome.refused == 0
    for row in outcome.constants:
        assert abs(row.bias) < max(0.01, 3.0 * row.bias_error)
        # Three standard errors of a share of 0.95 among 200.
        assert abs(row.coverage - 0.95) < 0.047


def test_the_written_table_names_every_law() -> None:
    text = REPORT.read_text(encoding="utf-8")
    assert all(f"| {each.title} |" in text for each in LAWS)
