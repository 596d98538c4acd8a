"""`halfsat site`: make a site, check its configuration, try an export profile, write schemas for editors.

What computes is imported when a command runs, so that help answers at once.
"""

from __future__ import annotations

import json
from datetime import UTC, datetime
from pathlib import Path

import click

from flows.cli.options import site_option
from flows.cli.prove import prove
from flows.cli.root import EXIT_ATTENTION
from flows.cli.status import status
from flows.site.layout import create_site, open_site


@click.group("site")
def command() -> None:
    """Make a site, check its configuration, try an export profile."""


command.add_command(prove)
command.add_command(status)


@command.command("new")
@click.argument("folder", type=click.Path(file_okay=False, path_type=Path))
def new(folder: Path) -> None:
    """Make a site in FOLDER with a working configuration to edit."""
    from flows.ledger import append
    from flows.site.shipped import shipped

    site = create_site(folder, shipped("config"))
    append(site, "site_created", {"config_source": "shipped"}, at=datetime.now(UTC))
    click.echo(f"made {folder}: edit {folder}/config, then type: halfsat site check --site {folder}")


@command.command("check")
@site_option
def check(site_dir: Path) -> None:
    """Check site, profiles, assays and gate limits; name file, key and what is allowed."""
    from flows.cli.site_shown import all_gates_off, check_names
    from flows.cli.tables import console, heading, plain_table
    from flows.site.configuration import load_configuration

    configuration = load_configuration(open_site(site_dir).config)
    check_names(configuration)
    screen = console()
    heading(screen, f"{configuration.settings.name}: the configuration can be used")
    rows = [
        ("profiles", ", ".join(configuration.profiles) or "none yet: no export can be read"),
        ("assays", ", ".join(configuration.assays) or "none yet: no plate can be analysed"),
        ("gates off", ", ".join(all_gates_off(configuration)) or "none"),
        ("schedule", f"{configuration.settings.cron} ({configuration.settings.time_zone})"),
    ]
    screen.print(plain_table([("", "left"), ("", "left")], rows))


@command.command("try-profile")
@click.argument("file", type=click.Path(exists=True, dir_okay=False, path_type=Path))
@click.option("--profile", "profile_name", help="The profile to try; default: the one that claims the file.")
@site_option
def try_profile(file: Path, profile_name: str | None, site_dir: Path) -> None:
    """Show what a profile makes of FILE, before it goes live. Nothing is stored."""
    from flows.cli.site_shown import show_trial
    from flows.cli.tables import console
    from flows.site.configuration import load_configuration
    from flows.stages.read import choose_profile, trial_report

    profiles = load_configuration(open_site(site_dir).config).profiles
    content = file.read_bytes()
    name = profile_name or choose_profile(content, file.name, profiles)
    if name not in profiles:
        raise click.UsageError(f"there is no profile '{name}': profiles are {', '.join(profiles)}")
    report = trial_report(content, file.name, profiles[name])
    show_trial(console(), name, report)
    if report.problems:
        raise SystemExit(EXIT_ATTENTION)


@command.command("schemas")
@click.argument("folder", type=click.Path(file_okay=False, path_type=Path))
def write_schemas(folder: Path) -> None:
    """Write JSON Schemas of the configuration files into FOLDER, for editors."""
    from flows.site.configuration import schemas

    folder.mkdir(parents=True, exist_ok=True)
    for name, schema in schemas().items():
        path = folder / f"{name}.schema.json"
        path.write_text(json.dumps(schema, indent=2, sort_keys=True) + "\n")
        click.echo(str(path))
