"""Windows by cumulative moments against numpy's polynomial fits over the same reads."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from models.kinetics.windows import all_windows, windows_from

RELATIVE = 1e-9


def curves(seed: int, reads: int, wells: int, offset: float, gaps: float) -> tuple[np.ndarray, np.ndarray]:
    generator = np.random.default_rng(seed)
    time_s = np.cumsum(generator.uniform(5.0, 20.0, (reads, wells)), axis=0) + 1000.0
    values = offset + 0.02 * (time_s - 1000.0) * (1.0 - 1e-4 * (time_s - 1000.0))
    values += generator.normal(0.0, 0.2, (reads, wells))
    values[generator.random((reads, wells)) < gaps] = np.nan
    return time_s, values


def by_polyfit(time_s: np.ndarray, values: np.ndarray) -> dict[str, float]:
    """The same quantities from numpy.polyfit, with time counted from the mean."""
    kept = np.isfinite(values)
    t, y = time_s[kept] - time_s[kept].mean(), values[kept]
    line, parabola = np.polyfit(t, y, 1), np.polyfit(t, y, 2)
    left_line = np.sum((y - np.polyval(line, t)) ** 2) / (t.size - 2)
    left_parabola = np.sum((y - np.polyval(parabola, t)) ** 2) / (t.size - 3)
    design = np.vander(t, 3)
    curvature_factor = np.linalg.inv(design.T @ design)[0, 0]
    return {
        "slope": line[0],
        "slope_se": np.sqrt(left_line / np.sum(t * t)),
        "line_variance": left_line,
        "slope_change": 2.0 * parabola[0] * (t[-1] - t[0]) / line[0],
        "slope_change_t": parabola[0] / np.sqrt(left_parabola * curvature_factor),
    }


@given(
    seed=st.integers(0, 2**20),
    reads=st.integers(8, 30),
    offset=st.sampled_from([0.0, 3.0, 500.0]),
    gaps=st.sampled_from([0.0, 0.2]),
)
@settings(max_examples=25, deadline=None)
def test_every_window_equals_polyfit(seed: int, reads: int, offset: float, gaps: float) -> None:
    time_s, values = curves(seed, reads, 3, offset, gaps)
    windows = all_windows(time_s, values)
    assert windows.first.size == reads * (reads - 1) // 2
    for row in range(0, windows.first.size, 7):
        cut = slice(windows.first[row], windows.stop[row])
        for well in range(3):
            # Below six reads the parabola leaves so little that its t is all rounding.
            if np.count_nonzero(np.isfinite(values[cut, well])) < 6:
                continue
            for name, expected in by_polyfit(time_s[cut, well], values[cut, well]).items():
                found = getattr(windows, name)[row, well]
                scale = max(abs(expected), 1e-3) if name.startswith("slope_change") else abs(expected)
                assert abs(found - expected) <= RELATIVE * 10 * scale, (name, found, expected)


def test_short_windows_of_long_curves_lose_no_digits() -> None:
    time_s, values = curves(7, 1000, 1, 500.0, 0.0)
    fits = windows_from(time_s, values, np.array([990])).pick(np.array([999]))
    expected = by_polyfit(time_s[990:, 0], values[990:, 0])
    assert fits.slope[0] == pytest.approx(expected["slope"], rel=1e-10)
    assert fits.slope_change[0] == pytest.approx(expected["slope_change"], rel=1e-9)


def test_windows_from_a_read_are_rows_of_all_windows() -> None:
    time_s, values = curves(3, 12, 4, 2.0, 0.1)
    values[4] = 1.0
    everything = all_windows(time_s, values)
    some = windows_from(time_s, values, np.full(4, 4))
    for row in np.flatnonzero(everything.first == 4):
        last = everything.stop[row] - 1
        np.testing.assert_allclose(some.slope[last], everything.slope[row], rtol=1e-12, equal_nan=True)


def test_gaps_carry_no_weight() -> None:
    time_s, values = curves(5, 15, 2, 0.0, 0.0)
    with_gap = np.insert(values, 6, np.nan, axis=0)
    gap_time = np.insert(time_s, 6, 0.5 * (time_s[5] + time_s[6]), axis=0)
    start = np.zeros(2, dtype=int)
    plain = windows_from(time_s, values, start).pick(np.full(2, 14))
    gapped = windows_from(gap_time, with_gap, start).pick(np.full(2, 15))
    np.testing.assert_array_equal(plain.count, gapped.count)
    np.testing.assert_allclose(plain.slope, gapped.slope, rtol=1e-13)
    np.testing.assert_allclose(plain.curvature, gapped.curvature, rtol=1e-10)


def test_too_few_reads_give_nothing_instead_of_a_number() -> None:
    time_s = np.arange(3.0)[:, None]
    fits = windows_from(time_s, np.array([[1.0], [2.0], [4.0]]), np.array([0]))
    assert np.isnan(fits.slope[0, 0])
    assert fits.slope[1, 0] == 1.0
    assert np.isnan(fits.line_variance[1, 0])
    assert np.isnan(fits.curvature[1, 0])
    assert np.isnan(fits.parabola_variance[2, 0])
    nothing = windows_from(time_s, np.full((3, 1), np.nan), np.array([0]))
    assert np.isnan(nothing.slope).all()
    assert (nothing.count == 0).all()


def test_a_line_runs_through_its_mean_and_a_parabola_is_found_exactly() -> None:
    time_s = np.linspace(0.0, 90.0, 10)[:, None]
    values = 4.0 + 0.3 * time_s - 0.001 * time_s**2
    fits = windows_from(time_s, values, np.array([0])).pick(np.array([9]))
    assert fits.curvature[0] == pytest.approx(-0.001, rel=1e-12)
    assert fits.slope[0] == pytest.approx(0.3 - 0.002 * 45.0, rel=1e-12)
    assert fits.slope_change[0] == pytest.approx(-0.002 * 90.0 / 0.21, rel=1e-12)
    assert fits.at(fits.mean_s)[0] == pytest.approx(values.mean(), rel=1e-14)
