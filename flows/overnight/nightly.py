"""One pass: pull, stage, gate, fit, load, publish. The only place that knows the order.

Each step goes through `run`, which calls it plainly or as a Prefect task; the steps themselves do not know
which. A pass that is killed leaves nothing half done: the next one goes on from what is stored.
"""

from __future__ import annotations

import logging
from collections.abc import Callable, Iterator, Sequence
from dataclasses import dataclass
from datetime import datetime
from typing import Protocol, TypeVar

import pandas as pd

from flows.ledger import append, append_all
from flows.overnight.pending import Ready, find_pending, load_work
from flows.overnight.report import PassReport, log_report
from flows.site.configuration import Configuration, load_configuration
from flows.site.layout import Site
from flows.site.lock import pass_lock
from flows.site.log import about, site_log
from flows.site.recipes import code_version, keep_recipe
from flows.stages.fit import fit_batch
from flows.stages.gate import gate_batch
from flows.stages.gate_runs import gates_off, keep_runs
from flows.stages.load import load_results, repair
from flows.stages.lots import current_estimates, lot_values
from flows.stages.publish import publish_results
from flows.stages.pull import known_files, pull
from flows.stages.rate import rate_batch
from flows.stages.stage_files import StagedFiles, stage_files
from flows.stages.work import FittedBatch, GatedBatch, PlateWork
from flows.warehouse.writer import loader
from models.identity import result_id
from models.tables import ANALYSES, FILES, GATE_RUNS, PASSES, PLATE_MAPS, PLATE_READS, RECIPES, SERIES, WELLS

log = logging.getLogger(__name__)

Result = TypeVar("Result")
Clock = Callable[[], datetime]


class Run(Protocol):
    """How a step is carried out."""

    def __call__(self, name: str, step: Callable[..., Result], *given: object) -> Result:
        """Carry the step out under this name and return what it returns."""
        ...


def run_plainly(name: str, step: Callable[..., Result], *given: object) -> Result:
    """Call the step in this process, with nothing round it."""
    del name
    return step(*given)


@dataclass(frozen=True)
class _Pass:
    """What every step of one pass needs."""

    site: Site
    configuration: Configuration
    pass_id: str
    started_at: datetime
    clock: Clock


def run_pass(site: Site, clock: Clock, run: Run = run_plainly) -> PassReport:
    """Run one pass over what has arrived.

    Parameters
    ----------
    site
        The site. Its lock is held for the whole pass.
    clock
        Tells the time, UTC.
    run
        How each step is carried out.

    Returns
    -------
    PassReport
        What was accepted, refused, analysed and held.

    Raises
    ------
    SiteError
        If another pass runs, or raw archive, lake or warehouse are damaged.
    ConfigurationError
        If a configuration file does not say what it must.
    """
    started_at = clock()
    pass_id = result_id("pass", started_at.isoformat())
    with pass_lock(site), site_log(site, started_at), about(pass_id=pass_id):
        try:
            night = _Pass(site, load_configuration(site.config), pass_id, started_at, clock)
            report = _run_steps(night, run)
        except Exception:
            log.exception("the pass failed; the next one goes on from what is stored")
            raise
        log_report(report)
    return report


def _run_steps(night: _Pass, run: Run) -> PassReport:
    site, started_at = night.site, night.started_at
    repair(site)
    append(site, "pass_started", {"pass_id": night.pass_id}, at=started_at)
    staged = _take_in(night, run)
    ready, waiting = find_pending(site, night.configuration)
    analysis_ids: list[str] = []
    held_count = 0
    off: list[tuple[str, tuple[str, ...]]] = []
    for part in _batches(ready, night.configuration.settings.plates_per_batch):
        works, unconverted = load_work(night.site, part)
        waiting += unconverted
        if not works:
            continue
        gated = run("gate", gate_works, works)
        fitted = run("fit", fit_batch, gated)
        run("load", _load_batch, night, fitted)
        analysis_ids += [work.analysis_id for work in fitted.plates]
        held_count += _held(fitted)
        off += [(work.recipe.assay_name, gates_off(work.recipe.limits)) for work in fitted.plates]
    finished_at = night.clock()
    if staged.files or analysis_ids:
        load_results(site, night.pass_id, _pass_row(night, staged, analysis_ids, finished_at), finished_at)
    append(
        site,
        "pass_finished",
        {"pass_id": night.pass_id, "analysis_count": len(analysis_ids), "file_count": len(staged.files)},
        at=finished_at,
    )
    run("publish", publish_results, site, finished_at)
    return PassReport(
        pass_id=night.pass_id,
        started_at=started_at,
        finished_at=finished_at,
        export_count=staged.count("export"),
        map_count=staged.count("plate_map"),
        quarantined=tuple(
            (str(row["file_name"]), str(row["reason"]))
            for row in staged.files
            if row["kind"] == "quarantined"
        ),
        waiting=tuple(waiting),
        plates_read=tuple(str(row["plate_id"]) for row in staged.plate_reads),
        analysis_ids=tuple(analysis_ids),
        held_count=held_count,
        gates_off=tuple(dict.fromkeys(off)),
    )


def _take_in(night: _Pass, run: Run) -> StagedFiles:
    """Pull new files and stage them; what they hold is loaded before anything is analysed."""
    known = known_files(night.site)
    pulled = run("pull", pull, night.site, night.configuration.settings, night.started_at, known)
    if not pulled:
        return StagedFiles()
    staged = run("stage", stage_files, night.site, night.configuration, pulled)
    now = night.clock()
    tables = {
        FILES.name: pd.DataFrame(staged.files).assign(pass_id=night.pass_id),
        PLATE_MAPS.name: pd.DataFrame(staged.plate_maps, columns=PLATE_MAPS.column_names),
        PLATE_READS.name: pd.DataFrame(staged.plate_reads, columns=PLATE_READS.column_names),
        GATE_RUNS.name: keep_runs(night.site, night.pass_id, staged.runs, ()),
    }
    load_results(night.site, night.pass_id, tables, now)
    return staged


def gate_works(works: Sequence[PlateWork]) -> GatedBatch:
    """Measure the rates of a batch and hold them against the gates."""
    return gate_batch(rate_batch(works))


def _load_batch(night: _Pass, fitted: FittedBatch) -> None:
    """Store a batch, then what the lots in it come to."""
    now = night.clock()
    recipes = {work.recipe.recipe_id: work.recipe for work in fitted.plates}
    new = [recipe for recipe in recipes.values() if keep_recipe(night.site, recipe)]
    append_all(
        night.site,
        [("recipe_kept", {"recipe_id": recipe.recipe_id, "assay": recipe.assay_name}) for recipe in new],
        at=now,
    )
    analysis_ids = [work.analysis_id for work in fitted.plates]
    analyses = fitted.tables[ANALYSES.name].assign(
        pass_id=night.pass_id, computed_at=now, superseded_by=None, revision=_revisions(night.site, fitted)
    )
    tables = {
        **fitted.tables,
        ANALYSES.name: analyses,
        RECIPES.name: pd.DataFrame([recipe.row() for recipe in recipes.values()]),
        GATE_RUNS.name: keep_runs(night.site, night.pass_id, fitted.runs, analysis_ids),
    }
    load_results(night.site, night.pass_id, tables, now)
    assay_of = analyses.set_index("analysis_id")["assay"]
    series = fitted.tables[SERIES.name]
    touched = series.assign(assay=series["analysis_id"].map(assay_of))
    values, sources = lot_values(current_estimates(night.site, touched), night.pass_id)
    load_results(night.site, night.pass_id, {"lot_values": values, "lot_value_sources": sources}, now)


def _revisions(site: Site, fitted: FittedBatch) -> list[int]:
    """Number of each plate read's new revision."""
    with loader(site) as connection:
        rows = connection.sql("SELECT plate_read_id, max(revision) FROM analyses GROUP BY 1").fetchall()
    latest = {str(plate_read_id): int(revision) for plate_read_id, revision in rows}
    return [latest.get(work.plate_read_id, 0) + 1 for work in fitted.plates]


def _batches(ready: Sequence[Ready], size: int) -> Iterator[Sequence[Ready]]:
    for start in range(0, len(ready), size):
        yield ready[start : start + size]


def _held(fitted: FittedBatch) -> int:
    return sum(int((fitted.tables[name]["standing"] == "held").sum()) for name in (WELLS.name, SERIES.name))


def _pass_row(
    night: _Pass, staged: StagedFiles, analysis_ids: Sequence[str], finished_at: datetime
) -> dict[str, pd.DataFrame]:
    row = {
        "pass_id": night.pass_id,
        "started_at": night.started_at,
        "finished_at": finished_at,
        "code_version": code_version(),
        "export_count": staged.count("export"),
        "map_count": staged.count("plate_map"),
        "quarantined_count": staged.count("quarantined"),
        "analysis_count": len(analysis_ids),
    }
    return {PASSES.name: pd.DataFrame([row])}
