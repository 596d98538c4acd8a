"""Standard curves of published data agree with the published values on the digits that those carry."""

from __future__ import annotations

import numpy as np
import pytest

from models.calibration.activity import activity, nkat_from_u, u_from_nkat
from models.calibration.path_length import path_from_volume_cm, path_from_water_band
from tests.published.calibration_values import calibration_agreements, published_curve
from tests.published.published_values import Agreement

ALL = calibration_agreements()


@pytest.mark.parametrize("each", ALL, ids=[f"{a.dataset}, {a.quantity}" for a in ALL])
def test_value_agrees(each: Agreement) -> None:
    assert each.agrees, f"{each.found!r} against {each.published!r} ({each.source}): {each.digits:.1f} digits"


def test_load_cell_reads_back_the_load() -> None:
    """NIST/SEMATECH e-Handbook 2.3.6.5: a load is the root within the data's range."""
    curve = published_curve("nist_load_cell.csv", "load_1", "response_1", "quadratic")
    load, _ = curve.to_product(np.array([1.344]))
    a, b, c = curve.parameters[2], curve.parameters[1], curve.parameters[0] - 1.344
    assert load[0] == pytest.approx((-b + np.sqrt(b * b - 4 * a * c)) / (2 * a), rel=1e-9)
    assert 13.3 < load[0] < 13.5


def test_shared_error_of_a_line_is_that_of_its_slope() -> None:
    """Line width, R 4.2 lm: 0.00344058033672319 of 0.987037714284589."""
    curve = published_curve("nist_linewidth.csv", "reference_um", "measured_um", "linear")
    assert curve.relative_error_shared == pytest.approx(0.00344058033672319 / 0.987037714284589, rel=1e-9)


def test_unit_and_katal() -> None:
    """1 U = 1 umol/min (IUB 1964), 1 kat = 1 mol/s (CGPM 1999, resolution 12): 1 U = 16.67 nkat."""
    assert nkat_from_u(np.array(1.0)) == pytest.approx(16.666666666666668, rel=1e-12)
    assert u_from_nkat(np.array(1.0)) == pytest.approx(0.06, rel=1e-12)
    found = activity(np.array(1.0), 200.0, 200.0)
    assert (found.nkat_per_ml, found.u_per_ml) == (1.0, 0.06)


def test_path_length_of_a_common_well() -> None:
    """200 uL in a well of 6.4 to 6.9 mm diameter: about 0.55 to 0.6 cm (from memory, unconfirmed, to 5 %)."""
    for diameter_mm in (6.4, 6.9):
        path = path_from_volume_cm(200.0, np.pi * diameter_mm**2 / 4.0)
        assert 0.55 * 0.95 < path < 0.6 * 1.05


def test_water_band_of_a_centimetre() -> None:
    """A977 - A900 of 1 cm of water is 0.18 (from memory, unconfirmed, to 5 %)."""
    found = path_from_water_band(np.array([[0.23]]), np.array([[0.05]]))
    assert found.path_cm[0] == pytest.approx(1.0, rel=0.05)
