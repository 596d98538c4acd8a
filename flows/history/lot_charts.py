"""The reference lot's control charts: which points, which base period, which limits, what they signal.

The arithmetic is in models.statistics.charts; a chart looks at history and holds nothing: that is the gate's.
"""

from __future__ import annotations

from collections.abc import Sequence
from zoneinfo import ZoneInfo

import numpy as np

from flows.history.lot_record import ChartPoint, ChartRecord, ConstantRecord, SourceValue
from models.records.lot_specification import ChartSettings, LotSpecification
from models.statistics.change_points import change_points
from models.statistics.charts import ewma_chart, individuals_chart, signals, western_electric
from models.statistics.lots import combine_plate_reads


def lot_charts(
    time_zone: str,
    specification: LotSpecification | None,
    reference: Sequence[ConstantRecord],
    marked: frozenset[str],
) -> tuple[tuple[ChartRecord, ...], str]:
    """Charts of the reference lot's constants, and why there are none.

    Parameters
    ----------
    time_zone
        The site's, in which the days of a base period are counted.
    specification
        Names the reference lot, its base period and the constants that are charted.
    reference
        The reference lot's constants.
    marked
        Plate reads on which the lot asked about stands.

    Returns
    -------
    tuple
        A chart for each constant that the specification names and the reference lot has; and a sentence,
        empty where there are charts.
    """
    if specification is None or specification.charts is None or specification.reference_lot is None:
        return (), "No base period is stated for control charts: add [charts] to the specification."
    settings = specification.charts
    asked = {(each.constant, each.modulator) for each in specification.constants}
    wanted = [
        each for each in reference if (each.constant, each.modulator) in asked and each.modulator is None
    ]
    if not wanted:
        return (), f"The reference lot {specification.reference_lot} has no value of a constant to chart."
    made = [
        _chart(specification.reference_lot, each, settings, ZoneInfo(time_zone), marked) for each in wanted
    ]
    charts = tuple(each for each in made if each is not None)
    if not charts:
        return (), (
            f"The base period holds fewer than two plate reads of {specification.reference_lot}: "
            "its charts have no limits yet."
        )
    return charts, ""


def _chart(
    lot: str, constant: ConstantRecord, settings: ChartSettings, zone: ZoneInfo, marked: frozenset[str]
) -> ChartRecord | None:
    points = _points(constant.sources, settings, zone)
    values = np.array([each.value for each in points], dtype=np.float64)
    in_base = np.array([each.in_base for each in points], dtype=bool)
    individuals = individuals_chart(values, in_base)
    base = individuals.base
    if not np.isfinite(base.sd):
        return None
    return ChartRecord(
        lot=lot,
        constant=constant.constant,
        unit=constant.unit,
        points=points,
        base=base,
        individuals=individuals,
        ewma=ewma_chart(values, base.centre, base.sd, settings.ewma_weight, settings.ewma_limit_sd),
        signals=signals(western_electric(values, base.centre, base.sd)),
        changes=change_points(values, settings.change_alpha),
        marked=marked,
    )


def _points(
    sources: Sequence[SourceValue], settings: ChartSettings, zone: ZoneInfo
) -> tuple[ChartPoint, ...]:
    """One point a plate read, its series pooled, in order of time."""
    by_plate: dict[str, list[SourceValue]] = {}
    for each in sources:
        by_plate.setdefault(each.plate_read_id, []).append(each)
    made = []
    for plate_read_id, mine in by_plate.items():
        first = mine[0]
        pooled = combine_plate_reads(
            np.array([each.value for each in mine]),
            np.array([each.own_error for each in mine]),
            np.zeros(len(mine), dtype=np.int_),
        )
        if not np.isfinite(pooled.value):
            continue
        base = settings.in_base(first.measured_at.astimezone(zone), plate_read_id, first.plate_id)
        made.append(ChartPoint(first.plate_id, plate_read_id, first.measured_at, pooled.value, base))
    return tuple(sorted(made, key=lambda each: (each.measured_at, each.plate_read_id)))
