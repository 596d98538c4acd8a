"""The scheduled flow on the site's Prefect server: what an earlier one left is put away, then runs go on.

Importing this module imports Prefect; the server must answer already.
"""

from __future__ import annotations

import asyncio
from collections.abc import Sequence
from datetime import UTC, datetime, timedelta
from typing import Any
from uuid import UUID

from prefect.client.orchestration import get_client
from prefect.client.schemas.filters import FlowRunFilter
from prefect.client.schemas.objects import StateType
from prefect.runner import Runner
from prefect.schedules import Cron, Interval
from prefect.states import Cancelled, Crashed

from flows.overnight.orchestration import overnight
from flows.overnight.schedule import ANCHOR
from flows.site.layout import Site
from flows.site.lock import is_held
from models.records.site_settings import SiteSettings

_UNFINISHED = ("RUNNING", "PENDING", "CANCELLING")


def run_scheduled(site: Site, settings: SiteSettings, *, make_up: bool) -> None:
    """Carry out runs as they come due, until interrupted.

    Parameters
    ----------
    make_up
        Whether one more pass is started at once.
    """
    put_away_unfinished(site)
    runner = Runner(name=settings.name, limit=1, pause_on_shutdown=False)
    deployment_id: UUID = runner.add_deployment(
        overnight.to_deployment(
            name=settings.name, schedules=schedules(settings), parameters={"site_root": str(site.root)}
        )
    )
    put_away_late(deployment_id, datetime.now(UTC))
    if make_up:
        with get_client(sync_client=True) as client:
            client.create_flow_run_from_deployment(deployment_id, name="made-up")
    asyncio.run(runner.start())


def schedules(settings: SiteSettings) -> list[Any]:
    """The site's cron line in its time zone, and its interval, as Prefect wants them."""
    found = [Cron(settings.cron, timezone=settings.time_zone)]
    if settings.every_minutes:
        found.append(Interval(timedelta(minutes=settings.every_minutes), anchor_date=ANCHOR, timezone="UTC"))
    return found


def put_away_unfinished(site: Site) -> int:
    """Mark runs as crashed that a killed process left as running: nobody carries them out any more.

    While a pass holds the site, all are left alone.

    Returns
    -------
    int
        How many there were.
    """
    if is_held(site):
        return 0
    runs = _runs(state={"type": {"any_": list(_UNFINISHED)}})
    with get_client(sync_client=True) as client:
        for run in runs:
            gone = Crashed(message="its process ended unasked; the next pass goes on from there")
            client.set_flow_run_state(run.id, gone, force=True)
    return len(runs)


def put_away_late(deployment_id: UUID, now: datetime) -> int:
    """Cancel runs that were due before now and were not begun: one pass makes up for all of them.

    Returns
    -------
    int
        How many there were.
    """
    runs = _runs(
        deployment_id={"any_": [str(deployment_id)]},
        state={"type": {"any_": [StateType.SCHEDULED.value]}},
        next_scheduled_start_time={"before_": now.isoformat()},
    )
    with get_client(sync_client=True) as client:
        for run in runs:
            client.set_flow_run_state(
                run.id, Cancelled(message="missed while the site was not served"), force=True
            )
    return len(runs)


def _runs(**chosen: object) -> Sequence[Any]:
    with get_client(sync_client=True) as client:
        found: Sequence[Any] = client.read_flow_runs(flow_run_filter=FlowRunFilter.model_validate(chosen))
    return found
