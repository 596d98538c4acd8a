"""The whole pass on real plates of two oxidases: the article's Km, and wells that run dry are not fitted.

Measurements and constants: ACS Omega 2021, doi:10.1021/acsomega.0c04918.
"""

from datetime import UTC, datetime

import numpy as np
import pandas as pd
import pytest

from flows.overnight.nightly import run_pass
from flows.warehouse.reader import open_published
from tests.real.oxidase_site import (
    ABSENT,
    BOTH,
    DYE_UM,
    GLUTAMATE_OXIDASE,
    OXIDASES,
    READ_INTERVAL_S,
    SIGNAL_PER_UM,
    write_oxidase_site,
)

pytestmark = pytest.mark.skipif(not OXIDASES.is_dir(), reason=ABSENT)

DEPLETION_LIMIT = 0.10
SHORTEST_WINDOW = 5
HIGHEST, SECOND_HIGHEST = 6000.0, 1200.0


@pytest.fixture(scope="module")
def night(tmp_path_factory):
    site = write_oxidase_site(tmp_path_factory.mktemp("oxidases") / "site")
    report = run_pass(site, lambda: datetime(2026, 12, 1, 4, tzinfo=UTC))
    return site, report


@pytest.fixture(scope="module")
def ask(night):
    with open_published(night[0]) as warehouse:
        yield lambda sql: warehouse.sql(sql).df()


@pytest.fixture(scope="module")
def wells(ask):
    return ask(
        """select plate_id, well, role, lot, substrate_um, enzyme_ng_per_ml, wells.standing
        from wells join analyses using (analysis_id) join plate_reads using (plate_read_id)"""
    )


def raw(plate_id):
    """The export as published, a row a well in the site's names; NaN where a read is missing."""
    frame = pd.read_csv(OXIDASES / f"{plate_id}.tsv", sep="\t", index_col=0)
    frame.index = [f"{chr(64 + int(name[1:3]))}{int(name[5:7])}" for name in frame.index]
    return frame.astype(float)


@pytest.fixture(scope="module")
def consumed(wells):
    """Share of what can be consumed that is consumed by the fifth read, from the raw signals alone."""
    shares = []
    for plate_id, rows in wells.groupby("plate_id"):
        signal = raw(plate_id).iloc[:, :SHORTEST_WINDOW]
        blank = signal.loc[[f"{row}{column}" for row in "ABCDEFGHIJKL" for column in (11, 12)]].mean()
        samples = rows[rows["role"] == "sample"]
        net_um = (signal.loc[samples["well"]].to_numpy() - blank.to_numpy()) / SIGNAL_PER_UM
        share = net_um[:, -1] / np.minimum(samples["substrate_um"], DYE_UM)
        shares.append(samples.assign(share=share.to_numpy()))
    return pd.concat(shares)


def test_every_file_is_read(night, wells):
    report = night[1]
    assert (report.export_count, report.map_count) == (6, 2)
    assert not report.quarantined
    assert not report.waiting
    assert wells.groupby("plate_id").size().to_dict() == {
        p: 144 for oxidase in BOTH for p in oxidase.plate_ids
    }


def test_readings_are_the_published_signals_every_half_minute(ask):
    readings = ask(
        """select plate_id, well, read_number, time_s, signal
        from reading join plate_reads using (plate_read_id)"""
    )
    for plate_id, rows in readings.groupby("plate_id"):
        published = raw(plate_id)
        signal = rows.pivot(index="well", columns="read_number", values="signal").loc[published.index]
        np.testing.assert_array_equal(signal.to_numpy(float), published.to_numpy())
    np.testing.assert_array_equal(readings["time_s"], (readings["read_number"] - 1) * READ_INTERVAL_S)


@pytest.mark.parametrize("oxidase", BOTH, ids=lambda oxidase: oxidase.assay)
def test_km_is_the_articles(oxidase, ask):
    # Glutamate oxidase 0.20 +- 0.03, lactate oxidase 1.15 +- 0.15 mmol/L: the article's mean +- SEM.
    (row,) = ask(f"select * from lot_values where assay = '{oxidase.assay}' and constant = 'km'").to_dict(
        "records"
    )
    assert row["unit"] == "umol/L"
    assert row["plate_read_count"] == 3
    assert abs(row["value"] - oxidase.km_um) <= oxidase.km_sem_um
    assert row["low"] < oxidase.km_um < row["high"]


def test_wells_that_run_dry_are_held(consumed):
    dry = consumed[(consumed["enzyme_ng_per_ml"] >= SECOND_HIGHEST) & (consumed["share"] > DEPLETION_LIMIT)]
    # Counted in the published signals: every well at 6000 ng/mL, and 80 of 132 at 1200 ng/mL.
    assert (dry["enzyme_ng_per_ml"] == HIGHEST).sum() == 132
    assert (dry["enzyme_ng_per_ml"] == SECOND_HIGHEST).sum() == 80
    assert set(dry["standing"]) <= {"held", "void"}


def test_no_well_of_the_highest_enzyme_level_is_fitted(wells, ask):
    highest = wells[(wells["enzyme_ng_per_ml"] == HIGHEST) & (wells["role"] == "sample")]
    assert len(highest) == 6 * 22
    assert not (highest["standing"] == "clear").any()
    fitted = ask(
        f"""select count(*) as n from estimates join series using (series_id)
        where enzyme_ng_per_ml = {HIGHEST} and wells = 'clear'"""
    )
    assert fitted["n"].tolist() == [0]


def test_the_fit_with_the_held_wells_shows_why_they_are_held(ask):
    # What a fit of dry wells finds, 0.01 to 0.1 mmol/L, is far below both enzymes' Km.
    collapsed = ask(
        f"""select value from estimates join series using (series_id)
        where enzyme_ng_per_ml = {HIGHEST} and constant = 'km' and wells = 'all'
        and estimates.law = 'michaelis_menten'"""
    )
    assert len(collapsed) == 6
    assert (collapsed["value"] < 0.5 * GLUTAMATE_OXIDASE.km_um).all()


def test_a_well_without_reads_is_void(wells):
    empty = {
        (oxidase_plate, well)
        for oxidase in BOTH
        for oxidase_plate in oxidase.plate_ids
        for well, signal in raw(oxidase_plate).iterrows()
        if signal.isna().all()
    }
    void = {(row.plate_id, row.well) for row in wells[wells["standing"] == "void"].itertuples()}
    assert empty
    # Columns 11 and 12 are blanks, which no gate on wells judges.
    assert {key for key in empty if int(key[1][1:]) <= 10} <= void
