"""The gates as a page and as a configuration file, both from the registry."""

from __future__ import annotations

import textwrap

from checks.gates import GATES
from checks.gates.gate import Gate, Setting
from checks.gates.limits import SWITCH
from models.records.assay import SettingValue

_HEAD = """\
# The gates

Written by `python -m checks.gates` from the modules beside it: change those, not this page.

A gate measures something of each subject and holds it against its limits. A breach is a finding; a gate that
cannot judge a subject says so in a finding of its own kind, `not_assessed`. Limits come from `gates.toml` of
the site, and from the `[gates]` table of an assay where it differs. `on = false` turns a gate off.

Standing where not assessed: what a subject becomes if this gate cannot judge it and nothing else holds it.
"""


def gates_page() -> str:
    """Markdown page of all gates: text of the module, settings with default, meaning and reason."""
    return "\n".join([_HEAD, *(_section(gate) for gate in GATES.values())])


def gates_toml() -> str:
    """`gates.toml` with every gate and every setting at its default, commented."""
    parts = [
        _comment(
            "Gate limits of this site. Every setting stands here at its default; an assay's own [gates] "
            "table overrides it. What each gate measures: checks/gates/README.md."
        )
    ]
    for gate in GATES.values():
        lines = [_comment(gate.purpose), f"[{gate.name}]"]
        for setting in (SWITCH, *gate.settings):
            note = f"{setting.meaning}{_unit(setting)}: {setting.why}."
            lines += [_comment(note), f"{setting.name} = {literal(setting.default)}"]
        parts.append("\n".join(lines))
    return "\n\n".join(parts) + "\n"


def literal(value: SettingValue) -> str:
    """A value as TOML writes it."""
    return str(value).lower() if isinstance(value, bool) else repr(value)


def _section(gate: Gate) -> str:
    subjects = ", ".join(subject.replace("_", " ") for subject in gate.subjects)
    rows = [
        f"| `{setting.name}` | {literal(setting.default)} | {setting.unit or 'switch'} | {setting.meaning} | "
        f"{setting.why} |"
        for setting in (SWITCH, *gate.settings)
    ]
    return "\n".join(
        [
            f"## {gate.name}",
            "",
            f"Subject: {subjects}. Judged with the {gate.phase}. Severity: {gate.severity}. "
            f"Standing where not assessed: {gate.unassessed}.",
            "",
            gate.text.strip(),
            "",
            "| setting | default | unit | what it does | why |",
            "| --- | --- | --- | --- | --- |",
            *rows,
            "",
        ]
    )


def _unit(setting: Setting) -> str:
    return "" if setting.unit in ("", "1") else f" [{setting.unit}]"


def _comment(text: str) -> str:
    return "\n".join(textwrap.wrap(text, 108, initial_indent="# ", subsequent_indent="# "))
