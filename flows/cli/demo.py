"""`halfsat demo`: a site with one simulated night, run and shown."""

from __future__ import annotations

from datetime import UTC, datetime
from pathlib import Path

import click

from flows.site.layout import open_site


@click.command("demo")
@click.argument(
    "folder", type=click.Path(file_okay=False, path_type=Path), default=Path("halfsat-demo"), required=False
)
def command(folder: Path) -> None:
    """Make a demo site in FOLDER (default: halfsat-demo), run one night on it, and show what came out.

    The firm, its lots and its measurements are invented: plates are simulated from a fixed seed, with known
    constants and with the faults that a real night brings. In a folder that already holds the demo, the
    night's files are dropped again and nothing new is found.
    """
    from flows.cli.night import show_lots, show_pass
    from flows.cli.tables import console
    from flows.demo import write_demo
    from flows.overnight.launch import run_pass_by

    write_demo(folder)
    site = open_site(folder)
    report = run_pass_by("process", site, lambda: datetime.now(UTC))
    screen = console()
    show_pass(screen, site, report)
    show_lots(screen, site)
    screen.print()
    screen.print("Next, in the same folder:")
    for line in (
        f'halfsat history --site {folder} "select * from lot_latest"',
        f'halfsat history --site {folder} "from current_estimates limit 3"',
        f"halfsat lineage --site {folder} ESTIMATE_ID",
        f"halfsat overnight --site {folder}",
    ):
        screen.print(f"  {line}", soft_wrap=True)
