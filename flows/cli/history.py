"""`halfsat history`: SQL on the published warehouse."""

from __future__ import annotations

from pathlib import Path

import click

from flows.cli.options import site_option
from flows.cli.tables import console
from flows.history.output import FILE_FORMATS, encode, print_answer
from flows.site.layout import open_site
from flows.warehouse.reader import QueryLimits, run_query


@click.command("history")
@click.argument("sql", metavar="SQL")
@site_option
@click.option(
    "--format",
    "output_format",
    type=click.Choice(["table", *FILE_FORMATS]),
    default="table",
    show_default=True,
    help="How the answer is written.",
)
@click.option(
    "--output",
    type=click.Path(dir_okay=False, path_type=Path),
    help="File to write to instead of the terminal; needed for parquet and xlsx.",
)
@click.option(
    "--seconds", type=click.FloatRange(0.1, 3600), default=30.0, show_default=True, help="Longest run."
)
def command(sql: str, site_dir: Path, output_format: str, output: Path | None, seconds: float) -> None:
    """Ask the warehouse a question in SQL.

    SQL is one SELECT over the published copy of the warehouse: no files, no network, no settings. Tables and
    views are described in flows/warehouse/TABLES.md; "show tables" lists them.
    """
    site = open_site(site_dir)
    answer = run_query(site, sql, QueryLimits(time_s=seconds))
    if output_format == "table":
        print_answer(answer, console())
        return
    content = encode(answer, output_format)
    if output is not None:
        output.write_bytes(content)
        click.echo(f"{answer.num_rows} rows in {output}")
    elif output_format in ("parquet", "xlsx"):
        raise click.UsageError(f"{output_format} is no text: name a file with --output")
    else:
        click.echo(content.decode(), nl=False)
