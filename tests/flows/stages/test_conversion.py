"""Signal to turnover by each way an assay may state, and what makes a plate wait."""

from __future__ import annotations

import numpy as np
import pandas as pd
import pytest

from flows.stages.conversion import plate_conversion
from models.errors import HalfsatError
from models.records.assay import Assay

SLOPE, BACKGROUND = 4831.0, 250.0


def assay(**changes: object) -> Assay:
    content: dict[str, object] = {
        "enzyme": "test oxidase",
        "substrate": "S",
        "product": "P",
        "signal": {"kind": "fluorescence"},
    }
    return Assay.model_validate(content | changes)


def readings(signals: dict[str, float], channel: str = "signal", reads: int = 3) -> pd.DataFrame:
    """The same signal in every read of a well."""
    rows = [
        {"channel": channel, "well": well, "read_number": read, "signal": signal, "state": "ok"}
        for well, signal in signals.items()
        for read in range(1, reads + 1)
    ]
    return pd.DataFrame(rows, columns=["channel", "well", "read_number", "signal", "state"])


def standards(levels_um: list[float]) -> pd.DataFrame:
    wells = [f"A{place}" for place in range(1, len(levels_um) + 1)]
    return pd.DataFrame({"well": wells, "role": "standard", "product_um": levels_um})


def test_a_curve_from_the_plates_standards_reads_its_own_wells() -> None:
    levels = [0.0, 0.5, 1.0, 2.0, 4.0]
    wells = standards(levels)
    scatter = np.array([3.0, -5.0, 2.0, 4.0, -4.0])
    signals = BACKGROUND + SLOPE * np.array(levels) + scatter
    read = readings(dict(zip(wells["well"], signals, strict=True)))
    curve = {"points_from": "plate", "model": "linear"}
    conversion = plate_conversion(assay(standard_curve=curve), read, wells, "signal")
    asked = np.array([[BACKGROUND + SLOPE * 1.5, BACKGROUND + SLOPE * 3.0]])
    np.testing.assert_allclose(conversion.turnover_um(["B1"], asked), [[1.5, 3.0]], rtol=2e-3)
    assert 0 < conversion.relative_error_shared < 0.01
    beyond = np.array([BACKGROUND + SLOPE * 40.0])
    assert not conversion.readable(beyond).any()
    doubled = assay(standard_curve=curve, product_per_substrate=2.0)
    half = plate_conversion(doubled, read, wells, "signal").turnover_um(["B1"], asked)
    np.testing.assert_allclose(half * 2, conversion.turnover_um(["B1"], asked), rtol=1e-12)


def test_a_standard_past_the_linear_limit_is_left_out_of_the_curve() -> None:
    wells = standards([0.0, 0.5, 1.0, 2.0, 50.0])
    # The detector tops out: the last standard shows far less than its product.
    signals = dict(zip(wells["well"], [250.0, 2670.0, 5080.0, 9910.0, 30000.0], strict=True))
    curve = {"points_from": "plate", "model": "linear"}
    limited = assay(standard_curve=curve, signal={"kind": "fluorescence", "linear_limit": 12000.0})
    conversion = plate_conversion(limited, readings(signals), wells, "signal")
    turnover = conversion.turnover_um(["B1"], np.array([[BACKGROUND + SLOPE * 1.5]]))
    np.testing.assert_allclose(turnover, [[1.5]], rtol=5e-3)


@pytest.mark.parametrize(
    "way",
    [
        {"response": {"signal_per_um": 0.01, "source": "test"}},
        {
            "standard_curve": {
                "points_from": "stated",
                "points": [{"product_um": p, "signal": 0.01 * p} for p in (0.0, 10.0, 50.0, 100.0)],
                "source": "test",
            }
        },
    ],
    ids=["response", "curve"],
)
def test_what_the_measurement_does_not_recover_was_turned_over_all_the_same(way: dict[str, object]) -> None:
    signal = np.array([[0.1, 0.45]])
    whole = plate_conversion(assay(**way), readings({}), standards([]), "signal")
    part = plate_conversion(assay(**way, product_recovery=0.9), readings({}), standards([]), "signal")
    np.testing.assert_allclose(
        part.turnover_um(["B1"], signal) * 0.9, whole.turnover_um(["B1"], signal), rtol=1e-9
    )


def test_standards_that_make_no_curve_are_refused_with_the_reason() -> None:
    wells = standards([1.0])
    with pytest.raises(HalfsatError, match="standard curve cannot be used"):
        plate_conversion(
            assay(standard_curve={"points_from": "plate"}), readings({"A1": 5000.0}), wells, "signal"
        )


def test_each_well_has_the_path_length_that_the_water_band_shows() -> None:
    """0.18 per cm of water at 977 less 900 nm (common value, from memory): 0.09 is half a centimetre."""
    absorption = {"change_per_molar_per_cm": 6220, "source": "test", "water_band": {}}
    absorbing = assay(signal={"kind": "absorbance", "channel": "340"}, absorption=absorption)
    read = pd.concat(
        [
            readings({"A1": 0.09 + 0.04, "A2": 0.18 + 0.04, "A3": 0.04}, "977"),
            readings({"A1": 0.04, "A2": 0.04, "A3": 0.04}, "900"),
        ]
    )
    conversion = plate_conversion(absorbing, read, standards([]), "340")
    signal = np.full((3, 2), 6220e-6 * 10.0)
    turnover = conversion.turnover_um(["A1", "A2", "A3"], signal)
    np.testing.assert_allclose(turnover[:2], [[20.0, 20.0], [10.0, 10.0]])
    assert np.isnan(turnover[2]).all(), "a dry well has no path length"
    with pytest.raises(HalfsatError, match="no channel '977'"):
        plate_conversion(absorbing, readings({"A1": 0.04}, "900"), standards([]), "340")
