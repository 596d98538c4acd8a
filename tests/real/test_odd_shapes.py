"""Published exports of odd shape, read as they are. The data stay outside the project."""

from __future__ import annotations

import csv
from pathlib import Path

import numpy as np
import pytest

from flows.stages.read import choose_profile, read_export, trial_report
from models.records.export_profile import ExportProfile

REAL = Path(__file__).resolve().parents[3] / "shared" / "real"
GROWTH = REAL / "odd-shapes" / "growth_rows_between_rows.csv"
OXIDASES = REAL / "oxidases"

pytestmark = pytest.mark.skipif(
    not GROWTH.is_file() or not OXIDASES.is_dir(),
    reason="the published measurements are not beside the project",
)

GROWTH_PROFILE = ExportProfile.model_validate(
    {
        "shape": "wide",
        "channel": "600",
        "detect": {"head": ["^Time,.*OD600:600,A1,A2"]},
        "plate": {"id_in_file_name": r"(?P<plate_id>\w+)\.csv"},
        "time": {"notation": "hh:mm:ss"},
        "columns": {"time": "Time", "temperature": 2},
    }
)
OXIDASE_PROFILE = ExportProfile.model_validate(
    {
        "shape": "wells_by_rows",
        "detect": {"file_name": ["*_data_rep?.tsv"], "head": [r"^Chamber ID\t1\t2\t"]},
        "plate": {"id_in_file_name": r"(?P<plate_id>\w+)\.tsv", "format": 384},
        "time": {"interval_s": 30},
        "columns": {"well": "Chamber ID"},
        "wells": {"pattern": r"S(?P<row>\d+)-A(?P<column>\d+)"},
    }
)
PROFILES = {"growth": GROWTH_PROFILE, "oxidase": OXIDASE_PROFILE}


def test_growth_with_empty_rows_between_rows() -> None:
    """Source: RPGroup-PBoC/mwc_growth; 96 wells, every 7 min for a day, 37 degC."""
    content = GROWTH.read_bytes()
    assert choose_profile(content, GROWTH.name, PROFILES) == "growth"
    (read,) = read_export(content, GROWTH.name, GROWTH_PROFILE)
    readings = read.readings
    with GROWTH.open(newline="", encoding="utf-8") as stream:
        lines = list(csv.reader(stream))
    filled = [line for line in lines[1:] if any(line)]
    assert (read.plate_format, readings["well"].nunique()) == (96, 96)
    assert readings["read_number"].max() == len(filled)
    assert set(readings["channel"]) == {"600"}
    one = readings[readings["well"] == "H12"]
    assert set(one["time_s"].diff().dropna()) == {420.0}
    assert one["time_s"].iloc[0] == 0
    assert one["signal"].tolist() == [float(line[-1]) for line in filled]
    assert set(readings["temperature_c"]) == {float(line[1]) for line in filled}
    assert (readings["state"] == "ok").all()
    for row in readings.sample(200, random_state=1).itertuples():
        assert float(lines[row.source_row - 1][row.source_column - 1]) == row.signal


@pytest.mark.parametrize("name", [f"{enzyme}_data_rep{n}" for enzyme in ("GlutOX", "LOX") for n in (1, 2, 3)])
def test_oxidase_plates(name: str) -> None:
    """Source: ACS Omega 2021, doi 10.1021/acsomega.0c04918; 144 wells, 40 reads, one every 0.5 min."""
    path = OXIDASES / f"{name}.tsv"
    content = path.read_bytes()
    assert choose_profile(content, path.name, PROFILES) == "oxidase"
    (read,) = read_export(content, path.name, OXIDASE_PROFILE)
    readings = read.readings
    with path.open(newline="", encoding="utf-8") as stream:
        lines = list(csv.reader(stream, delimiter="\t"))
    cells = {(int(line[0][1:3]), int(line[0][5:7])): (line[1:] + [""] * 40)[:40] for line in lines[1:]}
    assert (read.plate_id, read.plate_format, len(readings)) == (name, 384, 144 * 40)
    assert np.allclose(np.unique(readings["time_s"]), np.arange(40) * 30.0)
    empty = sum(cell == "" for row in cells.values() for cell in row)
    assert (readings["state"] == "missing").sum() == readings["signal"].isna().sum() == empty
    for (row, column), texts in cells.items():
        own = readings[readings["well"] == f"{'ABCDEFGHIJKL'[row - 1]}{column}"]
        assert own["read_number"].tolist() == list(range(1, 41))
        assert [("" if np.isnan(v) else f"{v:.0f}") for v in own["signal"]] == texts
    for each in readings.sample(100, random_state=2).itertuples():
        written = lines[each.source_row - 1][each.source_column - 1]
        assert np.isnan(each.signal) if written == "" else float(written) == each.signal


def test_a_trial_of_the_plate_with_empty_wells_says_so() -> None:
    content = (OXIDASES / "LOX_data_rep2.tsv").read_bytes()
    report = trial_report(content, "LOX_data_rep2.tsv", OXIDASE_PROFILE)
    assert report.problems == ("plate LOX_data_rep2: 12 wells have no signal at all, such as A6",)
    assert report.plates[0].missing_count == 480
