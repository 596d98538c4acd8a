"""From readings to stored rows: signal to product, series, blanks, past the detector's limit, both fits."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pandas as pd
import pytest

from checks.gates import resolve_limits
from flows.site.configuration import load_configuration
from flows.site.recipes import Recipe
from flows.site.shipped import shipped
from flows.stages.conversion import plate_conversion
from flows.stages.fit import fit_batch
from flows.stages.gate import gate_batch
from flows.stages.lots import lot_values
from flows.stages.rate import rate_batch
from flows.stages.work import PlateWork
from models.records.assay import Assay
from models.simulation import TRIPLICATE_NOISE, TRIPLICATE_TRUTH, simulate_plate, triplicate_design
from models.tables import ESTIMATES, FITS, RATES, READINGS, SERIES, WELLS

PROFILE = load_configuration(shipped("config")).profiles["wide"]


def assay(**changes: object) -> Assay:
    content: dict[str, object] = {
        "enzyme": "test dehydrogenase",
        "substrate": "S",
        "product": "P",
        "signal": {"kind": "absorbance"},
        "absorption": {
            "change_per_molar_per_cm": 6220,
            "source": "Horecker and Kornberg 1948, J. Biol. Chem. 175, 385",
            "path_length_cm": 1.0,
        },
        "laws": ["michaelis_menten", "hill"],
    }
    return Assay.model_validate(content | changes)


def plate_work(assay: Assay, *, seed: int = 5, sign: float = 1.0) -> PlateWork:
    """One simulated plate of Km 80 umol/L, Vmax 0.05 umol/L/s (kcat 50 /s at 1 nmol/L)."""
    plate = simulate_plate(
        triplicate_design(), {"lot": TRIPLICATE_TRUTH}, TRIPLICATE_NOISE, (), np.random.default_rng(seed)
    )
    wells = plate.wells["well"].tolist()
    count = len(plate.time_s)
    readings = READINGS.empty().reindex(range(len(wells) * count))
    readings["well"] = np.repeat(wells, count)
    readings["read_number"] = np.tile(np.arange(1, count + 1), len(wells))
    readings["time_s"] = np.tile(plate.time_s, len(wells))
    readings["signal"] = sign * plate.signal.ravel() + (0.0 if sign > 0 else 3.0)
    readings["state"] = "ok"
    recipe = Recipe("test", assay, "test", PROFILE, resolve_limits({}, assay.gates), "test")
    conversion = plate_conversion(assay, readings.assign(channel="signal"), plate.wells, "signal")
    return PlateWork("read", "plate", "map", recipe, readings, plate.wells, conversion)


def test_falling_signal_and_stoichiometry_give_the_same_turnover() -> None:
    """A signal that falls gives the same rates; two products a substrate give half of them."""
    rising = rate_batch([plate_work(assay())]).rates
    falling = rate_batch(
        [plate_work(assay(signal={"kind": "absorbance", "direction": "falls"}), sign=-1.0)]
    ).rates
    doubled = rate_batch([plate_work(assay(product_per_substrate=2.0))]).rates
    np.testing.assert_allclose(falling["v0_um_per_s"], rising["v0_um_per_s"], rtol=1e-9)
    same_window = doubled["window_last_read"] == rising["window_last_read"]
    assert same_window.sum() > 20
    np.testing.assert_allclose(
        doubled["raw_rate_um_per_s"][same_window] * 2, rising["raw_rate_um_per_s"][same_window], rtol=1e-9
    )


def test_series_share_everything_but_substrate_and_have_ids_of_their_own() -> None:
    work = plate_work(assay())
    wells = work.wells.copy()
    half = wells["role"].eq("sample") & wells["well"].str.contains("[A-D]")
    wells.loc[half, "enzyme_nm"] = 2.0
    rated = rate_batch(
        [replace(work, wells=wells), replace(plate_work(assay(), seed=6), plate_read_id="other")]
    )
    assert len(rated.series) == 3
    assert rated.series["series_id"].is_unique
    assert set(rated.series["enzyme_nm"]) == {1.0, 2.0}
    members = rated.wells[rated.wells["role"] == "sample"]
    assert (members.groupby("series_id")["enzyme_nm"].nunique() == 1).all()
    assert rated.wells.loc[rated.wells["role"] == "blank", "series_id"].isna().all()


def test_blanks_without_a_stated_substrate_serve_the_whole_plate() -> None:
    work = plate_work(assay())
    wells = work.wells.copy()
    wells.loc[wells["role"] == "blank", "substrate_um"] = np.nan
    rated = rate_batch([replace(work, wells=wells)])
    samples = rated.rates[rated.rates["well"].isin(wells.loc[wells["role"] == "sample", "well"])]
    assert set(samples["blank_source"]) == {"plate"}
    blanks = rated.wells[rated.wells["role"] == "blank"]
    assert blanks["substrate_um"].isna().all()
    WELLS.to_arrow(gate_batch(rated).wells)


def test_reads_past_the_linear_limit_are_kept_as_such_and_not_used() -> None:
    limited = assay(signal={"kind": "absorbance", "linear_limit": 0.2})
    rated = rate_batch([plate_work(limited)])
    beyond = rated.reads[rated.reads["signal"] > 0.2]
    assert len(beyond) > 0
    assert set(beyond["state"]) == {"past_limit"}
    counts = beyond.groupby("well").size()
    stored = rated.rates.set_index("well")["overflow_count"]
    assert (stored[counts.index] == counts).all()


def test_a_well_that_the_map_leaves_out_is_empty_and_in_no_fit() -> None:
    work = plate_work(assay())
    left_out = work.wells["well"].iloc[0]
    rated = rate_batch([replace(work, wells=work.wells[work.wells["well"] != left_out])])
    row = rated.wells.set_index("well").loc[left_out]
    assert row["role"] == "empty"
    assert pd.isna(row["series_id"])
    assert left_out not in set(rated.rates["well"])


def test_a_batch_gives_each_plate_what_it_gets_alone() -> None:
    works = [plate_work(assay(), seed=seed) for seed in (1, 2, 3)]
    works = [replace(work, plate_read_id=f"read{place}") for place, work in enumerate(works)]
    together = fit_batch(gate_batch(rate_batch(works))).tables
    for work in works:
        alone = fit_batch(gate_batch(rate_batch([work]))).tables
        for table in (RATES, FITS, ESTIMATES):
            part = together[table.name]
            part = part[part["analysis_id"] == work.analysis_id].reset_index(drop=True)
            pd.testing.assert_frame_equal(part, alone[table.name].reset_index(drop=True), check_exact=True)


def test_a_held_well_is_left_out_of_one_fit_and_in_the_other() -> None:
    work = plate_work(assay())
    gated = gate_batch(rate_batch([work]))
    sample = gated.wells.index[gated.wells["role"] == "sample"][:2]
    wells = gated.wells.copy()
    wells.loc[sample, "standing"] = "held"
    tables = fit_batch(replace(gated, wells=wells)).tables
    points = tables["fits"].groupby("wells")["point_count"].max()
    assert points["all"] == points["clear"] + 2
    assert tables["series"]["clear_well_count"].iloc[0] == 22
    for table in (WELLS, RATES, SERIES, FITS, ESTIMATES):
        table.to_arrow(tables[table.name])


def test_constants_come_out_with_their_units() -> None:
    """kcat from Vmax over enzyme: 0.05 umol/L/s over 1 nmol/L is 50 /s; kcat/Km is 50 / 80e-6 L/mol/s."""
    tables = fit_batch(gate_batch(rate_batch([plate_work(assay())]))).tables
    found = tables["estimates"].query("wells == 'clear' and law == 'michaelis_menten'").set_index("constant")
    for constant, value, unit in (
        ("km", 80.0, "umol/L"),
        ("vmax", 0.05, "umol/L/s"),
        ("kcat", 50.0, "1/s"),
        ("kcat_per_km", 50.0 / 80e-6, "L/mol/s"),
    ):
        row = found.loc[constant]
        assert row["unit"] == unit
        assert row["value"] == pytest.approx(value, abs=4 * row["standard_error"])
        assert row["low"] < row["value"] < row["high"]


def test_the_error_of_the_calibration_widens_what_is_in_proportion_to_product_and_nothing_else() -> None:
    """A coefficient known to 5 %: kcat cannot be known better, Km can; plates do not average it away."""
    absorption = {"change_per_molar_per_cm": 6220, "source": "test", "path_length_cm": 1.0}
    known = plate_work(assay(absorption=absorption))
    unsure = plate_work(assay(absorption=absorption | {"change_relative_error": 0.05}))
    found = []
    for work in (known, unsure):
        tables = fit_batch(gate_batch(rate_batch([work]))).tables
        estimates = tables["estimates"].query("wells == 'clear' and law == 'michaelis_menten'")
        found.append((tables, estimates.set_index("constant")))
    (_, sharp), (wide_tables, wide) = found
    assert wide.loc["km", "standard_error"] == sharp.loc["km", "standard_error"]
    for constant in ("vmax", "kcat", "kcat_per_km"):
        own = sharp.loc[constant, "standard_error"] / sharp.loc[constant, "value"]
        assert wide.loc[constant, "standard_error"] / wide.loc[constant, "value"] == pytest.approx(
            np.hypot(own, 0.05), rel=1e-9
        )
        assert wide.loc[constant, "assay_relative_error"] == 0.05
    assert wide.loc["km", "assay_relative_error"] == 0

    current = (
        wide_tables["estimates"]
        .query("wells == 'clear'")
        .assign(role="sample", modulator=None, series_standing="clear")
        .assign(measured_at=pd.Timestamp("2026-03-02", tz="UTC"))
    )
    plates = [
        current.assign(plate_read_id=f"p{n}", estimate_id=current["estimate_id"] + str(n)) for n in range(30)
    ]
    values, sources = lot_values(pd.concat(plates, ignore_index=True).assign(assay="test"), "pass")
    kcat = values.set_index("constant").loc["kcat"]
    assert 0.05 <= kcat["standard_error"] / kcat["value"] < 0.055
    assert values.set_index("constant").loc["km", "standard_error"] < 0.5 * wide.loc["km", "standard_error"]
    assert len(sources) == 30 * len(values)


def test_activity_of_the_sample_in_u_and_in_katal() -> None:
    """Vmax 0.05 umol/L/s in 200 uL from 10 uL of a sample diluted 100 times: 0.05 * 20 * 100 = 100 nkat/mL,
    6 U/mL (1 U = 1 umol/min = 16.67 nkat; NC-IUBMB and the 21st CGPM, 1999)."""
    sample = {"assay_volume_ul": 200, "sample_volume_ul": 10, "dilution": 100, "protein_mg_per_ml": 0.5}
    tables = fit_batch(gate_batch(rate_batch([plate_work(assay(sample=sample))]))).tables
    found = tables["estimates"].query("wells == 'clear' and law == 'michaelis_menten'").set_index("constant")
    for constant, value, unit in (
        ("volume_activity", 6.0, "umol/min/mL"),
        ("volume_activity_katal", 100.0, "nmol/s/mL"),
        ("sample_activity", 12.0, "umol/min/mg"),
        ("sample_activity_katal", 200.0, "nmol/s/mg"),
    ):
        row = found.loc[constant]
        assert row["unit"] == unit
        assert row["value"] == pytest.approx(value, abs=4 * row["standard_error"])
        assert row["value"] / value == pytest.approx(found.loc["vmax", "value"] / 0.05, rel=1e-9)
