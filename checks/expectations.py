"""Expectations of the gates, in Great Expectations' own terms: importing this imports Great Expectations.

So only `expectations` of a gate, `checks.structure` and `checks.validation` import it, when they run.
Unknown values are no business of the rules: core column rules skip them and the rules here do not flag
them. Every gate carries `expect_assessed` beside its rules, which flags each row that could not be judged.
"""
# Great Expectations ships without types: its classes are Any to the type checker.
# mypy: disallow-subclassing-any=False, disallow-untyped-decorators=False

from __future__ import annotations

import os
from typing import Any, ClassVar, Literal

import pandas as pd

os.environ.setdefault("GX_ANALYTICS_ENABLED", "false")

from great_expectations.execution_engine import PandasExecutionEngine
from great_expectations.expectations import core
from great_expectations.expectations.expectation import MulticolumnMapExpectation
from great_expectations.expectations.metrics.map_metric_provider import (
    MulticolumnMapMetricProvider,
    multicolumn_condition_partial,
)

from checks.gates.blank_drift import blank_share

Severity = Literal["hold", "void", "none"]
NOT_ASSESSED = "not assessed"
STATES = ("assessed", NOT_ASSESSED, "not applicable")
DOMAIN_KEYS = ("batch_id", "table", "column_list", "row_condition", "condition_parser", "ignore_row_if")


def column_name(gate: str, metric: str) -> str:
    """Name of a gate's metric in the metrics table of a batch."""
    return f"{gate}__{metric}"


class NotBothBeyond(MulticolumnMapMetricProvider):
    """Rows in which not both columns lie beyond their limits."""

    condition_metric_name = "multicolumn_values.not_both_beyond"
    condition_domain_keys = DOMAIN_KEYS
    condition_value_keys = ("limit", "other_limit")

    @multicolumn_condition_partial(engine=PandasExecutionEngine)
    def _pandas(
        cls,  # noqa: N805 (the decorator hands over the class)
        column_list: pd.DataFrame,
        limit: float,
        other_limit: float,
        **_: Any,
    ) -> pd.Series:
        size, certainty = column_list.iloc[:, 0].abs(), column_list.iloc[:, 1].abs()
        return ~((size > limit) & (certainty >= other_limit))


class ExpectNotBothBeyond(MulticolumnMapExpectation):
    """Expect that no row has |first| above `limit` together with |second| at or above `other_limit`."""

    limit: float
    other_limit: float
    map_metric: ClassVar[str] = NotBothBeyond.condition_metric_name
    success_keys: ClassVar[tuple[str, ...]] = ("limit", "other_limit", "mostly")


class BlankShareWithin(MulticolumnMapMetricProvider):
    """Rows whose blank is a small share of the rate, or does not stand out of its noise."""

    condition_metric_name = "multicolumn_values.blank_share_within"
    condition_domain_keys = DOMAIN_KEYS
    condition_value_keys = ("limit", "t_limit", "low_rate_share")

    @multicolumn_condition_partial(engine=PandasExecutionEngine)
    def _pandas(
        cls,  # noqa: N805 (the decorator hands over the class)
        column_list: pd.DataFrame,
        limit: float,
        t_limit: float,
        low_rate_share: float,
        **_: Any,
    ) -> pd.Series:
        blank, raw, highest, blank_t = (column_list.iloc[:, k] for k in range(4))
        share = pd.Series(blank_share(blank, raw, highest, low_rate_share), index=blank.index)
        return ~((share > limit) & (blank_t >= t_limit))


class ExpectBlankShareWithin(MulticolumnMapExpectation):
    """Expect that a blank which stands out of its noise is not above `limit` of the rate.

    Columns: rate of the blank, raw rate, highest raw rate of the series, blank in standard errors.
    """

    limit: float
    t_limit: float
    low_rate_share: float
    map_metric: ClassVar[str] = BlankShareWithin.condition_metric_name
    success_keys: ClassVar[tuple[str, ...]] = ("limit", "t_limit", "low_rate_share", "mostly")


def at_most(gate: str, metric: str, limit: float, *, rule: str, severity: Severity = "hold") -> Any:
    """Expect a metric not above its limit."""
    return core.ExpectColumnValuesToBeBetween(
        column=column_name(gate, metric), max_value=limit, meta=_meta(gate, rule, severity)
    )


def at_least(gate: str, metric: str, limit: float, *, rule: str, severity: Severity = "hold") -> Any:
    """Expect a metric not below its limit."""
    return core.ExpectColumnValuesToBeBetween(
        column=column_name(gate, metric), min_value=limit, meta=_meta(gate, rule, severity)
    )


def none_of(gate: str, metric: str, words: tuple[str, ...], *, rule: str) -> Any:
    """Expect that a metric is none of these words."""
    return core.ExpectColumnValuesToNotBeInSet(
        column=column_name(gate, metric), value_set=list(words), meta=_meta(gate, rule, "hold")
    )


def not_both(gate: str, metrics: tuple[str, str], limits: tuple[float, float], *, rule: str) -> Any:
    """Expect that a metric is not above its limit while another shows that it is no accident."""
    return ExpectNotBothBeyond(
        column_list=[column_name(gate, metric) for metric in metrics],
        limit=limits[0],
        other_limit=limits[1],
        ignore_row_if="never",
        meta=_meta(gate, rule, "hold"),
    )


def blank_share_within(
    gate: str,
    metrics: tuple[str, str, str, str],
    *,
    limit: float,
    t_limit: float,
    low_rate_share: float,
    rule: str,
) -> Any:
    """Expect a blank that is a small share of the rate or does not stand out of its noise."""
    return ExpectBlankShareWithin(
        column_list=[column_name(gate, metric) for metric in metrics],
        limit=limit,
        t_limit=t_limit,
        low_rate_share=low_rate_share,
        ignore_row_if="never",
        meta=_meta(gate, rule, "hold"),
    )


def assessed(gate: str) -> Any:
    """Expect that a gate could judge every row it applies to."""
    return core.ExpectColumnValuesToNotBeInSet(
        column=column_name(gate, "state"), value_set=[NOT_ASSESSED], meta=_meta(gate, "not_assessed", "none")
    )


def _meta(gate: str, rule: str, severity: Severity) -> dict[str, str]:
    return {"gate": gate, "rule": rule, "severity": severity}
