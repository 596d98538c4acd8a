"""`halfsat lot`: what a lot comes to, against its specification and its reference."""

from __future__ import annotations

import json
from pathlib import Path

import click

from flows.cli.options import site_option
from flows.site.layout import open_site


@click.command("lot")
@click.argument("lot", metavar="LOT")
@site_option
@click.option("--assay", metavar="NAME", help="One assay only, where the lot was measured in several.")
@click.option(
    "--specification",
    "specification_file",
    type=click.Path(exists=True, dir_okay=False, path_type=Path),
    help="Hold the lot against this specification file, such as an earlier version.",
)
@click.option(
    "--format",
    "output_format",
    type=click.Choice(["table", "json"]),
    default="table",
    show_default=True,
    help="A table for the terminal, or all of it as JSON.",
)
def command(
    lot: str, site_dir: Path, assay: str | None, specification_file: Path | None, output_format: str
) -> None:
    """Show what a lot comes to.

    Its constants over all plate reads with the spread between them, the decision against its specification,
    the comparison with the reference lot, and the reference lot's control charts. Nothing is stored: the same
    results and the same specification (by its digest) give the same decision at any time.
    """
    from flows.cli.tables import console
    from flows.history.lot_json import lot_json
    from flows.history.lot_text import lot_view
    from flows.history.lots import lot_records
    from flows.site.configuration import read_record
    from models.records.lot_specification import LotSpecification

    site = open_site(site_dir)
    given = None if specification_file is None else read_record(specification_file, LotSpecification)
    records = lot_records(site, lot, assay, given)
    if output_format == "json":
        click.echo(json.dumps([lot_json(each) for each in records], indent=2, ensure_ascii=False))
        return
    screen = console()
    for record in records:
        screen.print()
        screen.print(lot_view(record))
    screen.print()
    screen.print(f"Next: halfsat lineage {records[0].constants[0].lot_value_id[:12]}", soft_wrap=True)
