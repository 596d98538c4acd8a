"""Whether staged readings can be worked with at all: types, state words, well names, keys, signals, times.

The rules run row by row in numpy, and Great Expectations holds their counts: one row for each well and
channel of a plate read. It takes 4.9 s for 400,000 rows with ids of flagged ones, and a batch of 40
plates has 920,000; over the 15,000 wells of the batch it takes a fraction of a second and says as much.
What breaks a rule here cannot be staged: lateness, gaps and lost reads are for the gates.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass

import numpy as np
import pandas as pd

from checks.validation import Flagged, validate
from models.errors import HalfsatError, UnknownName
from models.identity import Json
from models.plates import plate_format, well_name, well_position
from models.tables import READINGS

STATES = ("ok", "overflow", "missing")
KEYS = ("plate_read_id", "channel", "well")
WELLS_NAMED = 5

RULES: dict[str, str] = {
    "unnamed_count": "the well's name is not the plain name of a well of the plate, such as B7",
    "wrong_type_count": "a read number, time, signal or temperature is not a number",
    "unknown_state_count": f"a state is none of {', '.join(STATES)}",
    "doubled_count": "a read number stands twice",
    "unnumbered_count": "read numbers do not run from 1 without a gap",
    "lost_signal_count": "a read is ok but has no finite signal",
    "stray_signal_count": "a read that overflowed or is missing has a signal",
    "wrong_time_count": "a time is negative or unknown",
    "timeless_count": "all reads have the same time",
}
"""What each count says where it is not 0."""


@dataclass(frozen=True)
class StructureReport:
    """What the structure suite found.

    Attributes
    ----------
    reasons
        Why a plate read cannot be staged, by plate_read_id; those without a reason are not named.
    document
        `suite` and `result`, ready for JSON.
    """

    reasons: dict[str, tuple[str, ...]]
    expectation_count: int
    row_count: int
    success: bool
    document: dict[str, Json]


def check_structure(
    readings: pd.DataFrame, plate_formats: Mapping[str, int] | None = None
) -> StructureReport:
    """Hold staged readings against the structure suite.

    Parameters
    ----------
    readings
        READINGS columns, of any number of plate reads.
    plate_formats
        Wells of the plate (96, 384, 1536) by plate_read_id; where not stated, the largest plate counts.

    Raises
    ------
    HalfsatError
        If a column is missing, or there is no reading.
    ExpectationFailed
        If an expectation could not be evaluated.
    """
    if missing := [name for name in READINGS.column_names if name not in readings.columns]:
        raise HalfsatError(f"staged readings lack the columns {', '.join(missing)}", where="structure suite")
    if readings.empty:
        raise HalfsatError("there are no readings to check", where="structure suite")
    summary = summarise(readings, plate_formats or {})
    from great_expectations.expectations import core

    expectations = [
        core.ExpectColumnValuesToBeBetween(
            column=rule, min_value=0, max_value=0, meta={"rule": rule, "meaning": f"never: {meaning}"}
        )
        for rule, meaning in RULES.items()
    ]
    outcome = validate("structure", expectations, summary, KEYS)
    reasons: dict[str, list[str]] = {}
    for entry in outcome.flagged:
        _tell(reasons, entry, summary)
    return StructureReport(
        {plate: tuple(found) for plate, found in reasons.items()},
        len(expectations),
        len(summary),
        outcome.success,
        outcome.document,
    )


def summarise(readings: pd.DataFrame, plate_formats: Mapping[str, int]) -> pd.DataFrame:
    """Count what breaks each rule: one row a plate read, channel and well, keys and one column a rule."""
    code, names = _wells_of(readings)
    size = len(names)
    read_number, number_wrong = _numbers(readings["read_number"])
    time_s, time_wrong = _numbers(readings["time_s"])
    signal, signal_wrong = _numbers(readings["signal"])
    _, temperature_wrong = _numbers(readings["temperature_c"])
    state = readings["state"]
    ok = (state == "ok").to_numpy(dtype=bool, na_value=False)
    known_state = state.isin(STATES).to_numpy()

    def count(broken: np.ndarray) -> np.ndarray:
        return np.bincount(code[broken], minlength=size)

    whole = np.isfinite(read_number) & (read_number >= 1) & (read_number == np.floor(read_number))
    numbered = pd.DataFrame({"code": code[whole], "number": read_number[whole]})
    doubled = numbered.duplicated().to_numpy()
    distinct = np.bincount(numbered["code"][~doubled], minlength=size)
    highest = numbered.groupby("code")["number"].max().reindex(range(size)).fillna(0).to_numpy()
    finite_time = np.isfinite(time_s)
    timed = pd.DataFrame({"code": code[finite_time], "time": time_s[finite_time]}).groupby("code")["time"]
    span = (timed.max() - timed.min()).reindex(range(size)).to_numpy(dtype=float)
    reads = np.bincount(code, minlength=size)
    return names.assign(
        unnamed_count=np.where(_named(names, plate_formats), 0, reads),
        wrong_type_count=count(number_wrong | time_wrong | signal_wrong | temperature_wrong),
        unknown_state_count=count(~known_state),
        doubled_count=np.bincount(numbered["code"][doubled], minlength=size),
        unnumbered_count=np.where((count(~whole) > 0) | (highest != distinct), reads, 0),
        lost_signal_count=count(ok & ~np.isfinite(signal) & ~signal_wrong),
        stray_signal_count=count(~ok & known_state & ~np.isnan(signal)),
        wrong_time_count=count(~time_wrong & ~(finite_time & (np.nan_to_num(time_s) >= 0))),
        timeless_count=np.where((reads > 1) & (span == 0), reads, 0),
    )


def _wells_of(readings: pd.DataFrame) -> tuple[np.ndarray, pd.DataFrame]:
    """Code of the well each reading belongs to (R,), and the wells in order of code."""
    # An unknown name must count as a name of its own: factorize would code it -1.
    named = [readings[key].astype(object).where(readings[key].notna(), "").astype("str") for key in KEYS]
    parts = [pd.factorize(column) for column in named]
    code = np.zeros(len(readings), dtype=np.int64)
    for part, uniques in parts:
        code = code * max(len(uniques), 1) + part
    present, code = np.unique(code, return_inverse=True)
    columns: dict[str, np.ndarray] = {}
    for key, (_, uniques) in reversed(list(zip(KEYS, parts, strict=True))):
        columns[key] = np.asarray(uniques.take(present % len(uniques)), dtype=object)
        present = present // len(uniques)
    return code, pd.DataFrame({key: columns[key] for key in KEYS})


def _numbers(column: pd.Series) -> tuple[np.ndarray, np.ndarray]:
    """Column as floats, and where something stands that is no number."""
    if pd.api.types.is_numeric_dtype(column) and not pd.api.types.is_bool_dtype(column):
        return column.to_numpy(dtype=float, na_value=np.nan), np.zeros(len(column), dtype=bool)
    typed = column.map(
        lambda value: isinstance(value, (int, float, np.number)) and not isinstance(value, bool)
    )
    kept = column.astype(object).where(typed.astype(bool))
    values = pd.to_numeric(kept, errors="coerce").to_numpy(dtype=float, na_value=np.nan)
    return values, (column.notna() & ~typed.astype(bool)).to_numpy(dtype=bool)


def _named(names: pd.DataFrame, plate_formats: Mapping[str, int]) -> np.ndarray:
    """Whether each well has the plain name of a well that lies on its plate."""
    positions = {name: _position(name) for name in names["well"].unique()}
    formats = {plate: plate_format(count) for plate, count in plate_formats.items()}
    largest = plate_format(1536)
    return np.array(
        [
            (position := positions[well]) is not None and formats.get(plate, largest).holds(*position)
            for plate, well in zip(names["plate_read_id"], names["well"], strict=True)
        ],
        dtype=bool,
    )


def _position(name: str) -> tuple[int, int] | None:
    try:
        position = well_position(name)
    except UnknownName:
        return None
    return position if well_name(*position) == name else None


def _tell(reasons: dict[str, list[str]], entry: Flagged, summary: pd.DataFrame) -> None:
    """Add one reason for each plate read in which this rule is broken: what, and in which wells."""
    meaning = RULES[entry.meta["rule"]]
    broken = summary.iloc[entry.rows]
    for plate, rows in broken.groupby("plate_read_id", sort=False):
        wells = list(dict.fromkeys(rows["well"]))
        more = f" and {len(wells) - WELLS_NAMED} more" if len(wells) > WELLS_NAMED else ""
        count = int(rows[entry.meta["rule"]].sum())
        reads = "1 read" if count == 1 else f"{count} reads"
        text = f"{meaning} ({reads}; well {', '.join(wells[:WELLS_NAMED])}{more})"
        reasons.setdefault(str(plate), []).append(text)
