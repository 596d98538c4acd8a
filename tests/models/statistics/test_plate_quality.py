"""Z', signal to blank and replicate scatter of several plates at once."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from models.statistics.plate_quality import control_window, replicate_cvs
from models.statistics.replicates import replicate_cv

# Constructed values; the results below are recomputed from the published formula
# (Zhang, Chung and Oldenburg 1999, doi:10.1177/108705719900400206), n - 1 in the standard deviations.
REFERENCE = [98.2, 101.5, 99.8, 100.6, 97.9, 102.0, 100.1, 99.9]
BLANK = [10.2, 9.6, 10.9, 9.1, 10.4, 9.8, 10.0, 10.1]
Z_PRIME, SIGNAL_TO_BLANK = 0.9343697065908071, 9.987515605493135


def test_constructed_plate() -> None:
    found = control_window(
        np.zeros(16, dtype=int), np.arange(16) < 8, np.array([*REFERENCE, *BLANK]), plate_count=1
    )
    assert found.z_prime[0] == pytest.approx(Z_PRIME, rel=1e-12)
    assert found.signal_to_blank[0] == pytest.approx(SIGNAL_TO_BLANK, rel=1e-12)
    assert (found.reference_count[0], found.blank_count[0]) == (8, 8)


@given(st.randoms(use_true_random=False), st.floats(0.01, 100))
def test_plates_do_not_mix_and_units_do_not_matter(random, scale: float) -> None:
    rows = [(0, True, v) for v in REFERENCE] + [(0, False, v) for v in BLANK]
    rows += [(2, True, v / 2) for v in REFERENCE] + [(2, False, v) for v in BLANK] + [(2, True, np.nan)]
    random.shuffle(rows)
    plate, is_reference, values = (np.array(column) for column in zip(*rows, strict=True))
    found = control_window(plate, is_reference, scale * values, plate_count=3)
    assert found.z_prime[0] == pytest.approx(Z_PRIME, rel=1e-9)
    expected = 1 - 3 * (np.std(REFERENCE, ddof=1) / 2 + np.std(BLANK, ddof=1)) / (
        np.mean(REFERENCE) / 2 - np.mean(BLANK)
    )
    assert found.z_prime[2] == pytest.approx(expected, rel=1e-9)
    assert np.isnan(found.z_prime[1])


def test_what_is_not_known_is_not_a_number() -> None:
    plate = np.array([0, 0, 0, 1, 1, 1, 1])
    is_reference = np.array([True, False, False, True, True, False, False])
    found = control_window(plate, is_reference, np.array([5.0, 1.0, 1.2, 2.0, 2.2, -1.0, 1.0]), 2)
    assert np.isnan(found.z_prime[0])
    assert np.isfinite(found.signal_to_blank[0])
    assert np.isnan(found.signal_to_blank[1])
    same = control_window(np.zeros(4, dtype=int), np.arange(4) < 2, np.array([1.0, 2.0, 1.0, 2.0]), 1)
    assert np.isnan(same.z_prime[0])


def test_replicates_of_each_plate() -> None:
    rng = np.random.default_rng(2)
    values = 1 + 0.05 * rng.standard_normal(24)
    plate, group = np.repeat([0, 2], 12), np.repeat(np.arange(8), 3)
    found = replicate_cvs(plate, group, values, 3)
    assert found[0] == replicate_cv(values[:12], np.repeat(np.arange(4), 3)).cv
    assert found[2] == replicate_cv(values[12:], np.repeat(np.arange(4), 3)).cv
    assert np.isnan(found[1])
