"""`halfsat site`: make a site, check its configuration, try an export profile, write schemas for editors."""

from __future__ import annotations

import json
from datetime import UTC, datetime
from pathlib import Path

import click
from rich.console import Console
from rich.text import Text

from checks.gates import resolve_limits
from flows.cli.options import site_option
from flows.cli.prove import prove
from flows.cli.root import EXIT_ATTENTION
from flows.cli.tables import console, heading, plain_table
from flows.ledger import append
from flows.site.configuration import Configuration, load_configuration, schemas
from flows.site.layout import create_site, open_site
from flows.site.shipped import shipped
from flows.stages.gate_runs import gates_off
from flows.stages.read import TrialPlate, TrialReport, choose_profile, trial_report
from flows.wording import number
from models.errors import ConfigurationError
from models.kinetics.grids import WITHOUT_EFFECT
from models.kinetics.laws import law


@click.group("site")
def command() -> None:
    """Make a site, check its configuration, try an export profile."""


command.add_command(prove)


@command.command("new")
@click.argument("folder", type=click.Path(file_okay=False, path_type=Path))
def new(folder: Path) -> None:
    """Make a site in FOLDER with a working configuration to edit."""
    site = create_site(folder, shipped("config"))
    append(site, "site_created", {"config_source": "shipped"}, at=datetime.now(UTC))
    click.echo(f"made {folder}: edit {folder}/config, then type: halfsat site check --site {folder}")


@command.command("check")
@site_option
def check(site_dir: Path) -> None:
    """Check site, profiles, assays and gate limits; name file, key and what is allowed."""
    configuration = load_configuration(open_site(site_dir).config)
    check_names(configuration)
    screen = console()
    heading(screen, f"{configuration.settings.name}: the configuration can be used")
    rows = [
        ("profiles", ", ".join(configuration.profiles) or "none yet: no export can be read"),
        ("assays", ", ".join(configuration.assays) or "none yet: no plate can be analysed"),
        ("gates off", ", ".join(_gates_off(configuration)) or "none"),
        ("schedule", f"{configuration.settings.cron} ({configuration.settings.time_zone})"),
    ]
    screen.print(plain_table([("", "left"), ("", "left")], rows))


def check_names(configuration: Configuration) -> None:
    """Hold what the configuration names against what there is: gates, their settings, and rate laws.

    Raises
    ------
    ConfigurationError
        If a gate, a setting or a law does not exist.
    UnknownName
        If a rate law does not exist.
    """
    for name, assay in configuration.assays.items():
        try:
            resolve_limits(configuration.gates, assay.gates)
        except ConfigurationError as error:
            where = error.where or f"config/gates.toml, with config/assays/{name}.toml"
            raise ConfigurationError(error.what, where=where, remedy=error.remedy) from error
        where = f"config/assays/{name}.toml"
        for key, names, with_modulator in (
            ("laws", assay.laws, False),
            ("modulator_laws", assay.modulator_laws, True),
        ):
            for each in names:
                needs_modulator = law(each).fewest_modulator_levels > 0
                if needs_modulator and not with_modulator:
                    raise ConfigurationError(
                        f"'{each}' is a law over a modulator, not of a series",
                        where=f"{where}, {key}",
                        remedy="name it in modulator_laws",
                    )
                if with_modulator and not needs_modulator and each != WITHOUT_EFFECT:
                    raise ConfigurationError(
                        f"'{each}' knows no modulator",
                        where=f"{where}, {key}",
                        remedy=f"name it in laws; only {WITHOUT_EFFECT} may stand here, for no effect at all",
                    )


def _gates_off(configuration: Configuration) -> list[str]:
    """Gates off for the whole site, then those that only an assay turns off, with its name."""
    everywhere = gates_off(resolve_limits(configuration.gates, {}))
    of_assays = [
        f"{gate} (in {name})"
        for name, assay in configuration.assays.items()
        for gate in gates_off(resolve_limits(configuration.gates, assay.gates))
        if gate not in everywhere
    ]
    return [*everywhere, *of_assays]


@command.command("try-profile")
@click.argument("file", type=click.Path(exists=True, dir_okay=False, path_type=Path))
@click.option("--profile", "profile_name", help="The profile to try; default: the one that claims the file.")
@site_option
def try_profile(file: Path, profile_name: str | None, site_dir: Path) -> None:
    """Show what a profile makes of FILE, before it goes live. Nothing is stored."""
    profiles = load_configuration(open_site(site_dir).config).profiles
    content = file.read_bytes()
    name = profile_name or choose_profile(content, file.name, profiles)
    if name not in profiles:
        raise click.UsageError(f"there is no profile '{name}': profiles are {', '.join(profiles)}")
    report = trial_report(content, file.name, profiles[name])
    _show_trial(console(), name, report)
    if report.problems:
        raise SystemExit(EXIT_ATTENTION)


@command.command("schemas")
@click.argument("folder", type=click.Path(file_okay=False, path_type=Path))
def write_schemas(folder: Path) -> None:
    """Write JSON Schemas of the configuration files into FOLDER, for editors."""
    folder.mkdir(parents=True, exist_ok=True)
    for name, schema in schemas().items():
        path = folder / f"{name}.schema.json"
        path.write_text(json.dumps(schema, indent=2, sort_keys=True) + "\n")
        click.echo(str(path))


def _show_trial(screen: Console, name: str, report: TrialReport) -> None:
    heading(screen, f"{report.file_name} read with profile {name}")
    file_rows = [
        ("size", f"{report.byte_count} byte"),
        ("encoding", report.encoding or "workbook"),
        ("delimiter", report.delimiter or "–"),
        ("sheets", ", ".join(report.sheets) or "–"),
    ]
    screen.print(plain_table([("", "left"), ("", "left")], file_rows))
    for plate in report.plates:
        heading(screen, f"Plate {plate.plate_id}")
        screen.print(plain_table([("", "left"), ("", "left")], _plate_rows(plate)))
        values = [
            (
                each.channel,
                each.well,
                number(each.time_s, digits=6),
                each.state if each.signal is None else number(each.signal, digits=6),
                f"row {each.source_row}, field {each.source_column}",
            )
            for each in plate.first_values
        ]
        headings = [("channel", "left"), ("well", "left"), ("time s", "right"), ("signal", "right")]
        screen.print(plain_table([*headings, ("in the file", "left")], values))
    if report.problems:
        heading(screen, "To mend")
        for problem in report.problems:
            screen.print(Text(f"- {problem}"))
    else:
        screen.print()
        screen.print("Nothing to mend.")


def _plate_rows(plate: TrialPlate) -> list[tuple[str, str]]:
    started = plate.started_at.isoformat(sep=" ") if plate.started_at else "not stated"
    temperature = (
        f"{plate.temperature_low_c:.1f} to {plate.temperature_high_c:.1f} °C"
        if plate.temperature_low_c is not None and plate.temperature_high_c is not None
        else "not stated"
    )
    return [
        ("wells", f"{plate.well_count} of {plate.plate_format}, {plate.first_well} to {plate.last_well}"),
        ("channels", ", ".join(plate.channels)),
        (
            "reads",
            f"{plate.read_count} over {number(plate.duration_s)} s, one every {number(plate.interval_s)} s",
        ),
        ("started", started),
        ("temperature", temperature),
        ("overflowed", str(plate.overflow_count)),
        ("missing", str(plate.missing_count)),
    ]
