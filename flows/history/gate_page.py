"""The auditor's page of what the gates did, and the same in short for the terminal.

Lays out what `flows.history.gate_audit` gathered; reads no file and no database.
"""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass

from rich import box
from rich.console import Group, RenderableType
from rich.table import Table
from rich.text import Text

from flows.history.gate_record import AuditRecord, GateRecord, Told, Unassessed
from flows.history.output import plain
from flows.pages import render_page
from flows.wording import MARKS

SUBJECTS = {
    "wells.well": "wells, before any fit",
    "wells.plate_read": "plate reads, before any fit",
    "wells.lot": "lots, before any fit",
    "fit.well": "wells, by a first fit",
    "fit.plate_read": "plate reads, by a first fit",
    "fit.series": "series, by a first fit",
    "fit.lot": "lots, by a first fit",
    "series.well": "wells, by the final fit",
    "series.series": "series, by the final fit",
    "series.lot": "lots, by the final fit",
    "series.plate_read": "plate reads, by the final fit",
}
CONDITIONS = {
    "unchanged": "as written",
    "changed": "changed since it was written",
    "missing": "missing",
}


@dataclass(frozen=True)
class OverviewLine:
    """One gate over all recipes.

    Attributes
    ----------
    standing
        The worst that it found: void, held, clear; none where it judged nothing.
    off
        Where it is off, in words; empty where it is on.
    limits
        Its chief limit, each value that is in force somewhere.
    """

    name: str
    purpose: str
    standing: str
    ran: bool
    judged_count: int
    flagged_count: int
    unassessed_count: int
    findings: tuple[Told, ...]
    unassessed: tuple[Unassessed, ...]
    off: str
    limits: tuple[str, ...]

    @property
    def told(self) -> int:
        """How many findings it has."""
        return len(self.findings)


def gate_page(record: AuditRecord) -> str:
    """The page: one self-contained HTML text, readable without network or script."""
    return render_page(
        "gates.html", record=record, overview=overview(record), subjects=SUBJECTS, conditions=CONDITIONS
    )


def overview(record: AuditRecord) -> tuple[OverviewLine, ...]:
    """Every gate once, in the order in which they are judged."""
    names = dict.fromkeys(gate.name for recipe in record.recipes for gate in recipe.gates)
    return tuple(_line(record, name) for name in names)


def _line(record: AuditRecord, name: str) -> OverviewLine:
    parts = list(_parts(record, name))
    told = tuple(each for part in parts for each in part.told)
    judged = sum(run.judged_count for part in parts for run in part.runs)
    standings = {each.standing for each in told}
    reasons: dict[str, tuple[str, ...]] = {}
    for part in parts:
        for each in part.unassessed:
            reasons[each.reason] = (*reasons.get(each.reason, ()), *each.places)
    return OverviewLine(
        name=name,
        purpose=parts[0].purpose,
        standing=next(
            (each for each in ("void", "held") if each in standings), "clear" if judged else "none"
        ),
        ran=any(part.runs for part in parts),
        judged_count=judged,
        flagged_count=sum(part.flagged_count for part in parts),
        unassessed_count=sum(part.unassessed_count for part in parts),
        findings=told,
        unassessed=tuple(Unassessed(reason, places) for reason, places in reasons.items()),
        off="" if name not in record.off else _off(record, name),
        limits=tuple(dict.fromkeys(limit for part in parts for limit in _limit(part))),
    )


def _parts(record: AuditRecord, name: str) -> Iterator[GateRecord]:
    return (gate for recipe in record.recipes for gate in recipe.gates if gate.name == name)


def _off(record: AuditRecord, gate: str) -> str:
    """Where a gate is off: `off`, or `off in` some of the assays."""
    assays = record.off[gate]
    return "off" if len(assays) == len(record.assays) else f"off in {', '.join(assays)}"


def _limit(gate: GateRecord) -> Iterator[str]:
    """The setting called limit, or the first one of a gate that has none."""
    named = [each for each in gate.settings if each.name == "limit"] or list(gate.settings[:1])
    return (each.value for each in named)


def gate_summary(record: AuditRecord) -> RenderableType:
    """Each gate with its limit and counts, then what was off and which documents are not what was written.

    Holds at 80 columns.
    """
    table = Table(box=box.SIMPLE_HEAD, pad_edge=False, padding=(0, 1), show_edge=False)
    table.add_column("")
    table.add_column("gate", overflow="fold")
    for name in ("limit", "judged", "flags", "findings", "not assessed"):
        table.add_column(name, justify="right", overflow="fold")
    for line in overview(record):
        name = plain(line.name) + (f"\n{plain(line.off)}" if line.off else "")
        unknown = "–"
        table.add_row(
            Text(MARKS.get(line.standing, "·")),
            Text(name),
            Text(plain("\n".join(line.limits)) or unknown),
            str(line.judged_count) if line.ran else unknown,
            str(line.flagged_count) if line.ran else unknown,
            str(line.told),
            str(line.unassessed_count) if line.ran else unknown,
        )
    off = "; ".join(f"{gate} {_off(record, gate)}".removesuffix(" off") for gate in record.off)
    notes = [Text(f"Gates off: {plain(off) or 'none'}")]
    notes += [
        Text(f"{MARKS['held']} {plain(each.file)}: {CONDITIONS[each.condition]}") for each in record.broken
    ]
    if record.partial:
        notes.append(Text("Judged counts the whole runs that these results were part of."))
    return Group(table, Text(""), *notes)
