"""How well each plate read of a batch ran, as rows that are stored whether or not a gate looks at them.

The statistics are those of `models.statistics`; what gates have measured already is taken from them.
"""

from __future__ import annotations

from collections.abc import Iterator, Mapping

import numpy as np
import pandas as pd

from checks.gates import GATES, control_window, plate_position
from checks.gates.gate import ENZYME_ROLES, GateInput, known_or_none
from flows.frames import rows
from models.statistics.plate_quality import replicate_cvs
from models.statistics.position import read_order_drift
from models.tables import PLATE_STATISTICS

Row = dict[str, object]


def plate_statistics(data: GateInput, measured: Mapping[str, pd.DataFrame]) -> pd.DataFrame:
    """Statistics of every plate read of a batch.

    Parameters
    ----------
    data
        Frames of the batch, with its final fits and their points.
    measured
        Metrics of the gates that ran on it, by gate; a gate that is off is asked here.

    Returns
    -------
    DataFrame
        Columns of PLATE_STATISTICS, every statistic of every plate read.
    """
    control, position = (
        measured[name] if name in measured else GATES[name].metrics(data)
        for name in (control_window.NAME, plate_position.NAME)
    )
    found = [*_control(control), *_position(position), *_scatter(data), *_drift(data)]
    frame = pd.DataFrame(found, columns=PLATE_STATISTICS.column_names)
    return frame.sort_values(["analysis_id", "statistic"], ignore_index=True)


def _row(analysis_id: object, statistic: str, value: object, reason: object, **rest: object) -> Row:
    known = known_or_none(value)
    unknown = None if known is not None else str(reason or "it cannot be computed from what was measured")
    return {
        "analysis_id": analysis_id,
        "statistic": statistic,
        "statistic_value": known,
        "p_value": None,
        "where_on_plate": None,
        "well_count": None,
        "reason": unknown,
        **rest,
    }


def _control(metrics: pd.DataFrame) -> Iterator[Row]:
    for plate in rows(metrics):
        no_ratio = plate.reason or "the blanks' mean rate is not above zero"
        count = known_or_none(plate.reference_count + plate.blank_count)
        wells = None if count is None else int(count)
        yield _row(plate.analysis_id, "z_prime", plate.z_prime, plate.reason, well_count=wells)
        yield _row(plate.analysis_id, "signal_to_blank", plate.signal_to_blank, no_ratio, well_count=wells)


def _position(metrics: pd.DataFrame) -> Iterator[Row]:
    for plate in rows(metrics):
        known = isinstance(plate.kind, str)
        yield _row(
            plate.analysis_id,
            "position_effect",
            plate.effect,
            plate.reason,
            p_value=known_or_none(plate.p_value),
            where_on_plate=plate_position.place_name(plate.kind, plate.place) if known else None,
            well_count=int(plate.well_count),
        )


def _scatter(data: GateInput) -> Iterator[Row]:
    wells = data.wells_with_rates(ENZYME_ROLES)
    used = wells[wells["series_id"].notna() & (wells["v0_um_per_s"] > 0)]
    plates = pd.Index(data.analyses["analysis_id"])
    cv = replicate_cvs(
        plates.get_indexer(used["analysis_id"]).astype(np.intp),
        np.asarray(used.groupby(["series_id", "substrate_um"], sort=False).ngroup(), dtype=np.intp),
        used["v0_um_per_s"].to_numpy(dtype=float),
        len(plates),
    )
    count = used.groupby("analysis_id").size()
    for analysis_id, value in zip(plates, cv, strict=True):
        well_count = int(count.get(analysis_id, 0))
        yield _row(analysis_id, "replicate_cv", value, "no condition has replicates", well_count=well_count)


def _drift(data: GateInput) -> Iterator[Row]:
    """Drift of relative residuals along the order of reading: by time where wells differ, else by rows."""
    points = plate_position.residuals(data)
    begun = data.reads.for_wells(_first_read_s(data), points)
    for analysis_id in data.analyses["analysis_id"]:
        mine = (points["analysis_id"] == analysis_id).to_numpy()
        time_s = begun[mine]
        staggered = time_s.size > 0 and np.isfinite(time_s).all() and np.ptp(time_s) > 0
        order = time_s if staggered else np.arange(mine.sum(), dtype=float)
        drift = read_order_drift(order, points.loc[mine, "relative"].to_numpy(dtype=float))
        yield _row(
            analysis_id,
            "read_order_drift",
            None if drift is None else drift.change,
            "fewer than 4 wells were fitted",
            p_value=None if drift is None else drift.p_value,
            well_count=int(mine.sum()),
        )


def _first_read_s(data: GateInput) -> np.ndarray:
    first = np.full(len(data.reads.wells), np.inf)
    np.minimum.at(first, data.reads.code, data.reads.time_s)
    return first
