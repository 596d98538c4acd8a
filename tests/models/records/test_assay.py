"""Assays: one way from signal to product, each way's numbers, and what is refused."""

from __future__ import annotations

import re
import tomllib
from pathlib import Path
from typing import Any

import numpy as np
import pytest
from pydantic import ValidationError

from models.calibration.calibration import Calibration
from models.calibration.path_length import WATER_PER_CM_RELATIVE_ERROR
from models.identity import canonical_json
from models.records.assay import Assay

CONFIG = Path(__file__).resolve().parents[3] / "config" / "assays"

LEAST: dict[str, Any] = {
    "enzyme": "beta-glucosidase",
    "substrate": "4-nitrophenyl glucoside",
    "product": "4-nitrophenolate",
    "signal": {"kind": "absorbance"},
}
EPSILON = {"change_per_molar_per_cm": 18000.0, "source": "invented"}
POINTS = [{"product_um": p, "signal": 0.04 + 0.01 * p} for p in (0.0, 10.0, 20.0, 40.0)]
STATED = {"points_from": "stated", "points": POINTS, "source": "invented"}
SAMPLE = {"assay_volume_ul": 200.0, "sample_volume_ul": 10.0}


def assay(**more: Any) -> Assay:
    return Assay.model_validate(LEAST | more)


def test_molar_absorption_by_both_plain_path_lengths() -> None:
    stated = assay(absorption=EPSILON | {"path_length_cm": 0.5})
    filled = assay(absorption=EPSILON | {"fill_volume_ul": 160.0, "well_area_mm2": 32.0})
    # 18000 L/mol/cm over 0.5 cm is 9000 L/mol, 0.009 for 1 umol/L.
    assert stated.absorption is not None
    assert filled.absorption is not None
    assert stated.absorption.signal_per_um == pytest.approx(0.009)
    assert filled.absorption.signal_per_um == pytest.approx(0.009)
    assert stated.absorption.relative_error_shared == 0.0


def test_with_a_water_band_there_is_no_one_path_length() -> None:
    found = assay(absorption=EPSILON | {"water_band": {}, "change_relative_error": 0.01}).absorption
    assert found is not None
    assert found.water_band is not None
    assert (found.water_band.channel_977, found.water_band.channel_900) == ("977", "900")
    assert found.water_band.per_cm == 0.18
    assert found.signal_per_um_per_cm == pytest.approx(0.018)
    assert found.relative_error_shared == pytest.approx(np.hypot(0.01, WATER_PER_CM_RELATIVE_ERROR))
    with pytest.raises(ValueError, match="its own path length"):
        _ = found.path_cm
    own = {"water_per_cm": 0.176, "source": "1 cm cuvette, 30 degC"}
    found = assay(absorption=EPSILON | {"water_band": own}).absorption
    assert found is not None
    assert found.water_band is not None
    assert found.water_band.per_cm == 0.176
    assert found.relative_error_shared == 0.0


def test_a_stated_curve_is_fitted_as_the_record_says() -> None:
    found = assay(standard_curve=STATED)
    assert found.standard_curve is not None
    curve = found.standard_curve.stated("rises")
    assert isinstance(curve, Calibration)
    assert curve.parameters == pytest.approx([0.04, 0.01])
    product = np.array([0.0, 5.0, 10.0, 20.0, 40.0, 80.0])
    chosen = STATED | {"model": "quadratic", "extrapolation": 0.0}
    found = assay(standard_curve={"points_from": "plate", "model": "quadratic", "extrapolation": 0.0})
    assert found.standard_curve is not None
    curve = found.standard_curve.fit(product, 0.1 + 0.01 * product - 2e-5 * product**2, "rises")
    assert isinstance(curve, Calibration)
    assert curve.parameters == pytest.approx([0.1, 0.01, -2e-5])
    assert curve.highest_um == 80.0
    assert assay(standard_curve=chosen).standard_curve is not None


def test_the_shipped_assay_shows_keys_that_can_be_used() -> None:
    """The keys that its comments offer, taken out of the comments, make a valid assay each way."""
    text = (CONFIG / "lactate_dehydrogenase_340.toml").read_text(encoding="utf-8")
    offered = tomllib.loads(re.sub(r"^# (?=[a-z_0-9]+ = |\[)", "", text, flags=re.MULTILINE))
    curve, absorption = offered.pop("standard_curve"), offered.pop("absorption")
    band = absorption.pop("water_band")
    assert Assay.model_validate(offered | {"absorption": absorption}).absorption is not None
    kept = ("change_per_molar_per_cm", "source", "change_relative_error")
    by_band = {name: absorption[name] for name in kept} | {"water_band": band}
    assert Assay.model_validate(offered | {"absorption": by_band}).absorption is not None
    rising = offered | {"signal": offered["signal"] | {"direction": "rises"}}
    found = Assay.model_validate(rising | {"standard_curve": curve})
    assert found.sample is not None
    assert found.standard_curve is not None
    assert isinstance(found.standard_curve.stated("rises"), Calibration)


@pytest.mark.parametrize(
    "more",
    [
        {"standard_curve": STATED},
        {"standard_curve": {"points_from": "plate", "weighting": "replicates"}, "sample": SAMPLE},
        {"absorption": EPSILON | {"water_band": {"channel_977": "975"}}, "product_recovery": 0.5},
    ],
)
def test_a_kept_recipe_reads_back_the_same(more: dict[str, Any]) -> None:
    written = assay(**more)
    assert Assay.model_validate_json(canonical_json(written.model_dump(mode="json"))) == written


@pytest.mark.parametrize(
    ("more", "words"),
    [
        ({}, "[absorption] or [response] or [standard_curve]"),
        (
            {"absorption": EPSILON | {"path_length_cm": 1.0}, "standard_curve": STATED},
            "[absorption] or [response] or [standard_curve]",
        ),
        ({"absorption": EPSILON}, "state path_length_cm"),
        ({"absorption": EPSILON | {"path_length_cm": 1.0, "water_band": {}}}, "state path_length_cm"),
        ({"absorption": EPSILON | {"fill_volume_ul": 1.0}}, "state path_length_cm"),
        ({"absorption": EPSILON | {"water_band": {"water_per_cm": 0.18}}}, "go together"),
        ({"standard_curve": {"points_from": "plate", "points": POINTS}}, "belong to points_from"),
        ({"standard_curve": {"points_from": "stated", "points": POINTS}}, "needs points and their source"),
        (
            {"standard_curve": {"points_from": "stated", "source": "invented"}},
            "needs points and their source",
        ),
        ({"standard_curve": STATED | {"points": POINTS[:2]}}, "2 distinct standards"),
        (
            {"standard_curve": STATED | {"points": [POINTS[0] | {"product_um": -1.0}]}},
            "greater than or equal",
        ),
        (
            {"standard_curve": STATED, "signal": {"kind": "absorbance", "direction": "falls"}},
            "the assay says that it falls",
        ),
        ({"standard_curve": STATED | {"model": "cubic"}}, "linear"),
        ({"standard_curve": STATED, "sample": SAMPLE | {"sample_volume_ul": 300.0}}, "which contains it"),
        ({"standard_curve": STATED, "sample": SAMPLE | {"dilution": 0.01}}, "greater than or equal to 1"),
        ({"standard_curve": STATED, "product_recovery": 0.0}, "greater than 0"),
    ],
)
def test_what_is_refused(more: dict[str, Any], words: str) -> None:
    with pytest.raises(ValidationError) as caught:
        assay(**more)
    assert words in str(caught.value)
