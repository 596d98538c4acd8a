"""Tiny batches with nothing wrong, for tests to break: two plate reads of 12 wells, 20 reads."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import replace
from typing import Any

import numpy as np
import pandas as pd

from checks.assess import assess
from checks.gates.gate import Gate, GateInput
from checks.gates.limits import resolve
from models.records.assay import Assay, Schedule
from models.tables import COMPARISONS, FIT_POINTS, FITS, SERIES

READS = 20
INTERVAL_S = 10.0
WELLS = [f"{row}{column}" for row in "ABC" for column in range(1, 5)]
BLANKS = ("A1", "A2")
PLATES = ("plate-1", "plate-2")
ASSAY_C = 25.0
REFERENCE = "R1"
STANDARDS_UM = (0.0, 5.0, 10.0, 20.0, 40.0, 80.0)
SERIES_LEVELS_UM = {320.0: 400.0}
"""Series reach a little further than the wells that `clean_batch` lays out."""


def an_assay(schedule: Schedule | None = None, **stated: Any) -> Assay:
    """An assay with nothing particular about it."""
    return Assay.model_validate(
        {
            "enzyme": "an enzyme",
            "substrate": "a substrate",
            "product": "a product",
            "signal": {"kind": "absorbance"},
            "response": {"signal_per_um": 0.01, "source": "invented"},
            "schedule": schedule or Schedule(),
            "conditions": {"temperature_c": ASSAY_C},
            "chart_bases": [
                {"lot": REFERENCE, "constant": name, "mean": mean, "sd": mean / 20, "source": "invented"}
                for name, mean in (("km", 80.0), ("k_half", 200.0))
            ],
            **stated,
        }
    )


def clean_batch(recipes: tuple[str, str] = ("recipe-1", "recipe-1")) -> GateInput:
    """Every gate can judge every subject, and none of them flags one."""
    analyses = pd.DataFrame({"analysis_id": list(PLATES), "recipe_id": list(recipes), "assay": "an assay"})
    wells = pd.DataFrame(
        [
            {
                "analysis_id": plate,
                "well": well,
                "role": "blank" if well in BLANKS else "sample",
                "lot": None if well in BLANKS else "L1",
                "substrate_um": 10.0 * 2 ** (number % 6),
                "enzyme_nm": None if well in BLANKS else 5.0,
                "enzyme_ng_per_ml": None,
                "modulator": None,
                "modulator_um": None,
                "product_um": None,
                "series_id": None if well in BLANKS else f"{plate} series",
                "row_number": "ABC".index(well[0]) + 1,
                "column_number": int(well[1:]),
            }
            for plate in PLATES
            for number, well in enumerate(WELLS)
        ]
    )
    rates = wells[["analysis_id", "well"]].assign(
        v0_um_per_s=0.95,
        v0_se_um_per_s=0.01,
        raw_rate_um_per_s=1.0,
        blank_rate_um_per_s=0.05,
        blank_rate_se_um_per_s=0.005,
        blank_source="plate",
        mean_substrate_um=9.5,
        window_first_read=1,
        window_last_read=15,
        window_start_s=0.0,
        window_end_s=140.0,
        window_point_count=15,
        conversion=0.05,
        shortest_conversion=0.02,
        slope_change=0.01,
        slope_change_t=0.5,
        early_slope_change=-0.02,
        early_slope_change_t=-0.5,
        lag_s=0.0,
        shape="straight",
        overflow_count=0,
        missing_count=0,
    )
    readings = pd.DataFrame(
        [
            (
                plate,
                well,
                number,
                INTERVAL_S * (number - 1),
                0.1 + 0.01 * number * (well not in BLANKS),
                "ok",
                10.0 + number * (well not in BLANKS),
            )
            for plate in PLATES
            for well in WELLS
            for number in range(1, READS + 1)
        ],
        columns=["analysis_id", "well", "read_number", "time_s", "signal", "state", "product_um"],
    )
    plate_reads = pd.DataFrame(
        {"analysis_id": list(PLATES), "temperature_low_c": ASSAY_C - 0.1, "temperature_high_c": ASSAY_C + 0.1}
    )
    return GateInput(
        analyses,
        wells,
        readings,
        rates,
        plate_reads=plate_reads,
        standards=pd.concat([standards(plate) for plate in PLATES], ignore_index=True),
        assays={recipe: an_assay() for recipe in recipes},
    )


def standards(plate: str, read_um: Sequence[float] | None = None) -> pd.DataFrame:
    """Standards of a plate read, in pairs, and what they read back as; left out, 1 % off to either side."""
    known = np.repeat(STANDARDS_UM, 2)
    read = known * np.tile([0.99, 1.01], len(STANDARDS_UM)) if read_um is None else np.repeat(read_um, 2)
    return pd.DataFrame(
        {
            "analysis_id": plate,
            "well": [f"H{number}" for number in range(1, len(known) + 1)],
            "product_um": known,
            "signal": 0.1 + 0.01 * read,
            "back_calculated_um": read,
        }
    )


def clean_series() -> GateInput:
    """A hyperbolic and a cooperative series of the reference lot, both well saturated."""
    batch = clean_batch()
    names = dict(zip(PLATES, ("hyperbolic", "cooperative"), strict=True))
    member = batch.wells["series_id"].notna()
    wells = batch.wells.assign(
        series_id=batch.wells["analysis_id"].map(names).where(member, None),
        role=batch.wells["role"].where(~member, "reference"),
        lot=batch.wells["lot"].where(~member, REFERENCE),
        substrate_um=batch.wells["substrate_um"].replace(SERIES_LEVELS_UM),
    )
    series = pd.DataFrame(
        {
            "series_id": ["hyperbolic", "cooperative"],
            "analysis_id": ["plate-1", "plate-2"],
            "lot": REFERENCE,
            "role": "reference",
            "enzyme_nm": 5.0,
            "enzyme_ng_per_ml": np.nan,
            "modulator": None,
            "modulator_um": np.nan,
            "well_count": 10,
            "clear_well_count": 10,
            "level_count": 6,
            "lowest_substrate_um": [10.0, 10.0],
            "highest_substrate_um": [400.0, 400.0],
            "law": ["michaelis_menten", "hill"],
            "refusal": pd.Series([None, None], dtype=object),
        }
    )
    assert [*series.columns, "standing"] == SERIES.column_names
    estimates = pd.DataFrame(
        [
            ("hyperbolic", "vmax", 2.0, 1.9, 2.1, "umol/L/s"),
            ("hyperbolic", "km", 80.0, 75.0, 85.0, "umol/L"),
            ("cooperative", "vmax", 2.0, 1.9, 2.1, "umol/L/s"),
            ("cooperative", "k_half", 200.0, 190.0, 210.0, "umol/L"),
            ("cooperative", "hill_n", 2.0, 1.9, 2.1, "1"),
        ],
        columns=["series_id", "constant", "value", "low", "high", "unit"],
    ).assign(wells="clear", chosen=True)
    fits = series[["series_id", "analysis_id", "law"]].assign(
        fit_id="fit of " + series["series_id"],
        grid_id=None,
        wells="clear",
        chosen=True,
        converged=True,
        trusted=True,
        distrust=None,
        point_count=10,
        degrees_of_freedom=[8, 7],
        weighted_residual_sum=7.0,
        aicc=12.0,
        evidence_weight=1.0,
        lack_of_fit_p=0.4,
        runs_p=0.6,
    )[FITS.column_names]
    points = wells.loc[member, ["series_id", "analysis_id", "well", "substrate_um"]].reset_index(drop=True)
    level = points["substrate_um"]
    fitted = 2.0 * level / (80.0 + level)
    cooperative = points["series_id"] == "cooperative"
    fitted = fitted.where(~cooperative, 2.0 * level**2 / (200.0**2 + level**2))
    # Neighbours in a column hold one level: 2 % to either side of the curve.
    side = np.where(points.groupby(["series_id", "substrate_um"]).cumcount() == 0, 0.02, -0.02)
    points = points.assign(
        fit_id="fit of " + points["series_id"],
        v_um_per_s=fitted * (1 + side),
        fitted_um_per_s=fitted,
        v_sd_um_per_s=0.02 * fitted,
        leverage=0.2,
        studentised_residual=np.sign(side),
    )[[*FIT_POINTS.column_names, "series_id"]]
    comparisons = pd.DataFrame(
        {
            "series_id": ["hyperbolic"],
            "analysis_id": ["plate-1"],
            "km_ratio": [1.03],
            "km_ratio_low": [0.95],
            "km_ratio_high": [1.12],
            "vmax_ratio": [1.01],
            "vmax_ratio_low": [0.97],
            "vmax_ratio_high": [1.05],
            "p_value": [0.5],
        }
    )
    assert list(comparisons.columns) == COMPARISONS.column_names
    return replace(
        batch,
        wells=wells,
        series=series,
        estimates=estimates,
        fits=fits,
        points=points,
        comparisons=comparisons,
    )


def judged(gate: Gate, data: GateInput, **settings: bool | float) -> pd.DataFrame:
    """Findings of one gate alone, under its defaults but for some settings."""
    limits = resolve({gate.name: gate}, {gate.name: settings}, {})
    recipes = dict.fromkeys(data.analyses["recipe_id"], limits)
    return assess(gate.phase, data, recipes, {gate.name: gate}).findings


def with_frame(data: GateInput, frame: str, where: dict[str, Any], **values: Any) -> GateInput:
    """The batch with other values in the rows of one frame that match."""
    changed = getattr(data, frame).copy()
    rows = np.ones(len(changed), dtype=bool)
    for name, value in where.items():
        rows &= (changed[name] == value).to_numpy()
    assert rows.any(), where
    for name, value in values.items():
        changed[name] = changed[name].astype(object) if isinstance(value, str) else changed[name]
        changed.loc[rows, name] = value
    return replace(data, **{frame: changed})


def with_assay(data: GateInput, **stated: Any) -> GateInput:
    """The batch with another assay in all its recipes."""
    return replace(data, assays=dict.fromkeys(data.assays, an_assay(**stated)))


def with_rates(data: GateInput, well: str, plate: str = "plate-1", **values: Any) -> GateInput:
    """The batch with other rates in one well."""
    rates = data.rates.copy()
    row = (rates["analysis_id"] == plate) & (rates["well"] == well)
    for name, value in values.items():
        if rates[name].dtype.kind == "i":
            rates[name] = rates[name].astype(float)
        rates.loc[row, name] = value
    return replace(data, rates=rates)


def with_reads(
    data: GateInput, well: str, numbers: list[int], plate: str = "plate-1", **values: Any
) -> GateInput:
    """The batch with other readings in one well."""
    readings = data.readings.copy()
    rows = (readings["analysis_id"] == plate) & (readings["well"] == well)
    rows &= readings["read_number"].isin(numbers)
    for name, value in values.items():
        readings.loc[rows, name] = value
    return replace(data, readings=readings)


def unread(data: GateInput, well: str) -> GateInput:
    """The batch with a well in which no rate could be measured, as the rates then look."""
    names = [
        "v0_um_per_s",
        "v0_se_um_per_s",
        "raw_rate_um_per_s",
        "blank_rate_um_per_s",
        "window_last_read",
        "window_end_s",
        "conversion",
        "shortest_conversion",
        "slope_change",
        "slope_change_t",
        "early_slope_change",
        "early_slope_change_t",
        "lag_s",
    ]
    return with_rates(data, well, shape="unread", window_point_count=3, **dict.fromkeys(names, float("nan")))


def with_estimate(data: GateInput, series_id: str, constant: str, **values: Any) -> GateInput:
    """The batch with another estimate of one constant."""
    assert data.estimates is not None
    estimates = data.estimates.copy()
    row = (estimates["series_id"] == series_id) & (estimates["constant"] == constant)
    for name, value in values.items():
        estimates.loc[row, name] = value
    return replace(data, estimates=estimates)


def together(batches: dict[str, GateInput]) -> GateInput:
    """Many batches as one, each analysis called after its batch: one suite judges them all."""

    def stacked(attribute: str) -> pd.DataFrame:
        frames = [
            getattr(data, attribute).assign(
                analysis_id=lambda frame, name=name: f"{name} / " + frame["analysis_id"].astype(str)
            )
            for name, data in batches.items()
        ]
        return pd.concat(frames, ignore_index=True)

    assays = {recipe: assay for data in batches.values() for recipe, assay in data.assays.items()}
    names = ("analyses", "wells", "readings", "rates", "plate_reads", "standards")
    frames = {name: stacked(name) for name in names}
    return GateInput(**frames, assays=assays)
