"""`halfsat site prove`: what an assay's gates catch, and how often they hold what is clean.

Prints, writes and draws what flows.proving finds; computes nothing.
"""

from __future__ import annotations

import csv
import math
import os
import sys
from collections.abc import Sequence
from pathlib import Path

import click
from rich.console import Console
from rich.progress import track

from checks.gates import resolve_limits
from flows.cli.options import site_option
from flows.cli.tables import console, heading, plain_table
from flows.proving.bench import ProvingBench, common_bench, site_bench
from flows.proving.characteristics import Clean, Curve, run_tasks, tasks
from flows.site.configuration import Configuration, load_configuration
from flows.site.layout import Site, open_site
from models.errors import ConfigurationError

SHARES = (0.50, 0.95)
PLATES_OF_A_LOT = (1, 2, 3, 5)


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


def bench_of(site: Site, configuration: Configuration, assay_name: str) -> ProvingBench:
    """The bench of an assay: from the site's plates where it has any, else a common one.

    Raises
    ------
    ConfigurationError
        If there is no such assay, or no profile at all.
    """
    if assay_name not in configuration.assays:
        known = ", ".join(sorted(configuration.assays)) or "none"
        raise ConfigurationError(f"there is no assay '{assay_name}'", remedy=f"assays here are {known}")
    if not configuration.profiles:
        raise ConfigurationError("the site has no export profile", remedy="add one to config/profiles")
    assay = configuration.assays[assay_name]
    profile = next(iter(configuration.profiles.values()))
    limits = resolve_limits(configuration.gates, assay.gates)
    if not site.published_link.exists():
        return common_bench(assay_name, assay, profile, limits)
    return site_bench(site, assay_name, assay, profile, limits)


def show(screen: Console, bench: ProvingBench, clean: Clean, curves: Sequence[Curve]) -> None:
    """Print the three tables."""
    heading(screen, f"{bench.assay_name}: what is simulated")
    screen.print(plain_table([("", "left"), ("", "left")], bench.sources))
    heading(screen, "Clean plates: how often each gate holds what is clean")
    headings = [("gate", "left"), ("of", "left"), ("subjects", "right"), ("held", "right"), ("", "right")]
    screen.print(plain_table(headings, [_clean_row(*row) for row in _clean_rows(clean)]))
    share = clean.held_well_count / clean.well_count if clean.well_count else math.nan
    screen.print(f"all gates together hold {share * 100:.2f} % of {clean.well_count} clean wells")
    heading(screen, "Faults: the size from which they are caught")
    names = [("fault", "left"), ("50 % at", "right"), ("95 % at", "right"), ("caught by", "left")]
    screen.print(plain_table(names, [_fault_row(curve) for curve in curves]))
    tried = curves[0].points[0].plates if curves else 0
    screen.print(
        f"read off isotonic regression between sizes of {tried} plates each; a wrong gate may be among those "
        "that catch; –: not caught so often at any size tried"
    )
    heading(screen, "Smallest change of kcat/K against the reference that is seen")
    if math.isfinite(clean.log_ratio_sd):
        rows = [(f"{n}", f"{clean.smallest_change(n) * 100:.1f} %") for n in PLATES_OF_A_LOT]
        screen.print(plain_table([("plates", "right"), ("change", "right")], rows))
        screen.print(
            "two-sided at 5 %, power 80 %; from simulated plates, so without what differs from day to day"
        )
    else:
        screen.print("not known: the layout has no two lots whose kcat/K can be told")


def csv_rows(clean: Clean, curves: Sequence[Curve]) -> list[list[object]]:
    """Everything counted, a row a gate or a fault and size."""
    rows: list[list[object]] = [
        [
            "kind",
            "name",
            "subject",
            "size",
            "unit",
            "tried",
            "large",
            "held",
            "named",
            "large_held",
            "large_named",
            "gates",
        ]
    ]
    for each in clean.gates:
        rows.append(["clean", each.gate, each.subject, "", "", each.subjects, "", each.held, "", "", "", ""])
    for curve in curves:
        trial = curve.trial
        rows += [
            [
                "fault",
                trial.name,
                trial.subject,
                point.size,
                "1" if trial.unit == "%" else trial.unit,
                point.plates,
                point.large,
                point.caught,
                point.named,
                point.large_caught,
                point.large_named,
                " ".join(f"{gate}:{count}" for gate, count in point.gates),
            ]
            for point in curve.points
        ]
    return rows


def drawing(curves: Sequence[Curve], suffix: str) -> bytes:
    """Catch rate against size, a panel a fault."""
    # Here, since drawing takes a second to import and most proofs are not drawn.
    import numpy as np

    from models.figures.drawing import pdf_bytes, png_bytes, svg_bytes
    from models.figures.lines import Line, Panel, draw_panels

    panels = []
    for curve in curves:
        factor = 100.0 if curve.trial.unit == "%" else 1.0
        size = np.array([point.size * factor for point in curve.points])
        caught = np.array([point.caught / point.plates for point in curve.points])
        named = np.array([point.named / point.plates for point in curve.points])
        panels.append(
            Panel(
                curve.trial.name,
                (Line(size, caught, "held"), Line(size, named, "by the right gate")),
                curve.trial.unit,
                "share of plates",
                limits=((0.95, "95 %"), (0.5, "50 %")),
                y_range=(-0.02, 1.05),
            )
        )
    written = {".svg": svg_bytes, ".png": png_bytes, ".pdf": pdf_bytes}[suffix]
    return written(draw_panels(panels, columns=3))


def _clean_rows(clean: Clean) -> list[tuple[str, str, int, int, int]]:
    return [(g.gate, g.subject, g.subjects, g.held, g.not_assessed) for g in clean.gates]


def _clean_row(gate: str, subject: str, subjects: int, held: int, not_assessed: int) -> tuple[str, ...]:
    share = f"{100.0 * held / subjects:.2f} %" if subjects else "–"
    note = f"not assessed {not_assessed}" if not_assessed else ""
    return gate, subject.replace("_", " "), str(subjects), f"{held} ({share})", note


def _fault_row(curve: Curve) -> tuple[str, ...]:
    first = curve.points[0]
    at = [
        ("≤ " if first.caught >= share * first.plates else "") + _size(curve, curve.size_caught(share))
        for share in SHARES
    ]
    return curve.trial.name, *at, ", ".join(curve.caught_by())


def _size(curve: Curve, size: float) -> str:
    if not math.isfinite(size):
        return "–"
    return f"{100.0 * size:.3g} %" if curve.trial.unit == "%" else f"{size:.3g} {curve.trial.unit}"
