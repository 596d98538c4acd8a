"""A lot's constant held against its specification, and what the constants' decisions make of the lot.

Joins a random-effects value with the conformity rules: degrees of freedom from the plate reads, the scale,
the coverage factor. Knows neither assays nor files.
"""

from __future__ import annotations

import math
from collections.abc import Iterable
from dataclasses import dataclass

from scipy.stats import norm
from scipy.stats import t as t_distribution

from models.statistics.conformity import (
    CONFORMS,
    DOES_NOT_CONFORM,
    UNDECIDED,
    Decision,
    acceptance,
    conformity_probability,
    decide_by_guard_band,
    decide_by_probability,
    log_scale,
    specific_risk,
)

FEWEST_PLATE_READS = 2
"""Plate reads from which on the spread between plates is known at all."""


@dataclass(frozen=True)
class Rule:
    """A decision rule: a guard band, or a least conformity probability; the other one is None.

    Attributes
    ----------
    guard_band_factor
        Guard band as a share r of the expanded uncertainty.
    coverage_factor
        k of the expanded uncertainty where the standard uncertainty is exactly known.
    minimum_probability
        Least conformity probability.
    """

    guard_band_factor: float | None = None
    coverage_factor: float = 2.0
    minimum_probability: float | None = None


@dataclass(frozen=True)
class Judgement:
    """One constant against its limits, all in the constant's unit; None where not known.

    Attributes
    ----------
    decision
        `conforms`, `does not conform` or `undecided`.
    probability
        Conformity probability.
    risk
        Chance that the decision is wrong; None where nothing was decided.
    lower, upper
        Specification limits.
    accepted_from, accepted_to
        Acceptance limits of a guard band; None for a rule by probability.
    coverage_factor
        k in force: for the level that the rule's k stands for, on these degrees of freedom.
    degrees
        Degrees of freedom of the standard uncertainty.
    reason
        Why nothing can be decided, or None.
    """

    decision: Decision
    probability: float | None
    risk: float | None
    lower: float | None
    upper: float | None
    accepted_from: float | None
    accepted_to: float | None
    coverage_factor: float | None
    degrees: float | None
    reason: str | None = None


def judge_constant(
    value: float | None,
    standard_error: float | None,
    degrees: float | None,
    limits: tuple[float | None, float | None],
    rule: Rule,
) -> Judgement:
    """Hold one constant against its specification.

    Where value and limits are positive they are judged as logarithms, on which plate reads were combined. Few
    plate reads know their own spread badly: the coverage factor of a guard band is raised to the one that
    gives the same level on so many degrees of freedom (GUM, JCGM 100:2008, G.6.4), as Student's t stands for
    the normal distribution in the conformity probability.

    Parameters
    ----------
    value, standard_error
        Of the lot, in the unit of the limits.
    degrees
        Degrees of freedom of the standard error; None where one plate read stands alone.
    limits
        Lower and upper specification limit; None for a side without one.
    rule
        The decision rule.

    Returns
    -------
    Judgement
        Undecided, with the reason, where there is no value, no uncertainty, or one plate read only.

    Raises
    ------
    ValueError
        If there is no limit, or the rule is none or two.
    """
    if (rule.guard_band_factor is None) == (rule.minimum_probability is None):
        raise ValueError("a decision rule is a guard band or a least probability")
    reason = _why_not(value, standard_error, degrees)
    if reason is not None or value is None or standard_error is None or degrees is None:
        return Judgement(UNDECIDED, None, None, *limits, None, None, None, None, reason)
    low, high = (math.nan if limit is None else limit for limit in limits)
    positive = value > 0 and (math.isnan(low) or low > 0) and (math.isnan(high) or high > 0)
    if positive:
        y, u, first, last = (float(part) for part in log_scale(value, standard_error, low, high))
    else:
        y, u, first, last = value, standard_error, low, high
    probability = float(conformity_probability(y, u, first, last, degrees))
    if rule.minimum_probability is not None:
        decision = str(decide_by_probability(probability, rule.minimum_probability))
        zone: tuple[float | None, float | None] = (None, None)
        factor = None
    else:
        factor = coverage_on(rule.coverage_factor, degrees)
        share = rule.guard_band_factor or 0.0
        decision = str(decide_by_guard_band(y, u, first, last, share, factor))
        accepted = acceptance(u, first, last, share, factor)
        ends = (float(accepted.lower), float(accepted.upper))
        zone = _known(ends[0], positive), _known(ends[1], positive)
    word = _word(decision)
    risk = float(specific_risk(probability, word))
    return Judgement(
        word,
        probability,
        None if math.isnan(risk) else risk,
        *limits,
        *zone,
        factor,
        None if math.isinf(degrees) else degrees,
    )


def degrees_of_lot(
    value: float, standard_error: float, plate_read_count: int, shared_relative_error: float = 0.0
) -> float | None:
    """Effective degrees of freedom of a lot's standard error, or None with one plate read.

        nu = (n - 1) (u / u_own)^4

    (Welch and Satterthwaite; GUM, JCGM 100:2008, G.4.1): the part that the plate reads show rests on n - 1,
    the error of the assay's calibration is taken as known.

    Parameters
    ----------
    value, standard_error
        With the shared error in.
    plate_read_count
        Plate reads that the value rests on.
    shared_relative_error
        Relative error of the assay's calibration.
    """
    if plate_read_count < FEWEST_PLATE_READS:
        return None
    total = standard_error**2
    own = total - (value * shared_relative_error) ** 2
    return math.inf if own <= 0 else (plate_read_count - 1) * (total / own) ** 2


def coverage_on(coverage_factor: float, degrees: float) -> float:
    """The coverage factor that has the same level on these degrees of freedom (JCGM 100:2008, G.6.4)."""
    if math.isinf(degrees):
        return coverage_factor
    return float(t_distribution.ppf(norm.cdf(coverage_factor), degrees))


def decide_lot(decisions: Iterable[str]) -> Decision:
    """What decisions on constants make of a lot: one that does not conform decides, else all must conform."""
    found = list(decisions)
    if DOES_NOT_CONFORM in found:
        return DOES_NOT_CONFORM
    return CONFORMS if found and all(each == CONFORMS for each in found) else UNDECIDED


def _why_not(value: float | None, standard_error: float | None, degrees: float | None) -> str | None:
    if value is None or not math.isfinite(value):
        return "there is no value"
    if standard_error is None or not math.isfinite(standard_error):
        return "its uncertainty is not known"
    if degrees is None:
        return "one plate read only, which does not show the spread between plate reads"
    return None


def _known(end: float, positive: bool) -> float | None:
    return None if math.isnan(end) else math.exp(end) if positive else end


def _word(decision: str) -> Decision:
    return (
        CONFORMS if decision == CONFORMS else DOES_NOT_CONFORM if decision == DOES_NOT_CONFORM else UNDECIDED
    )
