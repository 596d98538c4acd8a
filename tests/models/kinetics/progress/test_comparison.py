"""Whole curves against initial rates: what the comparison makes of agreement, of disagreement and of gaps."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pandas as pd
import pytest
from scipy.stats import f as f_distribution

from models.kinetics.progress.comparison import COMPARISON_COLUMNS, compare_with_rates
from models.kinetics.progress.fitting import ProgressOptions, ProgressResult, fit_progress
from models.tables import COMPARISONS
from tests.benchmarks.progress import COMPARED, Truth, compare, plates

WELLS = 12


def made_up(series: int, shift: float, seed: int = 4) -> tuple[ProgressResult, pd.DataFrame, pd.DataFrame]:
    """Estimates whose logarithms differ by `shift`, with influences drawn at random."""
    generator = np.random.default_rng(seed)
    number = np.repeat(np.arange(series), WELLS)

    def frame() -> pd.DataFrame:
        values = 0.01 * generator.standard_normal((number.size, 2))
        leverage = generator.uniform(0.02, 0.4, number.size)
        columns = {"series": number, "well": np.arange(number.size), "vmax": values[:, 0], "km": values[:, 1]}
        return pd.DataFrame({**columns, "leverage": leverage})

    def constants(km: float) -> pd.DataFrame:
        rows = [(n, name, value) for n in range(series) for name, value in (("vmax", 2.0), ("km", km))]
        return pd.DataFrame(rows, columns=["series", "constant", "value"])

    empty = pd.DataFrame()
    curves = ProgressResult(empty, constants(80.0 * np.exp(shift)), empty, {}, frame())
    return curves, frame(), constants(80.0)


def test_ratios_intervals_and_chance_are_those_of_the_formula() -> None:
    """Written out again for one series: V = sum D D', Hotelling's F with 2 and n - 2."""
    curves, influence, constants = made_up(3, 0.03)
    table = compare_with_rates(curves, influence, constants)
    assert tuple(table.columns) == COMPARISON_COLUMNS
    assert set(COMPARISON_COLUMNS[1:]) <= set(COMPARISONS.column_names)
    mine = slice(WELLS, 2 * WELLS)

    def scaled(frame: pd.DataFrame) -> np.ndarray:
        part = frame.iloc[mine]
        return part[["km", "vmax"]].to_numpy() * np.sqrt(1.0 - part[["leverage"]].to_numpy())

    moved = scaled(curves.influence) - scaled(influence)
    d, covariance = np.array([0.03, 0.0]), moved.T @ moved
    f_value = d @ np.linalg.solve(covariance, d) * (WELLS - 2) / (2 * (WELLS - 1))
    row = table.iloc[1]
    assert row["p_value"] == pytest.approx(f_distribution.sf(f_value, 2, WELLS - 2), rel=1e-9)
    assert row["km_ratio"] == pytest.approx(np.exp(0.03))
    # t with 10 degrees of freedom at 0.975: 2.228138852 (any table of Student's t).
    reach = 2.228138852 * np.sqrt(covariance[0, 0])
    assert row["km_ratio_low"] == pytest.approx(np.exp(0.03 - reach), rel=1e-8)
    assert row["km_ratio_high"] == pytest.approx(np.exp(0.03 + reach), rel=1e-8)


def test_estimates_that_move_together_are_told_apart_where_independent_ones_are_not() -> None:
    """The same wells move both by the same: what they share says nothing about the difference."""
    curves, influence, constants = made_up(1, 0.03)
    common = curves.influence.copy()
    common[["vmax", "km"]] += 0.05 * influence[["vmax", "km"]].to_numpy()
    together = compare_with_rates(curves, common, constants)["p_value"].iloc[0]
    apart = compare_with_rates(curves, influence, constants)["p_value"].iloc[0]
    assert together < 1e-6 < apart


def test_only_series_with_both_are_compared_and_the_order_of_wells_changes_no_bit() -> None:
    curves, influence, constants = made_up(4, 0.01)
    whole = compare_with_rates(curves, influence, constants)
    shuffled = replace(curves, influence=curves.influence.sample(frac=1.0, random_state=2))
    part = compare_with_rates(
        shuffled, influence.sample(frac=1.0, random_state=3), constants[constants["series"].isin([1, 3, 7])]
    )
    pd.testing.assert_frame_equal(
        part, whole[whole["series"].isin([1, 3])].reset_index(drop=True), check_exact=True
    )
    assert compare_with_rates(curves, influence, constants[:0]).empty


def test_a_well_that_one_estimate_leaves_out_still_counts_for_the_other() -> None:
    """A depleted well has no initial rate but a whole curve."""
    curves, influence, constants = made_up(1, 0.01)
    without = compare_with_rates(curves, influence.iloc[3:], constants)
    zero = influence.copy()
    zero.loc[:2, ["vmax", "km"]] = 0.0
    pd.testing.assert_frame_equal(without, compare_with_rates(curves, zero, constants))


def test_what_the_wells_do_not_tell_is_not_known() -> None:
    curves, influence, constants = made_up(1, 0.01)
    untold = influence.copy()
    untold.loc[0, "km"] = np.nan
    few = replace(curves, influence=curves.influence.iloc[:2])
    for table in (
        compare_with_rates(curves, untold, constants),
        compare_with_rates(few, influence.iloc[:2], constants),
    ):
        assert table["km_ratio"].iloc[0] == pytest.approx(np.exp(0.01))
        assert table[["km_ratio_low", "km_ratio_high", "p_value"]].isna().all(axis=None)


def test_enzyme_that_is_lost_unseen_is_found_and_clean_plates_are_not() -> None:
    """12 plates each; `python -m tests.benchmarks.progress` has hundreds."""
    clean = compare("clean, to 60 % converted", 12)
    assert clean.plates == 12
    assert clean.at_1 == 0.0
    assert clean.distrusted == 0.0
    lost = compare("10 % of the enzyme lost, to 60 %", 12)
    assert lost.at_5 * lost.plates + lost.distrusted * 12 >= 12


def test_the_influence_of_a_well_on_whole_curves_is_that_of_leaving_it_out() -> None:
    batch = plates(COMPARED["clean, to 60 % converted"], 1, 9)
    options = ProgressOptions(dispensing_cv=(0.02, 0.02))
    whole = fit_progress(batch, 1, options)
    before = whole.constants.set_index("constant")["value"]
    influence = whole.influence.set_index("well")
    assert influence["leverage"].between(0.0, 1.0).all()
    for well in influence.index[::7]:
        kept = replace(batch, series=np.where(np.arange(batch.well_count) == well, -1, batch.series))
        after = fit_progress(kept, 1, options).constants.set_index("constant")["value"]
        for name in ("vmax", "km"):
            moved = np.log(after[name] / before[name])
            assert influence.loc[well, name] == pytest.approx(moved, abs=0.1 * influence[name].abs().max())


def test_a_fit_that_leaves_out_what_happens_is_not_trusted() -> None:
    """The enzyme decays, the fit does not know: at any conversion no silent constants."""
    for kcat, lost in ((50.0, 0.3), (150.0, 0.1), (150.0, 0.3), (1494.0, 0.5)):
        truth = Truth(kcat, loss_per_s=-float(np.log(1.0 - lost)) / 600.0)
        blind = fit_progress(plates(truth, 4, 21), 4)
        assert not blind.fits["trusted"].any(), (kcat, lost)
    told = fit_progress(plates(truth, 4, 21), 4, ProgressOptions(enzyme_loss=True))
    assert told.fits["trusted"].all()
