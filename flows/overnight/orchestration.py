"""The pass as a Prefect flow: the same steps in the same order, each of them a task.

Importing this module imports Prefect, which takes seconds; only what needs it imports it.
"""

from __future__ import annotations

from collections.abc import Callable
from datetime import UTC, datetime
from pathlib import Path
from typing import TypeVar

from prefect import flow, task
from prefect.artifacts import create_table_artifact
from prefect.cache_policies import NO_CACHE
from prefect.context import FlowRunContext
from prefect.settings import PREFECT_FLOWS_HEARTBEAT_FREQUENCY, temporary_settings
from prefect.states import Completed, State

from flows.overnight.nightly import run_pass
from flows.overnight.report import PassReport
from flows.overnight.schedule import last_pass_started
from flows.site.layout import Site, open_site
from models.errors import SiteBusy

Result = TypeVar("Result")


def run_as_task(name: str, step: Callable[..., Result], *given: object) -> Result:
    """Carry a step out as a Prefect task: its frames stay in memory and are neither cached nor stored."""
    done: Result = task(step, name=name, cache_policy=NO_CACHE, persist_result=False)(*given)
    return done


# mypy does not follow Prefect; the decorator form is what a scheduled run can find again by its name.
@flow(name="overnight", persist_result=False, validate_parameters=False)  # type: ignore[untyped-decorator]
def overnight(site_root: str) -> PassReport | State:
    """One pass over a site's inbox.

    Parameters
    ----------
    site_root
        The site's folder.

    Returns
    -------
    PassReport or State
        What the pass did. A run of the schedule that another pass has made needless, or whose site is held by
        one, is completed as Skipped.
    """
    site = open_site(Path(site_root))
    due = _due_by_schedule()
    last = last_pass_started(site)
    if due is not None and last is not None and last > due:
        return Completed(name="Skipped", message=f"a pass has run since {due:%Y-%m-%d %H:%M} UTC")
    try:
        report = run_pass(site, lambda: datetime.now(UTC), run_as_task)
    except SiteBusy as busy:
        if due is None:
            raise
        return Completed(name="Skipped", message=str(busy))
    create_table_artifact(key="pass-report", table=[report.counts()], description="What the pass did")
    return report


def _due_by_schedule() -> datetime | None:
    """When the schedule wanted this run; None where a person or a make-up started it."""
    context = FlowRunContext.get()
    run = None if context is None else context.flow_run
    if run is None or not run.auto_scheduled or run.expected_start_time is None:
        return None
    due: datetime = run.expected_start_time
    return due


def run_flow(site: Site) -> PassReport:
    """Run the flow once, on the server that the environment names or on one of Prefect's own.

    Raises
    ------
    HalfsatError
        As `run_pass` does.
    """
    # A pass by hand is watched by a person; joining the heartbeat thread would cost a second.
    with temporary_settings({PREFECT_FLOWS_HEARTBEAT_FREQUENCY: None}):
        report: PassReport = overnight(str(site.root))
    return report
