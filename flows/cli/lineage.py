"""`halfsat lineage`: from a result back to the export's bytes."""

from __future__ import annotations

from pathlib import Path

import click

from flows.cli.options import site_option
from flows.site.layout import open_site


@click.command("lineage")
@click.argument("result_id", metavar="ID")
@site_option
def command(result_id: str, site_dir: Path) -> None:
    """Trace a result back to the export's bytes.

    ID is that of an estimate, fit, series, analysis, lot value, plate read or file, or the first digits of
    it, as the views show them.
    """
    from flows.cli.tables import console
    from flows.history.lineage import lineage, render

    site = open_site(site_dir)
    console().print(render(lineage(site, result_id)))
