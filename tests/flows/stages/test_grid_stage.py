"""Grids of a modulator through the stages: found, fitted with shared constants, tested for shifts."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pandas as pd
import pytest

from flows.stages.fit import fit_batch
from flows.stages.gate import gate_batch
from flows.stages.grids import NO_LAWS, find_grids
from flows.stages.lots import lot_values
from flows.stages.rate import rate_batch
from flows.stages.work import FittedBatch, PlateWork
from models.records.assay import Assay
from models.simulation import TRIPLICATE_NOISE, TRIPLICATE_TRUTH, simulate_plate, triplicate_design
from models.tables import TABLES
from tests.flows.stages.test_rate_and_fit import assay, plate_work

KI_UM = 12.0
LEVELS_UM = (0.0, 6.0, 18.0, 54.0)
INHIBITION = ("competitive_inhibition", "uncompetitive_inhibition", "noncompetitive_inhibition")


def grid_work(stated: Assay, *, competitive: bool = True, levels: tuple[float, ...] = LEVELS_UM) -> PlateWork:
    """A 384-well plate: 24 wells at each level of one competitive inhibitor (or of one without effect)."""
    work = plate_work(stated)
    wells, readings = [], []
    for number, level_um in enumerate(levels):
        factor = 1.0 + level_um / KI_UM if competitive else 1.0
        truth = replace(TRIPLICATE_TRUTH, k_um=TRIPLICATE_TRUTH.k_um * factor)
        plate = simulate_plate(
            triplicate_design(), {"lot": truth}, TRIPLICATE_NOISE, (), np.random.default_rng([7, number])
        )
        moved = {well: f"{well[0]}{int(well[1:]) + 6 * number}" for well in plate.wells["well"]}
        count = len(plate.time_s)
        block = work.readings.iloc[: len(moved) * count].copy()
        block["well"] = np.repeat(list(moved.values()), count)
        block["read_number"] = np.tile(np.arange(1, count + 1), len(moved))
        block["time_s"] = np.tile(plate.time_s, len(moved))
        block["signal"] = plate.signal.ravel()
        readings.append(block)
        modulated = plate.wells["role"].eq("sample") & (level_um > 0)
        wells.append(
            plate.wells.assign(
                well=plate.wells["well"].map(moved),
                modulator=pd.Series("inhibitor X", index=plate.wells.index).where(modulated),
                modulator_um=np.where(modulated, level_um, np.nan),
            )
        )
    return replace(
        work, wells=pd.concat(wells, ignore_index=True), readings=pd.concat(readings, ignore_index=True)
    )


def fitted(work: PlateWork) -> FittedBatch:
    return fit_batch(gate_batch(rate_batch([work])))


@pytest.fixture(scope="module")
def competitive() -> FittedBatch:
    return fitted(grid_work(assay(laws=["michaelis_menten"], modulator_laws=[*INHIBITION])))


def test_a_grid_holds_every_level_of_its_modulator_and_the_wells_without(competitive):
    (grid,) = competitive.tables["grids"].to_dict("records")
    assert grid["modulator"] == "inhibitor X"
    assert grid["well_count"] == 96
    assert grid["modulator_level_count"] == 4
    assert grid["substrate_level_count"] == 8
    assert grid["standing"] == "clear"
    assert len(competitive.tables["series"]) == 4


def test_the_right_inhibition_is_chosen_and_its_constants_recovered(competitive):
    (grid,) = competitive.tables["grids"].to_dict("records")
    assert grid["law"] == "competitive_inhibition"
    estimates = competitive.tables["estimates"]
    mine = estimates[estimates["chosen"] & estimates["grid_id"].notna() & (estimates["wells"] == "clear")]
    found = mine.set_index("constant")
    assert found.loc["k_ic", "low"] < KI_UM < found.loc["k_ic", "high"]
    assert found.loc["km", "value"] == pytest.approx(80.0, rel=0.05)
    assert found.loc["kcat", "value"] == pytest.approx(50.0, rel=0.03)
    assert mine["series_id"].isna().all()
    fits = competitive.tables["fits"]
    of_grid = fits[fits["grid_id"].notna() & (fits["wells"] == "clear")]
    assert set(of_grid["law"]) == set(INHIBITION)
    assert of_grid["evidence_weight"].sum() == pytest.approx(1.0)


def test_a_shift_of_km_is_real_under_an_inhibitor_and_not_without_effect(competitive):
    shifts = competitive.tables["shifts"].set_index("constants")
    assert shifts.loc["km", "p_value"] < 1e-6
    none = fitted(grid_work(assay(laws=["michaelis_menten"]), competitive=False))
    assert none.tables["shifts"].set_index("constants").loc["km", "p_value"] > 0.01


def test_a_grid_whose_assay_names_no_laws_is_refused_and_says_so():
    tables = fitted(grid_work(assay(laws=["michaelis_menten"]))).tables
    (grid,) = tables["grids"].to_dict("records")
    assert grid["refusal"] == NO_LAWS
    assert pd.isna(grid["law"])
    assert grid["standing"] == "held"
    assert tables["estimates"]["grid_id"].isna().all()


def test_dose_responses_are_grids_of_one_substrate_level_and_give_ki():
    stated = assay(
        laws=["michaelis_menten"],
        modulator_laws=["dose_response"],
        inhibition={"mode": "competitive", "km_um": 80.0, "km_source": "invented"},
    )
    tables = fitted(grid_work(stated, levels=(0.0, 2.0, 6.0, 18.0, 160.0))).tables
    grids = tables["grids"]
    assert len(grids) == 8
    assert (grids["substrate_level_count"] == 1).all()
    estimates = tables["estimates"]
    ki = estimates[(estimates["constant"] == "ki") & (estimates["wells"] == "clear")]
    assert len(ki) >= 6
    assert ki["value"].median() == pytest.approx(KI_UM, rel=0.25)


def test_a_lot_gets_the_constants_of_its_modulator_beside_its_own(competitive):
    estimates = competitive.tables["estimates"]
    grids = competitive.tables["grids"].set_index("grid_id")
    clear = estimates[estimates["wells"] == "clear"].copy()
    series = competitive.tables["series"].set_index("series_id")
    plain = clear["grid_id"].notna() | clear["series_id"].map(series["modulator_um"]).isna()
    current = clear[plain].assign(
        modulator=lambda frame: frame["grid_id"].map(grids["modulator"]),
        series_id=lambda frame: frame["series_id"].fillna(frame["grid_id"]),
        role="sample",
        plate_read_id="read",
        series_standing="clear",
        measured_at=pd.Timestamp("2026-01-01", tz="UTC"),
    )
    values, _ = lot_values(current, "a pass")
    of_modulator = values[values["modulator"] == "inhibitor X"]
    assert of_modulator["constant"].tolist() == ["k_ic"]
    assert set(values.loc[values["modulator"].isna(), "constant"]) == {"kcat", "kcat_per_km", "km"}


def test_ids_of_grids_differ_and_do_not_depend_on_the_batch():
    work = grid_work(assay(laws=["michaelis_menten"]))
    other = replace(work, plate_read_id="another read")
    both = rate_batch([work, other])
    grids, members = find_grids(both.wells, both.plates)
    assert grids["grid_id"].is_unique
    alone, _ = find_grids(rate_batch([other]).wells, [other])
    assert alone["grid_id"].tolist() == [grids["grid_id"][1]]
    assert members.groupby("grid").size().tolist() == [96, 96]


def test_rows_of_every_table_fit_their_definition(competitive):
    for table in TABLES:
        if table.name in competitive.tables and table.name != "analyses":
            table.to_arrow(competitive.tables[table.name])
