"""`halfsat serve`: passes on the site's schedule."""

from __future__ import annotations

from pathlib import Path

import click

from flows.cli.options import site_option
from flows.site.layout import open_site


@click.command("serve")
@site_option
def command(site_dir: Path) -> None:
    """Run passes on the site's schedule until stopped.

    Starts a scheduler on loopback (port and cron line from config/site.toml) and stops cleanly on SIGTERM or
    Ctrl-C. The scheduler's own page, at the address it prints, shows passes and their steps.
    """
    from flows.overnight.serve import serve

    serve(open_site(site_dir), announce=click.echo)
