"""Simulated plates: the truth comes back from clean curves, and each fault does what its name says."""

import dataclasses
import typing

import numpy as np
import pytest

from models.errors import UnknownName
from models.simulation import (
    TRIPLICATE_NOISE,
    TRIPLICATE_TRUTH,
    Design,
    LotTruth,
    Noise,
    level_layout,
    map_frame,
    simulate_plate,
    triplicate_design,
)
from models.simulation import faults as f

LOTS = {"lot": TRIPLICATE_TRUTH}
EVERY_FAULT = [
    f.DriftingBlank(1e-5),
    f.BaselineWander(0.01, 700.0),
    f.Depletion(20.0, ("B2",)),
    f.ActivityLoss(2e-3, ("B2",)),
    f.Lag(60.0, ("B2",)),
    f.Burst(3.0, 40.0, ("B2",)),
    f.Unsaturated(1.2, "lot"),
    f.Overflow(4.0, ("B2",)),
    f.Bubble(200.0, 0.05, ("B2",)),
    f.MissingReads((5, 6), ("B2",)),
    f.PipettingError(0.5, 1.2, ("B2",)),
    f.EdgeEffect(1.1),
    f.TemperatureExcursion(100.0, 300.0, 3.0),
]


def simulate(*faults, noise=TRIPLICATE_NOISE, design=None, truth=LOTS, seed=5):
    chosen = dataclasses.replace(triplicate_design(), overflow_above=3.0) if design is None else design
    return simulate_plate(chosen, truth, noise, faults, np.random.default_rng(seed))


def row(plate, well):
    return list(plate.wells["well"]).index(well)


def slope(plate, well, last=3):
    return (plate.signal[row(plate, well), last] - plate.signal[row(plate, well), 0]) / plate.time_s[last]


def test_every_kind_of_fault_is_tried_here():
    assert {type(fault) for fault in EVERY_FAULT} == set(typing.get_args(f.Fault))


def test_the_design_has_triplicates_and_blanks_at_each_level():
    wells = triplicate_design().wells
    counts = wells.groupby(["substrate_um", "role"]).size().unstack()
    assert len(counts) == 8
    assert (counts == 3).all().all()
    levels = counts.index.to_numpy()
    np.testing.assert_allclose([levels[0] / 80, levels[-1] / 80], [0.125, 12.0])
    np.testing.assert_allclose(levels[1:] / levels[:-1], levels[1] / levels[0])


def test_wells_that_do_not_fit_are_refused():
    with pytest.raises(ValueError, match="do not fit on a plate of 96 wells"):
        level_layout(96, range(1, 9), [{"role": "blank"}] * 13)


def test_bands_use_the_rows_below_on_a_large_plate():
    wells = level_layout(384, range(1, 9), [{"role": "blank"}] * 30)
    assert len(wells) == 240
    assert wells["well"].is_unique
    assert {"A24", "I1", "P6"} <= set(wells["well"])
    assert wells.set_index("well").loc["P6", "substrate_um"] == 8


def test_clean_curves_start_with_the_true_rate():
    design = dataclasses.replace(triplicate_design(), time_s=np.array([0.0, 0.01]))
    plate = simulate(design=design, noise=Noise(enzyme_cv=0.05, substrate_cv=0.05))
    slopes = (plate.signal[:, 1] - plate.signal[:, 0]) / 0.01 / design.signal_per_um
    np.testing.assert_allclose(slopes, plate.truth["v0_um_per_s"], rtol=1e-4, atol=1e-12)
    sample = plate.truth["lot"].notna()
    np.testing.assert_allclose(plate.truth.loc[sample, "vmax_um_per_s"], 0.05)


def test_hill_curves_start_with_the_true_rate():
    truth = {"lot": LotTruth(k_um=80, kcat_per_s=50, law="hill", hill_n=2.0)}
    design = dataclasses.replace(triplicate_design(), time_s=np.array([0.0, 0.01]))
    plate = simulate(design=design, truth=truth, noise=Noise())
    s = plate.truth["substrate_um"]
    expected = np.where(plate.truth["lot"].notna(), 0.05 * s**2 / (80.0**2 + s**2), 0.0)
    slopes = (plate.signal[:, 1] - plate.signal[:, 0]) / 0.01 / design.signal_per_um
    np.testing.assert_allclose(slopes, expected, rtol=1e-4, atol=1e-12)
    np.testing.assert_allclose(plate.truth["v0_um_per_s"], expected, rtol=1e-12)


def test_scatter_has_the_sizes_asked_for():
    design = triplicate_design(replicates=15, blanks=9, well_count=384)
    plate = simulate(design=design, noise=Noise(0.0015, 0.02, 0.03, 0.004))
    sample = plate.truth["lot"].notna()
    ratio = plate.truth["substrate_um"] / plate.wells["substrate_um"]
    # 192 or 120 values: a standard deviation is known to 1/sqrt(2 n), 5 and 6.5 %; limits at 3.5 times that.
    assert np.std(ratio) == pytest.approx(0.03, rel=0.18)
    assert np.std(plate.truth.loc[sample, "enzyme_nm"]) == pytest.approx(0.02, rel=0.23)
    blanks = plate.signal[~sample.to_numpy()]
    assert np.std(blanks - blanks.mean(axis=1, keepdims=True)) == pytest.approx(0.0015, rel=0.05)
    assert np.std(blanks.mean(axis=1)) == pytest.approx(0.004, rel=0.3)


def test_the_same_seed_gives_the_same_plate_and_another_seed_another():
    assert np.array_equal(simulate(seed=1).signal, simulate(seed=1).signal)
    assert not np.array_equal(simulate(seed=1).signal, simulate(seed=2).signal)


@pytest.mark.parametrize("fault", EVERY_FAULT, ids=lambda fault: fault.name)
def test_a_fault_changes_the_wells_it_names_and_no_others(fault):
    clean, faulty = simulate(), simulate(fault)
    named = faulty.truth["faults"] == fault.name
    same = (clean.signal == faulty.signal).all(axis=1)
    assert named.any()
    if isinstance(fault, f.TemperatureExcursion | f.EdgeEffect):
        # Wells without enzyme are warmed too, but nothing in them reacts.
        named &= faulty.truth["lot"].notna()
    np.testing.assert_array_equal(~same, named.to_numpy())


def test_a_drifting_blank_turns_over_its_share_of_the_substrate():
    plate = simulate(f.DriftingBlank(1e-4), noise=Noise())
    blank = plate.wells["role"] == "blank"
    turned_over = (plate.signal[:, -1] - plate.signal[:, 0]) / triplicate_design().signal_per_um
    np.testing.assert_allclose(turned_over[blank], plate.wells["substrate_um"][blank] * 1e-4 * 600, rtol=1e-9)


def test_depletion_consumes_the_lowest_level_within_five_reads():
    clean, faulty = simulate(noise=Noise()), simulate(f.Depletion(40.0, ("A1",)), noise=Noise())
    consumable = triplicate_design().signal_per_um * 10.0
    assert (clean.signal[0, 4] - clean.signal[0, 0]) / consumable < 0.1
    assert (faulty.signal[0, 4] - faulty.signal[0, 0]) / consumable > 0.5
    assert faulty.wells["enzyme_nm"][0] == clean.wells["enzyme_nm"][0]


def test_lag_burst_and_loss_bend_the_curve_each_its_own_way():
    well = row(simulate(), "H1")

    def halves(*faults):
        signal = simulate(*faults, noise=Noise()).signal[well]
        return (signal[30] - signal[0]) / (signal[60] - signal[30])

    assert halves() == pytest.approx(1.0, abs=0.01)
    assert halves(f.Lag(90.0, ("H1",))) < 0.8
    assert halves(f.Burst(4.0, 60.0, ("H1",))) > 1.3
    assert halves(f.ActivityLoss(1e-3, ("H1",))) > 1.2


def test_a_burst_starts_at_its_ratio():
    clean, faulty = simulate(noise=Noise()), simulate(f.Burst(4.0, 1e5, ("H1",)), noise=Noise())
    assert slope(faulty, "H1") / slope(clean, "H1") == pytest.approx(4.0, rel=0.01)


def test_an_unsaturated_lot_has_low_levels_on_its_map_and_leaves_other_lots_alone():
    design = triplicate_design(lots=("ref", "low"))
    truth = {"ref": TRIPLICATE_TRUTH, "low": LotTruth(k_um=200.0, kcat_per_s=50.0)}
    plate = simulate(f.Unsaturated(0.8, "low"), design=design, truth=truth)
    highest = plate.wells.groupby("lot")["substrate_um"].max()
    assert highest["low"] == pytest.approx(160.0)
    assert highest["ref"] == pytest.approx(960.0)


def test_overflow_is_written_as_infinite_and_missing_as_nan():
    plate = simulate(f.Overflow(4.0, ("B2",)), f.MissingReads((1, 61), ("C3",)))
    assert np.isposinf(plate.signal[row(plate, "B2")]).all()
    missing = np.flatnonzero(np.isnan(plate.signal[row(plate, "C3")]))
    assert missing.tolist() == [0, 60]
    assert np.isfinite(np.delete(plate.signal, [row(plate, "B2"), row(plate, "C3")], axis=0)).all()


def test_a_temperature_excursion_is_reported_and_speeds_up_what_reacts_meanwhile():
    clean = simulate(noise=Noise())
    warm = simulate(f.TemperatureExcursion(200.0, 400.0, 10.0), noise=Noise())
    assert warm.temperature_c[[10, 30, 50]].tolist() == [25.0, 35.0, 25.0]
    well = row(clean, "H1")
    gained = [np.diff(p.signal[well])[25] / np.diff(p.signal[well])[10] for p in (clean, warm)]
    assert gained[1] / gained[0] == pytest.approx(2.0, rel=0.01)


def test_the_edge_is_the_outermost_ring():
    plate = simulate(f.EdgeEffect(1.2), noise=Noise())
    ratio = plate.truth["enzyme_nm"] / plate.wells["enzyme_nm"]
    edge = [w[0] in "AH" or w[1:] in ("1", "12") for w in plate.wells["well"]]
    sample = plate.truth["lot"].notna().to_numpy()
    np.testing.assert_allclose(ratio[sample], np.where(edge, 1.2, 1.0)[sample])


def test_standards_blanks_and_enzyme_blanks_read_what_they_hold():
    wells = map_frame(
        [
            {"well": "A1", "role": "standard", "product_um": 50.0},
            {"well": "A2", "role": "enzyme_blank", "lot": "lot", "substrate_um": 0.0, "enzyme_nm": 1.0},
            {"well": "A3", "role": "empty"},
        ]
    )
    design = Design(96, wells, np.arange(5.0), signal_per_um=-0.002, baseline_signal=1.0)
    plate = simulate(design=design, noise=Noise())
    np.testing.assert_allclose(plate.signal, np.array([[0.9], [1.0], [1.0]]) * np.ones(5))


def test_enzyme_by_mass_needs_a_molar_mass():
    wells = map_frame(
        [{"well": "A1", "role": "sample", "lot": "lot", "substrate_um": 80.0, "enzyme_ng_per_ml": 35.0}]
    )
    design = Design(96, wells, np.arange(5.0), signal_per_um=0.006)
    with pytest.raises(ValueError, match="molar mass"):
        simulate(design=design, noise=Noise())
    plate = simulate(
        design=design, noise=Noise(), truth={"lot": LotTruth(80.0, 50.0, molar_mass_g_per_mol=35_000)}
    )
    # 35 ng/mL of 35 kg/mol is 1 nmol/L.
    assert plate.truth["enzyme_nm"][0] == pytest.approx(1.0)


def test_unknown_lots_and_wells_are_errors():
    with pytest.raises(UnknownName, match="lot 'lot' has no true constants"):
        simulate(truth={})
    with pytest.raises(UnknownName, match="Z9"):
        simulate(f.Bubble(10.0, 0.1, ("Z9",)))
    with pytest.raises(UnknownName, match="'other'"):
        simulate(f.Unsaturated(1.0, "other"))


def test_turnover_stops_where_a_reagent_runs_out():
    design = dataclasses.replace(triplicate_design(), reagent_um=12.0)
    plate = simulate(noise=Noise(), design=design)
    turned_over = (plate.signal - plate.signal[:, :1]) / design.signal_per_um
    free = (simulate(noise=Noise()).signal - plate.signal[:, :1]) / design.signal_per_um
    assert free.max() > 25.0
    np.testing.assert_allclose(turned_over, np.minimum(free, 12.0), atol=1e-9)


def test_the_reaction_may_have_begun_before_the_first_read():
    clean, late = (
        simulate(noise=Noise(), design=dataclasses.replace(triplicate_design(), dead_time_s=d))
        for d in (0.0, 20.0)
    )
    np.testing.assert_allclose(late.signal[:, 0], clean.signal[:, 2])
