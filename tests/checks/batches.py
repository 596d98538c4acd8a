"""Tiny batches with nothing wrong, for tests to break: two plate reads of 12 wells, 20 reads."""

from __future__ import annotations

from dataclasses import replace
from typing import Any

import pandas as pd

from checks.gates.gate import GateInput
from models.records.assay import Assay, Schedule

READS = 20
INTERVAL_S = 10.0
WELLS = [f"{row}{column}" for row in "ABC" for column in range(1, 5)]
BLANKS = ("A1", "A2")
PLATES = ("plate-1", "plate-2")


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
        {
            "analysis_id": list(PLATES),
            "plate_format": 96,
            "temperature_low_c": 24.9,
            "temperature_high_c": 25.1,
        }
    )
    assays = {recipe: an_assay() for recipe in recipes}
    return GateInput(analyses, wells, readings, rates, plate_reads=plate_reads, assays=assays)


def clean_series() -> GateInput:
    """A hyperbolic and a cooperative series, both well saturated."""
    series = pd.DataFrame(
        {
            "series_id": ["hyperbolic", "cooperative"],
            "analysis_id": ["plate-1", "plate-2"],
            "well_count": 10,
            "clear_well_count": 10,
            "highest_substrate_um": [400.0, 400.0],
            "refusal": pd.Series([None, None], dtype=object),
        }
    )
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
    return replace(clean_batch(), series=series, estimates=estimates)


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
    frames = {name: stacked(name) for name in ("analyses", "wells", "readings", "rates", "plate_reads")}
    return GateInput(**frames, assays=assays)
