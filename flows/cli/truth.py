"""`halfsat verify`, `halfsat replay` and `halfsat rebuild`: whether what is stored is true, and making it so.

What computes is imported when a command runs, so that help answers at once.
"""

from __future__ import annotations

import csv
import textwrap
from collections.abc import Callable, Iterator, Sequence
from contextlib import contextmanager
from datetime import UTC, datetime
from pathlib import Path
from typing import TYPE_CHECKING

import click

from flows.cli.options import site_option
from flows.cli.root import EXIT_FAILED
from flows.site.layout import open_site

if TYPE_CHECKING:
    from rich.console import Console

    from flows.history.rebuild import RebuildReport
    from flows.history.replay import Replayed, ReplayReport
    from flows.history.verify import VerifyReport

DIFFERENCES_SHOWN = 12


@click.command("verify")
@site_option
def verify_command(site_dir: Path) -> None:
    """Check every hash: ledger, raw files, lake, warehouse.

    Holds each file against the hash that the ledger has of it, and the ledger against its own chain. Names
    every file that is damaged or missing, and what to do about it; mends nothing. That it ran, and what it
    found, goes into the ledger.

    Exit code 3 where anything is damaged or missing.
    """
    from flows.cli.tables import console
    from flows.history.verify import record_verified, verify

    site = open_site(site_dir)
    with _progress() as tell:
        report = verify(site, tell)
    record_verified(site, report, datetime.now(UTC))
    _show_verified(console(), report)
    if report.damages:
        raise SystemExit(EXIT_FAILED)


@click.command("replay")
@click.argument("result_id", metavar="[ID]", required=False)
@click.option("--all", "everything", is_flag=True, help="Replay every result there is.")
@click.option(
    "--other-code", is_flag=True, help="Compare also what another version of halfsat made, and say so."
)
@click.option(
    "--output",
    type=click.Path(dir_okay=False, path_type=Path),
    help="CSV file for every difference there is; the terminal shows the first of each plate.",
)
@site_option
def replay_command(
    result_id: str | None, everything: bool, other_code: bool, output: Path | None, site_dir: Path
) -> None:
    """Compute results again from raw bytes and compare.

    ID is that of an estimate, fit, series, grid, analysis, plate read, lot value, file or recipe, or its
    first digits. The whole analysis that it belongs to is computed again from the export's bytes with the
    kept recipe, and every row and column is compared with what is stored.

    Exit code 3 where anything differs or could not be replayed.
    """
    if everything == (result_id is not None):
        raise click.UsageError("name one ID, or --all")
    from flows.cli.tables import console
    from flows.history.replay import replay

    site = open_site(site_dir)
    with _progress() as tell:
        report = replay(
            site,
            result_id,
            other_code=other_code,
            tell=lambda done, total: tell("analyses", done, total),
        )
    if output is not None:
        _write_differences(output, report)
    _show_replayed(console(), report)
    if report.equal_count < len(report.analyses):
        raise SystemExit(EXIT_FAILED)


@click.command("rebuild")
@site_option
def rebuild_command(site_dir: Path) -> None:
    """Make lake and warehouse again from raw files and ledger.

    What is whole in the lake is used as it is; what is lost or damaged is computed again from raw bytes with
    the kept recipes, and put in place only if it is what the ledger's digests say. The warehouse is made
    anew and published. Stopped in between, it can be run again.

    Exit code 3 where something could not be made again as it was; the warehouse is then left alone.
    """
    from flows.cli.tables import console
    from flows.history.rebuild import rebuild

    site = open_site(site_dir)
    with _progress() as tell:
        report = rebuild(site, datetime.now(UTC), lambda done, total: tell("batches", done, total))
    _show_rebuilt(console(), report)
    if report.failures:
        raise SystemExit(EXIT_FAILED)


@contextmanager
def _progress() -> Iterator[Callable[[str, int, int], None]]:
    """A bar on standard error while something long goes on; nothing where that is no terminal."""
    from rich.console import Console
    from rich.progress import BarColumn, MofNCompleteColumn, Progress, TextColumn, TimeRemainingColumn

    screen = Console(stderr=True)
    columns = (TextColumn("{task.description}"), BarColumn(), MofNCompleteColumn(), TimeRemainingColumn())
    with Progress(*columns, console=screen, transient=True, disable=not screen.is_terminal) as bars:
        bar = bars.add_task("", total=None)
        yield lambda what, done, total: bars.update(bar, description=what, completed=done, total=total)


def _show_verified(screen: Console, report: VerifyReport) -> None:
    from flows.cli.tables import heading, plain_table

    headings = [("", "left"), ("checked", "right"), ("damaged or missing", "right")]
    rows = [(each.name, str(each.count), str(len(each.damages) or "–")) for each in report.checked]
    screen.print(plain_table(headings, rows))
    if report.damages:
        heading(screen, "Damaged or missing")
        for damage in report.damages:
            _lines(screen, damage.place, [damage.what, damage.remedy])
    screen.print()
    for note in report.notes:
        _plainly(screen, note)
    if not report.damages:
        _plainly(screen, "Everything is as it was written.")


def _show_replayed(screen: Console, report: ReplayReport) -> None:
    count = len(report.analyses)
    others = [each for each in report.by_other_code if each.refusal is None]
    for each in report.analyses:
        if not each.equal:
            title = f"plate {each.plate_id}, revision {each.revision}, analysis {each.analysis_id[:12]}"
            _lines(screen, title, list(_told(each)))
    if others:
        versions = ", ".join(sorted({each.code_version for each in others}))
        counted = _counted(len(others), "analysis")
        _plainly(screen, f"Made by halfsat {versions}, replayed with {report.running}: {counted}.")
    differing = sum(bool(each.differences) for each in report.analyses)
    refused = sum(each.refusal is not None for each in report.analyses)
    parts = [f"{report.equal_count} equal"]
    parts += [f"{differing} not equal"] if differing else []
    parts += [f"{refused} not replayed"] if refused else []
    _plainly(
        screen,
        f"Replayed {report.about}: {_counted(count, 'analysis')}, {', '.join(parts)}; "
        f"{report.row_count} stored rows compared.",
    )


def _told(each: Replayed) -> Iterator[str]:
    if each.refusal is not None:
        yield f"not replayed: {each.refusal}"
    for difference in each.differences[:DIFFERENCES_SHOWN]:
        where = difference.table if difference.column is None else f"{difference.table}.{difference.column}"
        yield f"{where}, {difference.row}" if difference.row else where
        yield f"  stored {_value(difference.stored)}, recomputed {_value(difference.recomputed)}"
    more = len(each.differences) - DIFFERENCES_SHOWN
    if more > 0:
        yield f"and {more} more: --output FILE.csv writes them all"


def _value(value: object) -> str:
    return "NULL" if value is None else repr(value) if isinstance(value, float) else str(value)


def _write_differences(path: Path, report: ReplayReport) -> None:
    with path.open("w", newline="", encoding="utf-8") as file:
        writer = csv.writer(file)
        writer.writerow(
            ["analysis_id", "plate_id", "table_name", "row", "column_name", "stored", "recomputed"]
        )
        for each in report.analyses:
            for one in each.differences:
                where = (each.analysis_id, each.plate_id, one.table, one.row, one.column or "")
                writer.writerow([*where, _value(one.stored), _value(one.recomputed)])


def _show_rebuilt(screen: Console, report: RebuildReport) -> None:
    from flows.cli.tables import heading, plain_table

    done = f"{report.kept_count} batches as the lake has them, {report.recomputed_count} computed again"
    files = f"{report.file_count} lake files written"
    if report.other_bytes_count:
        files += f", {report.other_bytes_count} of them with the same rows in other bytes"
    if report.failures:
        heading(screen, "Could not be made again as it was")
        for failure in report.failures:
            _lines(screen, failure.where, [failure.reason])
        screen.print()
        _plainly(screen, f"{done}; {files}. The warehouse is as it was.")
        return
    rows = [(name, str(count)) for name, count in report.row_counts.items()]
    screen.print(plain_table([("table", "left"), ("rows", "right")], rows))
    screen.print()
    _plainly(screen, f"Rebuilt and published: {done}; {files}.")


def _lines(screen: Console, title: str, lines: Sequence[str]) -> None:
    _plainly(screen, title)
    for line in lines:
        # A path that is longer than the line stays in one piece, to be copied.
        wrapped = textwrap.wrap(line, screen.width - 2, break_long_words=False, break_on_hyphens=False)
        screen.print(textwrap.indent("\n".join(wrapped), "  "), markup=False, soft_wrap=True)


def _plainly(screen: Console, text: str) -> None:
    """A line as it stands: what a file is called is no markup."""
    screen.print(text, markup=False)


def _counted(count: int, noun: str) -> str:
    return f"{count} {noun if count == 1 else noun.removesuffix('is') + 'es'}"
