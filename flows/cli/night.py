"""What a pass did, printed: what was read, what is held and why, and what each lot comes to.

Reads the published warehouse; computes nothing.
"""

from __future__ import annotations

from collections.abc import Sequence

import duckdb
import pandas as pd
from rich.console import Console
from rich.text import Text

from flows.cli.tables import heading, plain_table
from flows.frames import rows
from flows.overnight.report import PassReport
from flows.site.layout import Site
from flows.warehouse.reader import open_published
from flows.wording import MARKS, constant_symbol, interval, number, unit_symbol

SENTENCES_A_GATE = 3

_READ = """
    SELECT f.file_name, coalesce(f.profile, '') AS profile, p.plate_id, p.well_count, p.read_count,
           c.assay, coalesce(c.standing, 'waiting') AS standing,
           count(w.well) FILTER (w.standing = 'held') AS held,
           count(w.well) FILTER (w.standing = 'void') AS void
    FROM files f
    JOIN plate_reads p ON p.export_id = f.file_id
    LEFT JOIN current_analyses c USING (plate_read_id)
    LEFT JOIN wells w USING (analysis_id)
    WHERE f.pass_id = $pass_id OR c.pass_id = $pass_id
    GROUP BY ALL
    ORDER BY f.file_name, p.plate_id
"""

_HELD = """
    SELECT f.gate, f.subject, f.severity, f.outcome, c.plate_id, f.well,
           coalesce(s.lot, f.lot) AS lot, f.sentence
    FROM findings f
    JOIN current_analyses c USING (analysis_id)
    LEFT JOIN series s ON s.series_id = f.series_id
    LEFT JOIN wells w ON w.analysis_id = f.analysis_id AND w.well = f.well
    WHERE c.pass_id = $pass_id AND f.outcome = 'breach'
    ORDER BY f.gate, c.plate_id, w.row_number, w.column_number
"""

_LOTS = """
    SELECT assay, lot, role, modulator, constant, value, standard_error, low, high, unit, standing,
           plate_read_count, held_series_count
    FROM lot_latest
    ORDER BY assay, role, lot, modulator, constant
"""

# A column of the lots' table holds the first of these constants that a lot has.
_COLUMNS = (
    ("km", "k_half"),
    ("kcat", "specific_activity", "vmax"),
    ("kcat_per_km", "kcat_per_k_half"),
    ("hill_n",),
)


def show_pass(screen: Console, site: Site, report: PassReport) -> None:
    """Print what a pass did.

    Parameters
    ----------
    screen
        Where to print.
    site
        The site, its warehouse published.
    report
        What the pass says of itself.
    """
    if report.nothing_new:
        screen.print("Nothing new: every file in the inbox is known, and nothing waits to be analysed.")
        _show_waiting(screen, report)
        return
    with open_published(site) as connection:
        read = _ask(connection, _READ, report)
        held = _ask(connection, _HELD, report)
    if not read.empty:
        _show_read(screen, read)
    _show_quarantine(screen, report)
    _show_waiting(screen, report)
    if report.analysis_ids:
        _show_held(screen, held)
        screen.print(Text(f"Gates off: {report.gates_off_text()}"))


def show_lots(screen: Console, site: Site) -> None:
    """Print each lot's constants with their 95 % intervals, from the published warehouse."""
    with open_published(site) as connection:
        lots = connection.sql(_LOTS).df()
    heading(screen, "Lots: constants with 95 % intervals")
    if lots.empty:
        screen.print("No lot has a constant yet.")
        return
    for assay, of_assay in lots[lots["modulator"].isna()].groupby("assay", sort=True):
        screen.print(Text(str(assay), style="bold"))
        columns = [choice for choice in _COLUMNS if set(choice) & set(of_assay["constant"])]
        headings = [("", "left"), ("lot", "left"), ("plates", "right")]
        headings += [(_column_head(of_assay, choice), "left") for choice in columns]
        lines = [_lot_row(of_lot, columns) for _, of_lot in of_assay.groupby(["role", "lot"], sort=True)]
        screen.print(plain_table(headings, lines))
        screen.print()
    _show_modulators(screen, lots[lots["modulator"].notna()])
    screen.print(
        f"{MARKS['clear']} every series clear   {MARKS['held']} a series waits for a person and is left out; "
        "where all wait, the values are those of the held series",
        style="dim",
    )


def _show_modulators(screen: Console, lots: pd.DataFrame) -> None:
    """What each lot's grids say of a modulator, a row a constant; nothing where there are none."""
    if lots.empty:
        return
    screen.print(Text("with a modulator", style="bold"))
    lines = [
        (
            MARKS[str(row.standing)],
            str(row.lot),
            str(row.modulator),
            str(row.plate_read_count),
            f"{constant_symbol(row.constant)} {number(row.value, row.standard_error)} "
            f"{unit_symbol(row.unit)}\n{interval(row.low, row.high, row.standard_error)}",
        )
        for row in rows(lots)
    ]
    headings = [("", "left"), ("lot", "left"), ("modulator", "left"), ("plates", "right"), ("", "left")]
    screen.print(plain_table(headings, lines))
    screen.print()


def _ask(connection: duckdb.DuckDBPyConnection, sql: str, report: PassReport) -> pd.DataFrame:
    return connection.execute(sql, {"pass_id": report.pass_id}).df()


def _show_read(screen: Console, read: pd.DataFrame) -> None:
    heading(screen, "Read")
    headings = [
        ("", "left"),
        ("export", "left"),
        ("profile", "left"),
        ("plate", "left"),
        ("wells x reads", "right"),
        ("held", "right"),
        ("void", "right"),
    ]
    table = [
        (
            MARKS.get(row.standing, "·"),
            row.file_name,
            row.profile,
            row.plate_id,
            f"{row.well_count} x {row.read_count}",
            str(row.held or "–"),
            str(row.void or "–"),
        )
        for row in rows(read)
    ]
    screen.print(plain_table(headings, table))


def _show_quarantine(screen: Console, report: PassReport) -> None:
    if report.quarantined:
        heading(screen, "In quarantine")
        screen.print(plain_table([("file", "left"), ("reason", "left")], report.quarantined))


def _show_waiting(screen: Console, report: PassReport) -> None:
    if report.waiting:
        heading(screen, "Waiting")
        lines = [(each.plate_id, each.reason) for each in report.waiting]
        screen.print(plain_table([("plate", "left"), ("for", "left")], lines))


def _show_held(screen: Console, held: pd.DataFrame) -> None:
    heading(screen, "Held, and why")
    if held.empty:
        screen.print("Nothing is held.")
        return
    table: list[tuple[str, str, str]] = []
    for (gate, subject), findings in held.groupby(["gate", "subject"], sort=True):
        name = f"{gate}\n{len(findings)} {_plural(str(subject), len(findings))}"
        shown = findings.drop_duplicates("plate_id").head(SENTENCES_A_GATE)
        for row in rows(shown):
            table.append((name, _place(row.plate_id, row.well, row.lot), row.sentence))
            name = ""
        if len(findings) > len(shown):
            table.append((name, "", f"and {len(findings) - len(shown)} more"))
    screen.print(plain_table([("gate", "left"), ("where", "left"), ("what was found", "left")], table))


def _plural(subject: str, count: int) -> str:
    word = subject.replace("_", " ")
    return word if count == 1 or word.endswith("s") else f"{word}s"


def _place(plate_id: str, well: object, lot: object) -> str:
    detail = well if isinstance(well, str) else lot
    return f"{plate_id}\n{detail}" if isinstance(detail, str) else plate_id


def _column_head(of_assay: pd.DataFrame, choice: Sequence[str]) -> str:
    """Signs of the constants that a column holds, and below them their unit."""
    of_lots = of_assay[of_assay["constant"].isin(choice)].groupby(["role", "lot"])["constant"]
    used = {min(constants, key=choice.index) for _, constants in of_lots}
    signs = [constant_symbol(name) for name in choice if name in used]
    units = [unit_symbol(u) or "1" for u in of_assay.loc[of_assay["constant"].isin(used), "unit"].unique()]
    return f"{', '.join(signs)}\n{', '.join(units)}"


def _lot_row(of_lot: pd.DataFrame, columns: Sequence[Sequence[str]]) -> tuple[str, ...]:
    first = of_lot.iloc[0]
    name = f"{first['lot']}\nreference" if first["role"] == "reference" else str(first["lot"])
    return (
        MARKS[str(first["standing"])],
        name,
        str(int(of_lot["plate_read_count"].max())),
        *(_constant(of_lot, choice) for choice in columns),
    )


def _constant(of_lot: pd.DataFrame, choice: Sequence[str]) -> str:
    """The first of these constants that the lot has, its interval on a second line."""
    for constant in choice:
        found = of_lot[of_lot["constant"] == constant]
        if not found.empty:
            row = found.iloc[0]
            error = row["standard_error"]
            return f"{number(row['value'], error)}\n{interval(row['low'], row['high'], error)}"
    return "–"
