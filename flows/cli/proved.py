"""What `halfsat site prove` found, as tables, CSV and a figure. Computes nothing."""

from __future__ import annotations

import math
from collections.abc import Sequence

from rich.console import Console

from checks.gates import resolve_limits
from flows.cli.tables import heading, plain_table
from flows.proving.bench import ProvingBench, common_bench, site_bench
from flows.proving.characteristics import Clean, Curve
from flows.site.configuration import Configuration
from flows.site.layout import Site
from models.errors import ConfigurationError

SHARES = (0.50, 0.95)
PLATES_OF_A_LOT = (1, 2, 3, 5)


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
