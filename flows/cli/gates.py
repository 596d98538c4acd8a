"""`halfsat gates`: which rules ran on what, and what they found, as a table or as an auditor's page."""

from __future__ import annotations

from pathlib import Path

import click

from flows.cli.options import site_option
from flows.cli.root import EXIT_ATTENTION
from flows.site.layout import open_site


@click.command("gates")
@site_option
@click.option("--pass", "pass_id", metavar="ID", help="What ran in this pass; default: the latest one.")
@click.option("--analysis", "analysis_id", metavar="ID", help="What ran on this analysis.")
@click.option("--plate", "plate_id", metavar="NAME", help="What ran on the current results of this plate.")
@click.option(
    "--output",
    type=click.Path(dir_okay=False, path_type=Path),
    help="HTML file to write: one page that is complete in itself.",
)
def command(
    site_dir: Path, pass_id: str | None, analysis_id: str | None, plate_id: str | None, output: Path | None
) -> None:
    """Show which rules ran on what, and what they found.

    With --output, a page for an auditor: every rule with its limit, the rows it ran on, each finding in its
    sentence, what was not assessed and why, which gates were off, and the digest of every document behind
    it. Ids may be given by their first digits.

    Exit code 1 where a document is missing or is not what was written.
    """
    if sum(each is not None for each in (pass_id, analysis_id, plate_id)) > 1:
        raise click.UsageError("--pass, --analysis and --plate exclude each other")
    from flows.history.gate_audit import audit_record
    from flows.history.gate_page import gate_page, gate_summary
    from flows.history.gate_record import Scope

    record = audit_record(open_site(site_dir), Scope(pass_id, analysis_id, plate_id))
    if output is None:
        from flows.cli.tables import console, heading

        screen = console()
        heading(screen, f"What the gates found: {record.about}")
        screen.print(gate_summary(record))
        screen.print()
        screen.print("Next, as a page for an auditor: halfsat gates --output gates.html")
    else:
        output.write_text(gate_page(record), encoding="utf-8")
        click.echo(
            f"{output}: {record.about}, {record.plate_count} plate reads, {record.told_count} findings"
        )
    if record.broken:
        many = len(record.broken)
        are = "document is" if many == 1 else "documents are"
        click.echo(f"halfsat: {many} {are} missing or not what was written", err=True)
        raise SystemExit(EXIT_ATTENTION)
