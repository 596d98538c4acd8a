"""What the gates did, as records: the shape of what an auditor reads, and the text of a rule with its limit.

Holds no database, file or page.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from datetime import datetime
from typing import Any


@dataclass(frozen=True)
class Scope:
    """What is asked about: one of these, or none of them for the latest pass that the gates ran in."""

    pass_id: str | None = None
    analysis_id: str | None = None
    plate_id: str | None = None


@dataclass(frozen=True)
class Told:
    """One finding: its place (`P0412, well B7`), what it does (held, void, none), and its sentence."""

    place: str
    plate_id: str
    standing: str
    sentence: str


@dataclass(frozen=True)
class Unassessed:
    """One reason why a gate could not judge, and all places of which it holds."""

    reason: str
    places: tuple[str, ...]


@dataclass(frozen=True)
class RuleRun:
    """One rule as it ran: its text with its limit, rows it ran on, rows with a value, rows it flagged.

    How many rows had a value is None for a rule on several columns, whose result does not say.
    """

    name: str
    text: str
    severity: str
    row_count: int
    measured_count: int | None
    flagged_count: int


@dataclass(frozen=True)
class SuiteRun:
    """One gate within one suite: the suite's phase and subject, its rows, those not assessed, the rules."""

    suite: str
    row_count: int
    unassessed_count: int
    rules: tuple[RuleRun, ...]

    @property
    def judged_count(self) -> int:
        """Rows that could be judged: those with a value, where a rule tells, else those not unassessed."""
        told = [rule.measured_count for rule in self.rules if rule.measured_count is not None]
        return max(told) if told else self.row_count - self.unassessed_count

    @property
    def flagged_count(self) -> int:
        """Flags of all rules together: a row that breaks two rules counts twice."""
        return sum(rule.flagged_count for rule in self.rules)


@dataclass(frozen=True)
class SettingRecord:
    """One setting in force, and the default of the code that gathers: None where it knows no such setting."""

    name: str
    value: str
    unit: str
    default: str | None


@dataclass(frozen=True)
class GateRecord:
    """One gate under one recipe.

    Attributes
    ----------
    runs
        Suites that it stood in; none where it was off or there was nothing to run on.
    told
        Findings. Fewer than flags where one subject breaks several rules, or a finding only follows from
        another.
    unassessed
        Reasons why it could not judge, as findings tell them; fewer than in `runs` for the same reason.
    """

    name: str
    purpose: str
    on: bool
    runs: tuple[SuiteRun, ...]
    told: tuple[Told, ...]
    unassessed: tuple[Unassessed, ...]
    settings: tuple[SettingRecord, ...]

    @property
    def flagged_count(self) -> int:
        """Flags of all rules together."""
        return sum(run.flagged_count for run in self.runs)

    @property
    def unassessed_count(self) -> int:
        """Rows that it could not judge."""
        return sum(run.unassessed_count for run in self.runs)


@dataclass(frozen=True)
class PlateRecord:
    """One plate read under a recipe."""

    plate_id: str
    analysis_id: str
    revision: int
    standing: str
    computed_at: datetime
    superseded: bool


@dataclass(frozen=True)
class RecipeRecord:
    """Everything that ran with one recipe."""

    recipe_id: str
    recipe_unchanged: bool
    assay: str
    profile: str
    code_version: str
    plates: tuple[PlateRecord, ...]
    gates: tuple[GateRecord, ...]

    @property
    def off(self) -> tuple[str, ...]:
        """Gates that this recipe turns off."""
        return tuple(gate.name for gate in self.gates if not gate.on)


@dataclass(frozen=True)
class DocumentRecord:
    """One JSON document: where it lies, its digest, and whether it is what was written."""

    file: str
    suite: str
    recipe_id: str
    row_count: int
    sha256: str | None
    condition: str


@dataclass(frozen=True)
class PassTimes:
    """One pass of the overnight flow; times are None where it did not finish."""

    pass_id: str
    started_at: datetime | None
    finished_at: datetime | None
    code_version: str | None


@dataclass(frozen=True)
class AuditRecord:
    """What the gates did within a scope.

    Attributes
    ----------
    partial
        Whether the scope is less than whole runs: rows are then those of the runs, which judged other plate
        reads beside; flags and findings are those of the scope.
    """

    site_name: str
    about: str
    passes: tuple[PassTimes, ...]
    recipes: tuple[RecipeRecord, ...]
    structure: tuple[RuleRun, ...]
    documents: tuple[DocumentRecord, ...]
    partial: bool

    @property
    def plate_count(self) -> int:
        """Plate reads judged."""
        return sum(len(recipe.plates) for recipe in self.recipes)

    @property
    def told_count(self) -> int:
        """Findings that hold or void something."""
        return sum(len(gate.told) for recipe in self.recipes for gate in recipe.gates)

    @property
    def unassessed_count(self) -> int:
        """Findings that say that a gate could not judge."""
        return sum(len(each.places) for r in self.recipes for gate in r.gates for each in gate.unassessed)

    @property
    def assays(self) -> tuple[str, ...]:
        """Assays judged."""
        return tuple(dict.fromkeys(recipe.assay for recipe in self.recipes))

    @property
    def off(self) -> dict[str, tuple[str, ...]]:
        """Assays whose gates were off, by gate."""
        found: dict[str, dict[str, None]] = {}
        for recipe in self.recipes:
            for gate in recipe.off:
                found.setdefault(gate, {})[recipe.assay] = None
        return {gate: tuple(assays) for gate, assays in found.items()}

    @property
    def broken(self) -> tuple[DocumentRecord, ...]:
        """Documents that are not what was written."""
        return tuple(each for each in self.documents if each.condition in ("changed", "missing"))


def rule_text(expectation: Mapping[str, Any]) -> str:
    """A rule with its limit, as its expectation states it: `conversion at most 0.1`."""
    meta, given = expectation["meta"], expectation["kwargs"]
    if "meaning" in meta:
        return str(meta["meaning"])
    columns = given.get("column_list") or [given.get("column", "")]
    names = [str(each).split("__", 1)[-1].replace("_", " ") for each in columns]
    if expectation["type"] == "expect_column_values_to_be_between":
        low, high = given.get("min_value"), given.get("max_value")
        ends = [f"at least {low:g}"] if low is not None else []
        ends += [f"at most {high:g}"] if high is not None else []
        return f"{names[0]} {' and '.join(ends)}"
    if expectation["type"] == "expect_column_values_to_not_be_in_set":
        return f"{names[0]} is not {' or '.join(str(each) for each in given['value_set'])}"
    if expectation["type"] == "expect_not_both_beyond":
        return f"{names[0]} at most {given['limit']:g}, or {names[1]} below {given['other_limit']:g}"
    limits = [
        f"{key.replace('_', ' ')} {value_text(value)}"
        for key, value in sorted(given.items())
        if key not in ("column", "column_list", "ignore_row_if", "batch_id")
    ]
    return f"{meta['rule'].replace('_', ' ')}: {', '.join(limits)}"


def value_text(value: Any) -> str:
    """A limit as it is read: yes and no for a switch, a number without needless digits."""
    if isinstance(value, bool):
        return "yes" if value else "no"
    return f"{value:g}" if isinstance(value, (int, float)) else str(value)
