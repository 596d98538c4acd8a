"""What to measure again: substrate levels that would settle a series held for the reach of its substrate.

Takes frames of a batch and gives rows of `suggestions`; the levels and what they bring are worked out in
models.statistics.optimal_levels. Judges nothing: that a series is held is read from its findings.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
import pandas as pd

from flows.frames import rows
from flows.wording import constant_symbol, number
from models.kinetics.laws import RateLaw, law
from models.kinetics.laws.law import Floats
from models.records.assay import Assay
from models.statistics.optimal_levels import (
    Expected,
    Range,
    RateError,
    Rates,
    expected_fit,
    information,
    optimal_levels,
    rate_error,
)
from models.tables import SUGGESTIONS

SATURATION, LOW_END = "saturation_not_reached", "low_end_not_covered"

REACH = 6.0
"""(S / K)^n up to which levels are suggested where no solubility is stated: 86 % of Vmax, twice what the gate
asks for by default. A choice."""
LOWEST_SHARE = 0.05
"""Share of Vmax at the lowest level that is suggested. A choice: below it, rates drown in their blanks."""
FARTHEST = 30.0
"""Times the measured levels beyond which a K is too far to plan by: there the law is straight, or flat,
within 3 %, and the K is whatever the noise makes it. A choice."""
MOST_REPLICATES = 8
"""Wells of one level beyond which no more are asked for. A choice."""
FOLD_WORDS = {2: "duplicate", 3: "triplicate", 4: "quadruplicate"}


@dataclass(frozen=True)
class _Held:
    """One held series with all that its suggestion rests on."""

    series_id: str
    analysis_id: str
    law: RateLaw
    constants: Floats
    k_name: str
    hill_n: float
    k_interval: tuple[float, float]
    measured: Rates
    error: RateError
    lowest_um: float
    highest_um: float
    replicates: int
    saturation_limit: float | None
    low_end_limit: float | None
    solubility_um: float | None

    @property
    def k_um(self) -> float:
        names = [constant.name for constant in self.law.constants]
        return float(self.constants[names.index(self.k_name)])

    @property
    def k_text(self) -> str:
        return constant_symbol(self.k_name)

    @property
    def gates(self) -> str:
        limits = ((SATURATION, self.saturation_limit), (LOW_END, self.low_end_limit))
        return ", ".join(gate for gate, limit in limits if limit is not None)

    @property
    def highest_allowed_um(self) -> float:
        if self.solubility_um is not None:
            return self.solubility_um
        reach = max(REACH, 2.0 * (self.saturation_limit or 0.0))
        return max(self.highest_um, float(f"{self.k_um * reach ** (1.0 / self.hill_n):.1e}"))

    @property
    def allowed_by(self) -> str:
        return "reach" if self.solubility_um is None else "solubility"

    def highest_ratio(self, substrate_um: float) -> float:
        return float((substrate_um / self.k_um) ** self.hill_n)


def suggest_levels(
    series: pd.DataFrame,
    estimates: pd.DataFrame,
    findings: pd.DataFrame,
    wells: pd.DataFrame,
    points: pd.DataFrame,
    assays: Mapping[str, Assay],
) -> pd.DataFrame:
    """Levels for every series that a gate on the reach of its substrate holds.

    A series whose law could not be fitted has no suggestion: there is no estimate to plan by, and its finding
    says why. All other held series have one, which may say that no level can be named.

    Parameters
    ----------
    series
        SERIES columns (law, lowest_substrate_um, highest_substrate_um).
    estimates
        ESTIMATES: the law's constants of the fit chosen to the clear wells are used.
    findings
        FINDINGS: breaches of saturation_not_reached and low_end_not_covered, with their limits.
    wells
        WELLS with standing, of which the clear ones' nominal levels say how many replicates are usual.
    points
        FIT_POINTS and series_id.
    assays
        The assay of each analysis.

    Returns
    -------
    pandas.DataFrame
        Rows of SUGGESTIONS, in the order of `series` and of their levels.
    """
    about = findings[(findings["subject"] == "series") & (findings["outcome"] == "breach")]
    breached = about[about["gate"].isin((SATURATION, LOW_END))]
    chosen = estimates[estimates["chosen"].astype(bool) & (estimates["wells"] == "clear")]
    of_estimates = dict(list(chosen.groupby("series_id", sort=False)))
    of_points = dict(list(points.groupby("fit_id", sort=False)))
    of_wells = dict(list(wells[wells["standing"] == "clear"].groupby("series_id", sort=False)))
    of_findings = dict(list(breached.groupby("series_id", sort=False)))
    suggested: list[dict[str, object]] = []
    for row in rows(series[series["series_id"].isin(of_findings) & series["law"].notna()]):
        fitted = of_estimates.get(row.series_id)
        if fitted is None:
            continue
        fit_points = of_points.get(fitted["fit_id"].iloc[0])
        if fit_points is None:
            continue
        held = _held(
            row,
            fitted,
            of_findings[row.series_id],
            of_wells.get(row.series_id, wells[:0]),
            fit_points,
            assays[row.analysis_id],
        )
        if held is not None:
            suggested += _suggestion(held)
    return pd.DataFrame(suggested, columns=SUGGESTIONS.column_names) if suggested else SUGGESTIONS.empty()


def _held(
    row: Any,
    fitted: pd.DataFrame,
    findings: pd.DataFrame,
    wells: pd.DataFrame,
    points: pd.DataFrame,
    assay: Assay,
) -> _Held | None:
    """The series, or None where its law has no K or a constant is not known."""
    chosen = law(str(row.law))
    by_name = fitted.drop_duplicates("constant").set_index("constant")
    names = [constant.name for constant in chosen.constants]
    if chosen.half_saturation is None or not set(names) <= set(by_name.index):
        return None
    constants = by_name.loc[names, "value"].to_numpy(dtype=float)
    deviation = points["v_sd_um_per_s"].to_numpy(dtype=float)
    used = points[deviation > 0]
    rate, deviation = used["v_um_per_s"].to_numpy(dtype=float), deviation[deviation > 0]
    if not np.isfinite(constants).all() or not rate.size:
        return None
    k_row = by_name.loc[chosen.half_saturation]
    limits = findings.drop_duplicates("gate").set_index("gate")["limit_value"].astype(float)
    counts = wells.groupby("substrate_um").size()
    return _Held(
        series_id=str(row.series_id),
        analysis_id=str(row.analysis_id),
        law=chosen,
        constants=constants,
        k_name=chosen.half_saturation,
        hill_n=float(constants[names.index("hill_n")]) if "hill_n" in names else 1.0,
        k_interval=(_real(k_row["low"]), _real(k_row["high"])),
        measured=Rates(used["substrate_um"].to_numpy(dtype=float), rate, deviation**2),
        error=rate_error(used["fitted_um_per_s"].to_numpy(dtype=float), deviation),
        lowest_um=float(row.lowest_substrate_um),
        highest_um=float(row.highest_substrate_um),
        replicates=int(np.clip(counts.median() if len(counts) else 2, 2, MOST_REPLICATES)),
        saturation_limit=float(limits[SATURATION]) if SATURATION in limits.index else None,
        low_end_limit=float(limits[LOW_END]) if LOW_END in limits.index else None,
        solubility_um=assay.solubility_limit_um,
    )


def _suggestion(held: _Held) -> list[dict[str, object]]:
    """Rows of one series: its levels, or one row that says why none can be named."""
    reason = _why_none(held)
    if reason is not None:
        return [_row(held, sentence=f"{reason}: no level can be named.")]
    ranges = _ranges(held)
    known = information(held.law, held.constants, held.measured.substrate_um, held.measured.variance)
    replicates = held.replicates
    while True:
        try:
            exact = optimal_levels(held.law, held.constants, known, held.error, ranges, replicates)
        except ValueError as error:
            return [_row(held, sentence=f"{_capital(str(error))}: no level can be named.")]
        levels = np.array([_round_within(*each) for each in zip(exact, ranges, strict=True)])
        expected = expected_fit(held.law, held.constants, held.measured, levels, held.error, replicates)
        settles = _settles(held, levels, expected)
        if settles or 2 * replicates > MOST_REPLICATES:
            break
        replicates *= 2
    named, counts = np.unique(levels, return_counts=True)
    wells = [(float(level), int(count) * replicates) for level, count in zip(named, counts, strict=True)]
    sentence = _sentence(held, wells, expected, settles=settles)
    return [
        _row(held, place, level, count, expected, settles=settles, sentence=sentence, levels=named)
        for place, (level, count) in enumerate(wells, start=1)
    ]


def _why_none(held: _Held) -> str | None:
    """Why no level can settle the series, or None where one may."""
    k = f"{held.k_text}, {_um(held.k_um)} by the fit,"
    if held.k_um > FARTHEST * held.highest_um:
        where = f"more than {FARTHEST:g} times the highest clear level, {_um(held.highest_um)}"
        return f"{k} lies at {where}, too far from what is measured to plan by"
    if held.k_um * FARTHEST < held.lowest_um:
        where = f"less than a {FARTHEST:g}th of the lowest clear level, {_um(held.lowest_um)}"
        return f"{k} lies at {where}, too far from what is measured to plan by"
    if held.saturation_limit is not None and held.solubility_um is not None:
        needed = _needed_um(held)
        if needed > held.solubility_um:
            reached = held.highest_ratio(held.solubility_um)
            return (
                f"The highest level needed for {_ratio_text(held)} = {held.saturation_limit:.3g} is "
                f"{_um(needed)}, and the assay's solubility limit, {_um(held.solubility_um)}, reaches "
                f"{number(reached, digits=2)} only"
            )
    if held.highest_allowed_um <= _lowest_um(held):
        return f"{k} lies too far above the assay's solubility limit, {_um(held.highest_allowed_um)}"
    return None


def _needed_um(held: _Held) -> float:
    """Lowest level that would meet the limit on saturation; 0 where only an interval is open."""
    return float(held.k_um * (held.saturation_limit or 0.0) ** (1.0 / held.hill_n))


def _lowest_um(held: _Held) -> float:
    lowest = float(held.k_um * (LOWEST_SHARE / (1.0 - LOWEST_SHARE)) ** (1.0 / held.hill_n))
    return lowest if held.low_end_limit is None else min(lowest, 0.5 * held.low_end_limit * held.k_um)


def _ranges(held: _Held) -> list[Range]:
    """One range a constant of the law, those first that the gates ask for."""
    lowest, highest = _lowest_um(held), held.highest_allowed_um
    asked: list[Range] = []
    if held.saturation_limit is not None and _needed_um(held) > held.highest_um:
        asked.append((_needed_um(held), highest))
    if held.low_end_limit is not None:
        asked.append((lowest, min(held.low_end_limit * held.k_um, highest)))
    free = max(held.law.constant_count - len(asked), 0)
    return asked + [(lowest, highest)] * free


def _round_within(level: float, allowed: Range) -> float:
    """The level with as few significant digits, two or more, as leave it inside its range."""
    for digits in (2, 3, 4):
        rounded = float(f"{level:.{digits - 1}e}")
        if allowed[0] <= rounded <= allowed[1]:
            return rounded
    return level


def _settles(held: _Held, levels: Floats, expected: Expected) -> bool:
    """Whether the gates would let the series pass, were its constants as now estimated."""
    highest, lowest = max(held.highest_um, levels.max()), min(held.lowest_um, levels.min())
    k = [constant.name for constant in held.law.constants].index(held.k_name)
    closed = [expected.low[k], expected.high[k]]
    if held.law.amplitude is not None:
        closed.append(expected.high[0])
    return bool(
        np.isfinite(closed).all()
        and (held.saturation_limit is None or held.highest_ratio(highest) >= held.saturation_limit)
        and (held.low_end_limit is None or lowest / held.k_um <= held.low_end_limit)
    )


def _sentence(held: _Held, wells: Sequence[tuple[float, int]], expected: Expected, *, settles: bool) -> str:
    k = [constant.name for constant in held.law.constants].index(held.k_name)
    low, high = float(expected.low[k]), float(expected.high[k])
    before, after = _width(held, *held.k_interval), _width(held, low, high)
    if np.isfinite([low, high]).all():
        error = float(expected.standard_error[k])
        to = f"about {after} ({number(low, error)} to {number(high, error)} µM)"
        brings = f"bring the interval of {held.k_text} from {before} to {to}"
    else:
        brings = f"leave the interval of {held.k_text} {after}"
    highest = max(held.highest_um, wells[-1][0])
    lowest = min(held.lowest_um, wells[0][0])
    reach = []
    if held.saturation_limit is not None and highest > held.highest_um:
        ratios = [number(held.highest_ratio(each), digits=2) for each in (held.highest_um, highest)]
        reach.append(f"the highest {_ratio_text(held)} from {ratios[0]} to {ratios[1]}")
    if held.low_end_limit is not None:
        ratios = [number(each / held.k_um, digits=2) for each in (held.lowest_um, lowest)]
        reach.append(f"the lowest S/{held.k_text} from {ratios[0]} to {ratios[1]}")
    would = "would" if settles else "would not settle it: they would"
    told = _listed([brings, *(f"bring {each}" if "leave" in brings else each for each in reach)])
    return f"{_levels_text(wells)} {would} {told}. {_basis(held)}"


def _basis(held: _Held) -> str:
    plan = (
        f"D-optimal beside the {held.measured.rate_um_per_s.size} clear wells for the {held.law.title} law, "
        f"if {held.k_text} is {_um(held.k_um)} as now estimated"
    )
    allowed = _um(held.highest_allowed_um)
    if held.allowed_by == "solubility":
        return f"{plan}; levels up to the assay's solubility limit, {allowed}, were allowed."
    reach = f"{_ratio_text(held)} = {number(held.highest_ratio(held.highest_allowed_um), digits=2)}"
    why = "the highest measured" if held.highest_allowed_um == held.highest_um else reach
    return f"{plan}; the assay states no solubility_limit_um, so levels up to {allowed} ({why}) were allowed."


def _levels_text(wells: Sequence[tuple[float, int]]) -> str:
    counts = {count for _, count in wells}
    if len(counts) > 1:
        each = [f"{level:.6g} µM in {count} wells" for level, count in wells]
        return f"Levels of {_listed(each)}"
    count = counts.pop()
    many = len(wells) > 1
    how = f"in {FOLD_WORDS[count]}" if count in FOLD_WORDS else f"in {count} wells{' each' if many else ''}"
    levels = _listed([f"{level:.6g}" for level, _ in wells])
    return f"{'Levels' if many else 'A level'} of {levels} µM {how}"


def _listed(texts: Sequence[str]) -> str:
    return texts[0] if len(texts) == 1 else f"{', '.join(texts[:-1])} and {texts[-1]}"


def _width(held: _Held, low: float, high: float) -> str:
    """An interval of K as a share of it, or which end is open."""
    if np.isfinite(low) and np.isfinite(high):
        return f"±{50.0 * (high - low) / held.k_um:.2g} %"
    if np.isfinite(low):
        return "open above"
    return "open below" if np.isfinite(high) else "open"


def _ratio_text(held: _Held) -> str:
    return f"S/{held.k_text}" if held.hill_n == 1.0 else f"(S/{held.k_text})^n"


def _um(value: float) -> str:
    return f"{number(value)} µM"


def _real(value: object) -> float:
    return float(value) if isinstance(value, (int, float)) else float("nan")


def _capital(text: str) -> str:
    return text[:1].upper() + text[1:]


def _row(
    held: _Held,
    place: int = 1,
    level: float | None = None,
    count: int | None = None,
    expected: Expected | None = None,
    *,
    settles: bool = False,
    sentence: str,
    levels: Floats | None = None,
) -> dict[str, object]:
    known: dict[str, object] = dict.fromkeys(
        (
            "expected_highest_ratio",
            "expected_lowest_ratio",
            "expected_standard_error_um",
            "expected_low_um",
            "expected_high_um",
        )
    )
    if expected is not None and levels is not None:
        k = [constant.name for constant in held.law.constants].index(held.k_name)
        known = {
            "expected_highest_ratio": held.highest_ratio(max(held.highest_um, float(levels.max()))),
            "expected_lowest_ratio": min(held.lowest_um, float(levels.min())) / held.k_um,
            "expected_standard_error_um": float(expected.standard_error[k]),
            "expected_low_um": float(expected.low[k]),
            "expected_high_um": float(expected.high[k]),
        }
    return {
        "series_id": held.series_id,
        "place": place,
        "analysis_id": held.analysis_id,
        "gates": held.gates,
        "settles": settles,
        "substrate_um": level,
        "replicates": count,
        "highest_allowed_um": held.highest_allowed_um,
        "allowed_by": held.allowed_by,
        "constant": held.k_name,
        **known,
        "sentence": sentence,
    }
