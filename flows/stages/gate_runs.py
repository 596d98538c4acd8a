"""Keep what the gates ran on: every suite with its result as JSON, so that an auditor can read it later.

The rows go into the warehouse, the documents below the lake; nothing here judges.
"""

from __future__ import annotations

import json
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import Any, Literal

import pandas as pd

from checks.assess import GateRun
from checks.structure import StructureReport
from flows.site.durable import write_durably
from flows.site.layout import Site
from models.identity import canonical_json, content_id, result_id
from models.records.assay import SettingValue
from models.tables import GATE_RUNS

NO_RECIPE = "none"
BATCH = "batch_analysis_ids"
"""Key of a document: the plate reads of the batch that its suite ran in, in order, whatever their recipe."""

Condition = Literal["unchanged", "changed", "missing"]


@dataclass(frozen=True)
class KeptRun:
    """A document as it lies on the disk.

    Attributes
    ----------
    sha256
        Digest of its bytes; None where it is missing.
    condition
        Whether it is what was written: its id in the warehouse is a digest of its bytes, its recipe and the
        batch that it names.
    document
        What it says; None unless unchanged.
    """

    sha256: str | None
    condition: Condition
    document: Mapping[str, Any] | None


def gates_off(limits: Mapping[str, Mapping[str, SettingValue]]) -> tuple[str, ...]:
    """Names of the gates that these limits, of a recipe or a document, turn off."""
    return tuple(gate for gate, settings in limits.items() if not settings.get("on", True))


def structure_run(report: StructureReport) -> GateRun:
    """A run of the structure suite, which no recipe changes."""
    return GateRun(
        "structure", NO_RECIPE, report.expectation_count, report.row_count, report.success, report.document
    )


def keep_runs(site: Site, pass_id: str, runs: Sequence[GateRun], analysis_ids: Sequence[str]) -> pd.DataFrame:
    """Write each run's document and return the rows of `gate_runs`.

    Parameters
    ----------
    site
        Where the documents are kept.
    pass_id
        The pass they belong to.
    runs
        Suites with their results.
    analysis_ids
        Plate reads of the batch they ran on; none for the structure suite.
    """
    rows = []
    for run in runs:
        content = canonical_json({**run.document, BATCH: list(analysis_ids)}).encode()
        gate_run_id = _run_id(run.suite, run.recipe_id, analysis_ids, content)
        path = site.gate_documents / f"{gate_run_id}.json"
        write_durably(path, content, mode=0o444)
        rows.append(
            {
                "gate_run_id": gate_run_id,
                "pass_id": pass_id,
                "recipe_id": run.recipe_id,
                "suite": run.suite,
                "expectation_count": run.expectation_count,
                "row_count": run.row_count,
                "success": run.success,
                "file": path.relative_to(site.root).as_posix(),
            }
        )
    return pd.DataFrame(rows, columns=GATE_RUNS.column_names)


def read_run(site: Site, gate_run_id: str, suite: str, recipe_id: str, file: str) -> KeptRun:
    """Read a kept document and check it against its id.

    Parameters
    ----------
    site
        The site.
    gate_run_id, suite, recipe_id, file
        As its row of `gate_runs` has them.
    """
    path = site.root / Path(file)
    try:
        content = path.read_bytes()
    except (FileNotFoundError, IsADirectoryError):
        return KeptRun(None, "missing", None)
    sha256 = content_id(content)
    try:
        document = json.loads(content)
        batch = document.get(BATCH)
    except (ValueError, RecursionError, AttributeError):
        return KeptRun(sha256, "changed", None)
    if not isinstance(batch, list) or _run_id(suite, recipe_id, batch, content) != gate_run_id:
        return KeptRun(sha256, "changed", None)
    return KeptRun(sha256, "unchanged", document)


def _run_id(suite: str, recipe_id: str, analysis_ids: Sequence[str], content: bytes) -> str:
    return result_id("gate_run", suite, recipe_id, list(analysis_ids), content_id(content))
