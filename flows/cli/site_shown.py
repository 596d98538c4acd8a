"""What `halfsat site check` and `try-profile` look at, and the tables that they print."""

from __future__ import annotations

from rich.console import Console
from rich.text import Text

from checks.gates import resolve_limits
from flows.cli.tables import heading, plain_table
from flows.site.configuration import Configuration
from flows.stages.gate_runs import gates_off
from flows.stages.read import TrialPlate, TrialReport
from flows.wording import number
from models.errors import ConfigurationError
from models.kinetics.grids import WITHOUT_EFFECT
from models.kinetics.laws import law


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


def all_gates_off(configuration: Configuration) -> list[str]:
    """Gates off for the whole site, then those that only an assay turns off, with its name."""
    everywhere = gates_off(resolve_limits(configuration.gates, {}))
    of_assays = [
        f"{gate} (in {name})"
        for name, assay in configuration.assays.items()
        for gate in gates_off(resolve_limits(configuration.gates, assay.gates))
        if gate not in everywhere
    ]
    return [*everywhere, *of_assays]


def show_trial(screen: Console, name: str, report: TrialReport) -> None:
    """Print what a profile made of a file."""
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
