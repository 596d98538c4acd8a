"""A lot on the terminal: values, decisions, the reference, charts; holds at 80 columns.

Lays out what `flows.history.lots` gathered; reads nothing.
"""

from __future__ import annotations

from collections.abc import Iterator, Sequence

from rich import box
from rich.console import Group, RenderableType
from rich.table import Table
from rich.text import Text

from flows.history.lot_record import ChartRecord, ConstantRecord, LotRecord
from flows.history.output import plain
from flows.wording import MARKS, constant_symbol, interval, number, unit_symbol
from models.statistics.charts import RULES
from models.statistics.conformity import CONFORMS, DOES_NOT_CONFORM

UNKNOWN = "–"
ONE_PLATE = "one plate read"
SHOWN_SIGNALS = 12


def lot_view(record: LotRecord) -> RenderableType:
    """One lot in one assay."""
    parts: list[RenderableType] = [Text(headline(record), style="bold"), Text(subline(record)), Text("")]
    parts += [Text(plain(note)) for note in record.notes] + ([Text("")] if record.notes else [])
    parts.append(
        _table(
            [
                ("constant", False),
                ("value", True),
                ("95 % interval", True),
                ("plates", True),
                ("between", True),
            ],
            [
                (
                    named(each),
                    value_text(each),
                    interval_text(each),
                    str(each.value_plate_reads),
                    spread_text(each),
                )
                for each in record.constants
            ],
        )
    )
    parts += [Text("between: standard deviation between plate reads, beyond their own errors", style="dim")]
    parts += _decisions(record)
    parts += _equivalences(record)
    parts += [Text(""), *(Text(plain(each)) for each in reasons(record))] if reasons(record) else []
    parts += _charts(record)
    return Group(*parts)


def headline(record: LotRecord) -> str:
    """The lot and what was decided."""
    said = "no specification, nothing decided" if record.decision is None else record.decision
    mark = f"{MARKS['held']} " if record.standing == "held" else ""
    return plain(f"{mark}Lot {record.lot}: {said}")


def subline(record: LotRecord) -> str:
    """Where and when it was measured."""
    many = len(record.plate_reads)
    what = f"{record.assay.replace('_', ' ')}, {record.role}"
    return plain(
        f"{what}, {many} plate read{'s' if many != 1 else ''}, the latest of {record.measured_at:%Y-%m-%d}"
    )


def named(constant: ConstantRecord) -> str:
    """Its sign, with its modulator."""
    symbol = constant_symbol(constant.constant)
    return plain(f"{symbol} ({constant.modulator})" if constant.modulator else symbol)


def value_text(constant: ConstantRecord) -> str:
    """Value and unit, with as many digits as its uncertainty allows."""
    return f"{number(constant.value, constant.standard_error)} {unit_symbol(constant.unit)}".rstrip()


def interval_text(constant: ConstantRecord) -> str:
    """Its interval; one plate read has none."""
    if constant.one_plate_only:
        return ONE_PLATE
    return interval(constant.low, constant.high, constant.standard_error)


def spread_text(constant: ConstantRecord) -> str:
    """The between-plate standard deviation in percent of the value."""
    if constant.between_plate_sd is None or not constant.value:
        return UNKNOWN
    return f"{100.0 * constant.between_plate_sd / abs(constant.value):.1f} %"


def limits_text(constant: ConstantRecord) -> str:
    """The specification limits."""
    judged = constant.judgement
    if judged is None:
        return UNKNOWN
    return f"{_range(judged.lower, judged.upper)} {unit_symbol(constant.unit)}".rstrip()


def accepted_text(constant: ConstantRecord) -> str:
    """Where a value conforms under a guard band."""
    judged = constant.judgement
    if judged is None or (judged.accepted_from is None and judged.accepted_to is None):
        return UNKNOWN
    low, high = judged.accepted_from, judged.accepted_to
    if low is not None and high is not None and low > high:
        return "nowhere"
    return _range(low, high)


def probability_text(probability: float | None) -> str:
    """A probability, never rounded to certainty."""
    if probability is None:
        return UNKNOWN
    if probability > 0.9999:
        return "> 0.9999"
    return "< 0.0001" if probability < 0.0001 else f"{probability:.4f}"


def reasons(record: LotRecord) -> list[str]:
    """Why constants are undecided, a sentence each; those of the whole lot stand in its notes."""
    found = []
    for each in record.constants:
        if each.held_only or each.one_plate_only:
            continue
        if each.judgement is not None and each.judgement.reason is not None:
            found.append(f"{named(each)}: {each.judgement.reason}.")
        if each.equivalence is not None and each.equivalence.reason is not None:
            found.append(f"{named(each)} against the reference: {each.equivalence.reason}.")
    return found


def signal_lines(chart: ChartRecord) -> Iterator[tuple[str, str, str]]:
    """Plate, day and sentence of each point that breaks a rule, and of each change of level."""
    for signal in chart.signals:
        point = chart.points[signal.place]
        yield point.plate_id, f"{point.measured_at:%Y-%m-%d}", f"rule {signal.rule}: {RULES[signal.rule]}"
    for place, beyond in enumerate(chart.individuals.moving_range_beyond):
        if beyond:
            point = chart.points[place]
            yield point.plate_id, f"{point.measured_at:%Y-%m-%d}", "moving range above its limit"
    for place, beyond in enumerate(chart.ewma.beyond):
        if beyond:
            point = chart.points[place]
            yield point.plate_id, f"{point.measured_at:%Y-%m-%d}", "EWMA beyond its limits"
    for change in chart.changes:
        point = chart.points[change.place]
        yield (
            point.plate_id,
            f"{point.measured_at:%Y-%m-%d}",
            f"level changes from {number(change.before, digits=4)} to {number(change.after, digits=4)} "
            f"(p {change.p_value:.2g})",
        )


def _decisions(record: LotRecord) -> list[RenderableType]:
    used, judged = record.specification, [each for each in record.constants if each.judgement is not None]
    if used is None:
        return []
    parts: list[RenderableType] = [
        Text(""),
        Text(plain(f"Against {used.source}"), style="bold"),
        Text(
            plain(f"{used.name}, digest {used.digest[:12]}, decision {str(record.decision_id)[:12]}"),
            style="dim",
        ),
        Text(""),
    ]
    if not judged:
        return [*parts, Text("It sets no limits on a constant that this lot has.")]
    parts.append(
        _table(
            [("constant", False), ("limits", True), ("accepted", True), ("p", True), ("decision", False)],
            [
                (
                    named(each),
                    limits_text(each),
                    accepted_text(each),
                    probability_text(each.judgement.probability) if each.judgement else UNKNOWN,
                    each.judgement.decision if each.judgement else UNKNOWN,
                )
                for each in judged
            ],
        )
    )
    rules = "; ".join(dict.fromkeys(each.rule for each in judged))
    parts.append(Text("p: probability that the true value lies within the limits", style="dim"))
    parts.append(Text(f"rule: {rules}", style="dim"))
    return parts


def _equivalences(record: LotRecord) -> list[RenderableType]:
    compared = [each for each in record.constants if each.equivalence is not None]
    if not compared or record.specification is None:
        return []
    rows = []
    for each in compared:
        made, margins = each.equivalence, each.margins or (float("nan"),) * 2
        assert made is not None
        known = made.reason is None or made.low == made.low
        reach = f"{made.low:.3f} to {made.high:.3f}" if known else UNKNOWN
        rows.append(
            (
                named(each),
                UNKNOWN if made.ratio != made.ratio else f"{made.ratio:.3f}",
                reach,
                f"{margins[0]:g} to {margins[1]:g}",
                f"{made.lot_plate_read_count}" + (" shared" if made.design == "paired" else ""),
                made.decision,
            )
        )
    level = compared[0].equivalence.level if compared[0].equivalence is not None else 0.9
    return [
        Text(""),
        Text(plain(f"Against the reference lot {record.specification.reference_lot}"), style="bold"),
        Text("two one-sided tests of the ratio", style="dim"),
        Text(""),
        _table(
            [
                ("constant", False),
                ("ratio", True),
                (f"{level:.0%} interval".replace("%", " %"), True),
                ("margins", True),
                ("plates", True),
                ("decision", False),
            ],
            rows,
        ),
    ]


def _charts(record: LotRecord) -> list[RenderableType]:
    if not record.charts:
        return [Text(""), Text(plain(record.chart_note), style="dim")]
    assert record.specification is not None
    first = record.charts[0]
    parts: list[RenderableType] = [
        Text(""),
        Text(plain(f"Control charts of {first.lot}"), style="bold"),
        Text(plain(f"base period: {record.specification.base_period}"), style="dim"),
        Text(""),
        _table(
            [
                ("constant", False),
                ("centre", True),
                ("3 sd limits", True),
                ("base", True),
                ("points", True),
                ("signals", True),
            ],
            [
                (
                    f"{constant_symbol(each.constant)}, {unit_symbol(each.unit)}".rstrip(", "),
                    number(each.base.centre, each.base.sd),
                    interval(each.individuals.lower, each.individuals.upper, each.base.sd),
                    str(each.base.point_count),
                    str(len(each.points)),
                    str(sum(1 for _ in signal_lines(each)) or "none"),
                )
                for each in record.charts
            ],
        ),
    ]
    told = sorted(
        ((constant_symbol(each.constant), *line) for each in record.charts for line in signal_lines(each)),
        key=lambda line: line[2],
    )
    if told:
        names = [("constant", False), ("plate", False), ("day", False), ("signal", False)]
        parts += [Text(""), _table(names, told[-SHOWN_SIGNALS:])]
        if len(told) > SHOWN_SIGNALS:
            parts.append(
                Text(f"the latest {SHOWN_SIGNALS} of {len(told)}; --format json has all", style="dim")
            )
    return parts


def statement(record: LotRecord) -> str:
    """The decision as a sentence."""
    if record.decision is None:
        return "No specification is for this lot: nothing is decided."
    if record.decision == CONFORMS:
        return "Every constant that the specification asks of conforms."
    judged = [each for each in record.constants if each.judgement is not None]
    if record.decision == DOES_NOT_CONFORM:
        names = [named(each) for each in judged if each.decision == DOES_NOT_CONFORM]
        return f"{_listed(names)} {'does' if len(names) == 1 else 'do'} not conform."
    names = [named(each) for each in judged if each.decision not in (CONFORMS, DOES_NOT_CONFORM)]
    return f"Undecided on {_listed([*names, *record.missing])}."


def _listed(names: Sequence[str]) -> str:
    return names[0] if len(names) == 1 else f"{', '.join(names[:-1])} and {names[-1]}"


def limit_text(value: float) -> str:
    """A limit as it was set: four digits at most, no zeros that it does not need."""
    written = number(value, digits=4)
    if "." in written and "e" not in written:
        return written.rstrip("0").rstrip(".")
    return written


def _range(low: float | None, high: float | None) -> str:
    if low is not None and high is not None:
        return f"{limit_text(low)} to {limit_text(high)}"
    if low is not None:
        return f"at least {limit_text(low)}"
    return UNKNOWN if high is None else f"at most {limit_text(high)}"


def _table(names: Sequence[tuple[str, bool]], rows: Sequence[Sequence[str]]) -> Table:
    made = Table(box=box.SIMPLE_HEAD, pad_edge=False, padding=(0, 1), show_edge=False)
    for name, right in names:
        made.add_column(name, justify="right" if right else "left", overflow="fold")
    for row in rows:
        made.add_row(*(Text(plain(cell)) for cell in row))
    return made
