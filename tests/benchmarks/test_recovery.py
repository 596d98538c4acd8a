"""Recovery on a fixed seed; all 300 plates with their limits: `python -m tests.benchmarks.recovery`."""

from __future__ import annotations

from tests.benchmarks.recovery import recovery


def test_km_is_recovered_without_bias_and_with_honest_intervals() -> None:
    rows = {(row.way, row.constant): row for row in recovery(plates=100)}
    km, usual = rows["halfsat", "km"], rows["usual way", "km"]
    # A hundred plates tell the bias to 0.3 % and the coverage to 2 %: three of each.
    assert abs(km.bias) < 3 * km.bias_error
    assert km.bias_error < 0.004
    assert abs(km.coverage - 0.95) < 3 * km.coverage_error
    assert usual.bias > 0.04
    assert usual.coverage < 0.80
