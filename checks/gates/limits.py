"""Limits in force from defaults, site and assay. Knows no file: the caller names what it read."""

from __future__ import annotations

import difflib
import math
from collections.abc import Iterable, Mapping

from checks.gates.gate import Gate, Limits, Setting
from models.errors import ConfigurationError
from models.records.assay import SettingValue

SWITCH = Setting("on", True, "", "Whether the gate is applied", "every gate is on until a site turns it off")


def resolve(
    gates: Mapping[str, Gate],
    site: object,
    assay: object,
    where: tuple[str, str] = ("gates.toml", "the assay"),
) -> Limits:
    """Limits of these gates; see `checks.gates.resolve_limits`.

    Raises
    ------
    ConfigurationError
        If a gate or setting is unknown, or a value is of the wrong kind or out of its range.
    """
    limits: Limits = {
        gate.name: {setting.name: setting.default for setting in (SWITCH, *gate.settings)}
        for gate in gates.values()
    }
    for given, source in zip((site, assay), where, strict=True):
        if not isinstance(given, Mapping):
            raise ConfigurationError("gate limits must be a table of gates", where=source)
        for name, values in given.items():
            if name not in gates:
                raise ConfigurationError(
                    f"there is no gate '{name}'", where=source, remedy=_nearest(str(name), gates, "gates")
                )
            limits[name].update(_checked(gates[name], values, source))
    return limits


def _checked(gate: Gate, values: object, source: str) -> dict[str, SettingValue]:
    settings = {setting.name: setting for setting in (SWITCH, *gate.settings)}
    if not isinstance(values, Mapping):
        raise ConfigurationError("a gate is a table of settings", where=f"{source}, {gate.name}")
    checked: dict[str, SettingValue] = {}
    for name, value in values.items():
        place = f"{source}, {gate.name}.{name}"
        if name not in settings:
            remedy = _nearest(str(name), settings, "settings")
            raise ConfigurationError(f"gate {gate.name} has no setting '{name}'", where=place, remedy=remedy)
        checked[name] = _value(settings[name], value, place)
    return checked


def _value(setting: Setting, value: object, place: str) -> SettingValue:
    if isinstance(setting.default, bool):
        if not isinstance(value, bool):
            raise ConfigurationError(f"{value!r} is no switch", where=place, remedy="write true or false")
        return value
    allowed = f"allowed is {setting.low:g} to {setting.high:g}"
    if isinstance(value, bool) or not isinstance(value, (int, float)) or not math.isfinite(value):
        raise ConfigurationError(f"{value!r} is no number", where=place, remedy=allowed)
    if not setting.low <= value <= setting.high:
        raise ConfigurationError(f"{value!r} is out of range", where=place, remedy=allowed)
    if isinstance(setting.default, int):
        if value != int(value):
            raise ConfigurationError(f"{value!r} is no whole number", where=place, remedy=allowed)
        return int(value)
    return float(value)


def _nearest(name: str, known: Iterable[str], what: str) -> str:
    names = list(known)
    near = difflib.get_close_matches(name, names, n=1, cutoff=0.5)
    return f"did you mean '{near[0]}'?" if near else f"{what} are {', '.join(names)}"
