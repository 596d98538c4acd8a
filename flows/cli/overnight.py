"""`halfsat overnight`: one pass now."""

from __future__ import annotations

from datetime import UTC, datetime
from pathlib import Path

import click

from flows.cli.options import site_option
from flows.cli.root import EXIT_ATTENTION
from flows.overnight.launch import ROUTES, Route
from flows.site.layout import open_site


@click.command("overnight")
@site_option
@click.option("--strict", is_flag=True, help="Exit with 1 if something is held, waiting or in quarantine.")
@click.option(
    "--via",
    type=click.Choice(ROUTES),
    default="auto",
    show_default=True,
    help="process: in this process. prefect: as a Prefect flow, on the site's server if `halfsat serve` "
    "runs, else on one of its own. auto: prefect where the site's server runs, else process.",
)
def command(site_dir: Path, strict: bool, via: Route) -> None:
    """Run one pass now: pull, stage, gate, fit, load.

    What cannot be read goes to quarantine with its reason; what cannot be trusted waits for a person.
    A second pass over the same files does nothing.
    """
    from flows.cli.night import show_lots, show_pass
    from flows.cli.tables import console
    from flows.overnight.launch import run_pass_by

    site = open_site(site_dir)
    report = run_pass_by(via, site, lambda: datetime.now(UTC))
    screen = console()
    show_pass(screen, site, report)
    if not report.nothing_new:
        show_lots(screen, site)
        screen.print()
        screen.print(f'Next: halfsat history --site {site_dir} "select * from held_wells"')
    if strict and report.needs_attention:
        raise SystemExit(EXIT_ATTENTION)
