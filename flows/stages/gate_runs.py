"""Keep what the gates ran on: every suite with its result as JSON, so that an auditor can read it later.

The rows go into the warehouse, the documents below the lake; nothing here judges.
"""

from __future__ import annotations

from collections.abc import Sequence

import pandas as pd

from checks.assess import GateRun
from checks.structure import StructureReport
from flows.site.durable import write_durably
from flows.site.layout import Site
from models.identity import canonical_json, content_id, result_id
from models.tables import GATE_RUNS

NO_RECIPE = "none"


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
        content = canonical_json(run.document).encode()
        gate_run_id = result_id("gate_run", run.suite, run.recipe_id, list(analysis_ids), content_id(content))
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
