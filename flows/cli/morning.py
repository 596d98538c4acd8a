"""`halfsat morning`: the review page."""

from __future__ import annotations

from pathlib import Path

import click

from flows.cli.options import site_option
from flows.site.layout import open_site

FILE = click.Path(exists=True, dir_okay=False, path_type=Path)


@click.command("morning")
@site_option
@click.option("--host", default="127.0.0.1", show_default=True, help="Address to listen on.")
@click.option("--port", type=click.IntRange(1024, 65535), help="Port; from config/site.toml unless given.")
@click.option(
    "--host-name", "host_names", multiple=True, help="Name under which browsers reach it, beside loopback."
)
@click.option(
    "--certificate",
    type=click.Path(exists=True, dir_okay=False, path_type=Path),
    help="TLS certificate, PEM.",
)
@click.option("--key", type=click.Path(exists=True, dir_okay=False, path_type=Path), help="Its key, PEM.")
def command(
    site_dir: Path,
    host: str,
    port: int | None,
    host_names: tuple[str, ...],
    certificate: Path | None,
    key: Path | None,
) -> None:
    """Serve the review page until stopped: what the night brought, for a person to settle in her own name.

    Reviewers are made by `halfsat reviewer add`. On any address but loopback, --certificate and --key are
    needed.
    """
    from flows.morning.serve import serve

    serve(open_site(site_dir), host, port, host_names, certificate, key, announce=click.echo)
