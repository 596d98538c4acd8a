"""Rows of the tiny site's series, grids and fits, written by hand: what a fit would have stored."""

from __future__ import annotations

from typing import TYPE_CHECKING

from models.identity import result_id
from tests.flows.tiny_plates import HELD, KM_UM, LEVELS_UM, LOTS, PLATES, VMAX_UM_PER_S, rate_um_per_s

if TYPE_CHECKING:
    from tests.flows.tiny_site import TinySite


def add_series(
    made: TinySite, given: dict[str, list[dict[str, object]]], plate: str, analysis_id: str, row: str
) -> None:
    lot, role = LOTS[row]
    series_id = made.series_ids[plate, lot]
    clear = 3 if (plate, row) == (HELD[0], HELD[1][0]) else 4
    given["series"].append(
        {
            "series_id": series_id,
            "analysis_id": analysis_id,
            "lot": lot,
            "role": role,
            "enzyme_nm": 5.0,
            "well_count": 4,
            "clear_well_count": clear,
            "level_count": clear,
            "lowest_substrate_um": LEVELS_UM[0],
            "highest_substrate_um": LEVELS_UM[clear - 1],
            "law": "michaelis_menten",
            "standing": "clear",
        }
    )
    for law in ("michaelis_menten", "hill"):
        for wells in ("clear", "all"):
            add_fit(made, given, plate, lot, law, wells, clear if wells == "clear" else 4)
    ids = {"analysis_id": analysis_id, "fit_id": made.fit_ids[plate, lot]}
    for column, level in enumerate(LEVELS_UM[:clear], start=1):
        rate = {"v_um_per_s": rate_um_per_s(level), "fitted_um_per_s": rate_um_per_s(level)}
        point = {"well": f"{row}{column}", "substrate_um": level, "v_sd_um_per_s": 0.001, "leverage": 0.5}
        given["fit_points"].append({**ids, **rate, **point})
    given["correlations"].append(
        {**ids, "constant": "vmax", "other_constant": "km", "correlation": 0.9},
    )
    given["comparisons"].append(
        {
            "series_id": series_id,
            "analysis_id": analysis_id,
            "km_ratio": 1.02,
            "km_ratio_low": 0.95,
            "km_ratio_high": 1.1,
            "vmax_ratio": 1.01,
            "vmax_ratio_low": 0.99,
            "vmax_ratio_high": 1.03,
            "p_value": 0.6,
        }
    )
    if (plate, row) == (HELD[0], HELD[1][0]):
        level = {"place": 1, "substrate_um": 400.0, "replicates": 3, "settles": True}
        why = {"gates": "saturation_not_reached", "allowed_by": "reach", "highest_allowed_um": 400.0}
        given["suggestions"].append(
            {
                "series_id": series_id,
                "analysis_id": analysis_id,
                **level,
                **why,
                "constant": "km",
                "sentence": "400 µM in triplicate would settle it.",
            }
        )
    made.grid_ids[plate, lot] = add_grid(given, analysis_id, lot, role)


def add_grid(given: dict[str, list[dict[str, object]]], analysis_id: str, lot: str, role: str) -> str:
    grid_id = result_id("grid", analysis_id, lot)
    given["grids"].append(
        {
            "grid_id": grid_id,
            "analysis_id": analysis_id,
            "lot": lot,
            "role": role,
            "enzyme_nm": 5.0,
            "modulator": "an inhibitor",
            "well_count": 4,
            "clear_well_count": 4,
            "substrate_level_count": 4,
            "modulator_level_count": 1,
            "refusal": "one modulator level only",
            "standing": "held",
        }
    )
    given["shifts"].append(
        {
            "grid_id": grid_id,
            "analysis_id": analysis_id,
            "law": "michaelis_menten",
            "constants": "km",
            "f_value": 1.0,
            "numerator_degrees": 1,
            "denominator_degrees": 10,
            "p_value": 0.34,
        }
    )
    return grid_id


def add_fit(
    made: TinySite,
    given: dict[str, list[dict[str, object]]],
    plate: str,
    lot: str,
    law: str,
    wells: str,
    points: int,
) -> None:
    analysis_id, series_id = made.analysis_ids[plate], made.series_ids[plate, lot]
    fit_id = result_id("fit", series_id, law, wells)
    chosen = law == "michaelis_menten"
    given["fits"].append(
        {
            "fit_id": fit_id,
            "series_id": series_id,
            "analysis_id": analysis_id,
            "law": law,
            "wells": wells,
            "chosen": chosen,
            "converged": True,
            "trusted": chosen,
            "distrust": None if chosen else "too few levels",
            "point_count": points,
            "degrees_of_freedom": points - 2,
            "weighted_residual_sum": 0.5,
        }
    )
    # Plates differ by a known step, so that moving ranges and means have known values.
    km = KM_UM + 2.0 * PLATES.index(plate)
    for constant, value, unit in (("km", km, "umol/L"), ("vmax", VMAX_UM_PER_S, "umol/L/s")):
        estimate_id = result_id("estimate", fit_id, constant)
        if chosen and wells == "clear":
            made.fit_ids[plate, lot] = fit_id
            if constant == "km":
                made.estimate_ids[plate, lot] = estimate_id
        given["estimates"].append(
            {
                "estimate_id": estimate_id,
                "fit_id": fit_id,
                "series_id": series_id,
                "analysis_id": analysis_id,
                "assay": "tiny",
                "lot": lot,
                "law": law,
                "wells": wells,
                "chosen": chosen,
                "constant": constant,
                "value": value,
                "standard_error": value / 20,
                "low": value * 0.9,
                "high": None if constant == "vmax" else value * 1.1,
                "unit": unit,
                "assay_relative_error": 0.0,
            }
        )
