"""Statistics of plate reads: found at their size on simulated plates, and reasons where there are none."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pandas as pd
import pytest

from flows.proving.characteristics import simulate, through_line
from models.plates import well_position
from models.simulation.faults import EdgeEffect, Fault, PipettingError
from tests.benchmarks.gates import the_bench

BENCH = the_bench()


@pytest.fixture(scope="module")
def statistics() -> dict[str, pd.DataFrame]:
    """Statistics by name, of a clean plate and one with a slow edge."""
    faults: dict[str, list[Fault]] = {"clean": [], "edge": [EdgeEffect(0.90)]}
    fitted = through_line(BENCH, [simulate(BENCH, (7, 1), each) for each in faults.values()])
    table = fitted.tables["plate_statistics"].set_index("analysis_id")
    return {
        name: table.loc[work.analysis_id].set_index("statistic")
        for name, work in zip(faults, fitted.plates, strict=True)
    }


def test_every_plate_read_has_every_statistic(statistics: dict[str, pd.DataFrame]) -> None:
    for table in statistics.values():
        assert set(table.index) == {
            "z_prime", "signal_to_blank", "replicate_cv", "position_effect", "read_order_drift",
        }  # fmt: skip
        known = table["statistic_value"].notna()
        assert known.drop("signal_to_blank").all()
        # The blanks turn nothing over: by chance their mean is below zero, and there is no ratio.
        assert (known == table["reason"].isna()).all()


def test_a_clean_plate_shows_its_noise_and_nothing_else(statistics: dict[str, pd.DataFrame]) -> None:
    clean = statistics["clean"]
    assert 0.5 < clean.loc["z_prime", "statistic_value"] < 1.0
    # 2 % for each of two dispensing steps, and the noise of the reads where rates are low.
    assert 0.02 < clean.loc["replicate_cv", "statistic_value"] < 0.10
    assert clean.loc["position_effect", "p_value"] > 0.01
    assert clean.loc["read_order_drift", "p_value"] > 0.01
    assert abs(clean.loc["read_order_drift", "statistic_value"]) < 0.02


def test_what_is_wrong_with_a_plate_is_found_at_its_size(statistics: dict[str, pd.DataFrame]) -> None:
    edge = statistics["edge"]
    assert edge.loc["position_effect", "where_on_plate"] == "edge"
    assert edge.loc["position_effect", "statistic_value"] == pytest.approx(-0.10, abs=0.04)
    assert edge.loc["position_effect", "p_value"] <= 0.01


def test_a_drift_along_the_order_of_reading_is_found_at_its_size() -> None:
    # Levels stand in rows on this bench: laid out at random, a drift is no longer taken for substrate.
    order = np.random.default_rng(3).permutation(len(BENCH.design.wells))
    wells = BENCH.design.wells.assign(well=BENCH.design.wells["well"].to_numpy()[order])
    bench = replace(BENCH, design=replace(BENCH.design, wells=wells))
    in_rows = sorted(wells["well"], key=well_position)
    faults = [
        PipettingError(enzyme_factor=1.0 + 0.2 * n / 95, wells=(well,)) for n, well in enumerate(in_rows)
    ]
    table = through_line(bench, [simulate(bench, (7, 1), faults)]).tables["plate_statistics"]
    drift = table.set_index("statistic").loc["read_order_drift"]
    assert drift["p_value"] < 1e-4
    # From 1.0 to 1.2, relative to their middle.
    assert drift["statistic_value"] == pytest.approx(0.2 / 1.1, abs=0.05)


def test_a_plate_that_cannot_be_judged_says_why() -> None:
    wells = BENCH.design.wells
    few = wells[(wells["role"] == "sample")].drop_duplicates("substrate_um").head(3)
    bench = replace(BENCH, design=replace(BENCH.design, wells=few))
    table = through_line(bench, [simulate(bench, (7, 2))]).tables["plate_statistics"].set_index("statistic")
    assert table["statistic_value"].isna().all()
    assert table.loc["z_prime", "reason"] == "the plate has no reference"
    assert table.loc["signal_to_blank", "reason"] == "the plate has no reference"
    assert table.loc["replicate_cv", "reason"] == "no condition has replicates"
    assert table.loc["read_order_drift", "reason"] == "fewer than 4 wells were fitted"
    assert table["reason"].notna().all()
