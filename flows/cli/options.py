"""Options that several commands share."""

from __future__ import annotations

from pathlib import Path

import click

site_option = click.option(
    "--site",
    "site_dir",
    type=click.Path(file_okay=False, path_type=Path),
    envvar="HALFSAT_SITE",
    default=Path(),
    show_default="the current folder",
    help="The site folder. HALFSAT_SITE in the environment does the same.",
)
