"""One run of a Great Expectations suite over a metrics table: which rows each expectation flags.

Great Expectations takes seconds to import, so it is imported here only when a suite is run. This module
knows no gate: it takes expectations and gives back row positions and a document.
"""

from __future__ import annotations

import json
from collections.abc import Sequence
from dataclasses import dataclass
from functools import cache
from typing import Any

import numpy as np
import pandas as pd

from models.errors import HalfsatError
from models.identity import Json, canonical_json

ROW = "row_number_in_table"


class ExpectationFailed(HalfsatError):
    """An expectation could not be evaluated: neither met nor breached."""


@dataclass(frozen=True)
class Flagged:
    """Rows that one expectation flags.

    Attributes
    ----------
    meta
        What the expectation carries: gate, rule, severity.
    rows
        Positions in the table, ascending.
    """

    meta: dict[str, str]
    rows: np.ndarray


@dataclass(frozen=True)
class Validation:
    """Outcome of a suite: flagged rows in the suite's order, success, and suite and result as JSON."""

    flagged: tuple[Flagged, ...]
    success: bool
    document: dict[str, Json]


def validate(name: str, expectations: Sequence[Any], table: pd.DataFrame, keys: Sequence[str]) -> Validation:
    """Run a suite of expectations over a table.

    Parameters
    ----------
    name
        Name of the suite.
    expectations
        Great Expectations expectations, each with its `meta`; no two alike.
    table
        One row a subject.
    keys
        Columns that identify a row in the document.

    Raises
    ------
    ExpectationFailed
        If an expectation raised an exception, such as on a column that is not there.
    """
    import great_expectations as gx

    suite = gx.ExpectationSuite(name=name, expectations=list(expectations))
    numbered = table.assign(**{ROW: np.arange(len(table))})
    outcome = (
        _batch_definition()
        .get_batch(batch_parameters={"dataframe": numbered})
        .validate(
            suite,
            result_format={
                "result_format": "COMPLETE",
                "unexpected_index_column_names": [ROW],
                "return_unexpected_index_query": False,
            },
        )
    )
    suite_document = suite.to_json_dict()
    # Results come back in an order of their own and without meta: type and arguments say whose they are.
    results = {
        _identity(result["expectation_config"]): result for result in outcome.to_json_dict()["results"]
    }
    if len(results) != len(suite_document["expectations"]):
        raise ExpectationFailed(f"suite {name} holds the same expectation twice", where="checks")
    flagged, documents = [], []
    for configuration in suite_document["expectations"]:
        result = results[_identity(configuration)]
        rows = _flagged_rows(name, configuration, result)
        flagged.append(Flagged(dict(configuration["meta"]), rows))
        documents.append(_result_document(configuration, result, table, rows, keys))
    success = all(entry.rows.size == 0 for entry in flagged)
    document: dict[str, Json] = {
        "suite": json.loads(json.dumps(suite_document)),
        "result": {"success": success, "row_count": len(table), "results": documents},
    }
    return Validation(tuple(flagged), success, document)


@cache
def _batch_definition() -> Any:
    """The one in-memory source that every table passes through."""
    import os

    os.environ.setdefault("GX_ANALYTICS_ENABLED", "false")
    import great_expectations as gx
    from great_expectations.data_context.types.base import ProgressBarsConfig

    context = gx.get_context(mode="ephemeral")
    context.variables.progress_bars = ProgressBarsConfig(globally=False)
    asset = context.data_sources.add_pandas("halfsat").add_dataframe_asset("metrics")
    return asset.add_batch_definition_whole_dataframe("batch")


def _identity(configuration: dict[str, Any]) -> str:
    kwargs = {key: value for key, value in configuration["kwargs"].items() if key != "batch_id"}
    return canonical_json({"type": configuration["type"], "kwargs": kwargs})


def _flagged_rows(name: str, configuration: dict[str, Any], result: dict[str, Any]) -> np.ndarray:
    found = result["result"]
    # A raised exception leaves an empty result; its information is keyed by metric.
    if "unexpected_count" not in found:
        raise ExpectationFailed(
            f"{configuration['type']} on {configuration['kwargs'].get('column') or configuration['kwargs']} "
            f"could not be evaluated: {_exception_text(result.get('exception_info'))}",
            where=f"suite {name}",
        )
    rows = [entry[ROW] for entry in found.get("unexpected_index_list") or ()]
    if len(rows) != found["unexpected_count"]:
        raise ExpectationFailed(
            f"{configuration['type']} does not say which rows it flags", where=f"suite {name}"
        )
    return np.sort(np.array(rows, dtype=np.intp))


def _exception_text(information: Any) -> str:
    if isinstance(information, dict):
        if message := information.get("exception_message"):
            return str(message).splitlines()[0]
        texts = [_exception_text(value) for value in information.values() if isinstance(value, dict)]
        return texts[0] if texts else "no reason given"
    return "no reason given"


def _result_document(
    configuration: dict[str, Any],
    result: dict[str, Any],
    table: pd.DataFrame,
    rows: np.ndarray,
    keys: Sequence[str],
) -> dict[str, Json]:
    """What an auditor needs of one result: counts and ids, without values, times or run ids."""
    found = result["result"]
    ids = table.iloc[rows][list(keys)].astype(str)
    grouped: dict[str, Json]
    if len(keys) == 1:
        flagged: Json = ids[keys[0]].tolist()
    else:
        rest = ids[list(keys[1:])].agg(" ".join, axis=1) if len(ids) else pd.Series(dtype=str)
        grouped = {str(key): part.tolist() for key, part in rest.groupby(ids[keys[0]], sort=False)}
        flagged = grouped
    return {
        "type": configuration["type"],
        "meta": dict(configuration["meta"]),
        "success": bool(rows.size == 0),
        "element_count": int(found["element_count"]),
        "missing_count": int(found.get("missing_count") or 0),
        "unexpected_count": int(found["unexpected_count"]),
        "flagged": flagged,
    }
