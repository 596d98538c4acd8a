"""`halfsat site prove`: what an assay's gates catch, and how often they hold what is clean.

What simulates, prints and draws is imported when the command runs, so that help answers at once.
"""

from __future__ import annotations

import csv
import os
import sys
from pathlib import Path

import click

from flows.cli.options import site_option
from flows.site.layout import open_site


@click.command("prove")
@click.option("--assay", "assay_name", required=True, help="The assay to prove, as its file is called.")
@click.option("--plates", default=8, show_default=True, help="Plates simulated for each size of a fault.")
@click.option("--seed", default=1, show_default=True, help="Seed of the simulation: the same gives the same.")
@click.option(
    "--format",
    "form",
    type=click.Choice(["table", "csv"]),
    default="table",
    show_default=True,
    help="Output.",
)
@click.option(
    "--plot",
    type=click.Path(dir_okay=False, path_type=Path),
    help="Draw catch rates against fault sizes into FILE.svg, .png or .pdf.",
)
@click.option("--processes", default=os.cpu_count() or 1, show_default="one a core", help="Processes to use.")
@site_option
def prove(
    assay_name: str, plates: int, seed: int, form: str, plot: Path | None, processes: int, site_dir: Path
) -> None:
    """Prove what the gates of an assay catch.

    Simulates plates with the assay's own layout, constants, noise and limits, as the site's plates show them,
    and takes them through the whole line: how often each gate holds a clean subject, from which size of each
    fault on it is caught, and which change of kcat/K against the reference the assay can see.
    """
    if plot is not None and plot.suffix not in (".svg", ".png", ".pdf"):
        raise click.UsageError(f"{plot.name} is no figure: end it in .svg, .png or .pdf")
    if plates < 1:
        raise click.UsageError("at least one plate a size is needed")
    from rich.console import Console
    from rich.progress import track

    from flows.cli.proved import bench_of, csv_rows, drawing, show
    from flows.cli.tables import console
    from flows.proving.characteristics import Clean, Curve, run_tasks, tasks
    from flows.site.configuration import load_configuration

    site = open_site(site_dir)
    bench = bench_of(site, load_configuration(site.config), assay_name)
    parts = tasks(bench, plates, seed)
    # Progress goes to standard error, so that a CSV can be piped.
    found = [
        result
        for _, result in track(
            run_tasks(parts, processes), "simulating", total=len(parts), console=Console(stderr=True)
        )
    ]
    clean = next(result for result in found if isinstance(result, Clean))
    curves = [result for result in found if isinstance(result, Curve)]
    if form == "csv":
        csv.writer(sys.stdout, lineterminator="\n").writerows(csv_rows(clean, curves))
    else:
        show(console(), bench, clean, curves)
    if plot is not None:
        plot.write_bytes(drawing(curves, plot.suffix))
