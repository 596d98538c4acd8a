"""Whole curves beside initial rates: the same constants on a clean plate, the only ones on a depleted one."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest

from flows.stages.fit import fit_batch
from flows.stages.gate import gate_batch
from flows.stages.rate import rate_batch
from flows.stages.work import FittedBatch, PlateWork
from models.kinetics.progress.fitting import LAW
from models.records.assay import Assay
from models.simulation import TRIPLICATE_NOISE, TRIPLICATE_TRUTH, simulate_plate, triplicate_design
from tests.flows.stages.test_rate_and_fit import assay, plate_work

MM = ["michaelis_menten"]


def work_with(stated: Assay, kcat_per_s: float = 50.0, loss_per_s: float = 0.0) -> PlateWork:
    work = plate_work(stated)
    truth = replace(TRIPLICATE_TRUTH, kcat_per_s=kcat_per_s, loss_per_s=loss_per_s)
    plate = simulate_plate(
        triplicate_design(), {"lot": truth}, TRIPLICATE_NOISE, (), np.random.default_rng(11)
    )
    return replace(work, readings=work.readings.assign(signal=plate.signal.ravel()))


def fitted(work: PlateWork) -> FittedBatch:
    return fit_batch(gate_batch(rate_batch([work])))


@pytest.fixture(scope="module")
def clean() -> FittedBatch:
    return fitted(work_with(assay(laws=MM)))


def test_a_clean_series_has_both_estimates_and_they_agree(clean):
    (row,) = clean.tables["comparisons"].to_dict("records")
    assert row["km_ratio"] == pytest.approx(1.0, abs=0.05)
    assert row["km_ratio_low"] < row["km_ratio"] < row["km_ratio_high"]
    assert row["p_value"] > 0.01
    fits = clean.tables["fits"].set_index("wells")
    assert fits.loc["curves", "law"] == LAW
    assert not fits.loc["curves", "chosen"]
    of_curves = clean.tables["estimates"].query("wells == 'curves'").set_index("constant")
    assert of_curves.loc["kcat", "value"] == pytest.approx(50.0, rel=0.03)
    assert of_curves.loc["kcat_per_km", "unit"] == "L/mol/s"
    pairs = clean.tables["correlations"].merge(clean.tables["fits"], on="fit_id").query("wells == 'curves'")
    assert pairs[["constant", "other_constant"]].to_numpy().tolist() == [["vmax", "km"]]


def test_where_every_well_is_depleted_whole_curves_give_the_only_constants():
    tables = fitted(work_with(assay(laws=MM), kcat_per_s=2000.0)).tables
    wells = tables["wells"]
    held = wells[wells["role"].eq("sample")]["standing"].eq("held")
    assert held.sum() >= 20
    series = tables["series"].to_dict("records")[0]
    assert series["refusal"] is not None
    assert series["standing"] == "held"
    chosen = tables["estimates"].query("chosen and wells == 'curves'").set_index("constant")
    assert set(chosen["law"]) == {LAW}
    assert chosen.loc["km", "low"] < 80.0 < chosen.loc["km", "high"]
    assert chosen.loc["kcat", "value"] == pytest.approx(2000.0, rel=0.05)
    assert tables["comparisons"].empty


def test_enzyme_that_dies_during_the_read_shows_in_the_comparison_or_in_distrust():
    tables = fitted(work_with(assay(laws=MM), loss_per_s=1.5e-3)).tables
    fits = tables["fits"].query("wells == 'curves'")
    compared = tables["comparisons"]
    assert compared["p_value"].lt(0.01).any() or not fits["trusted"].any() or fits.empty


def test_whole_curves_can_be_turned_off_and_need_a_law_that_can_be_integrated():
    for stated in (assay(laws=MM, whole_curves={"fit": False}), assay(laws=["hill"])):
        tables = fitted(work_with(stated)).tables
        assert not tables["fits"]["wells"].eq("curves").any()
        assert tables["comparisons"].empty


def test_enzyme_loss_is_fitted_where_the_assay_says_so():
    stated = assay(laws=MM, whole_curves={"enzyme_loss": True})
    tables = fitted(work_with(stated, loss_per_s=1.5e-3)).tables
    of_curves = tables["estimates"].query("wells == 'curves'").set_index("constant")
    assert of_curves.loc["loss", "low"] < 1.5e-3 < of_curves.loc["loss", "high"]
    assert of_curves.loc["loss", "unit"] == "1/s"
