"""Which export profile reads a file: exactly one must fit its name and its first lines.

Knows nothing of what a profile makes of the rest of the file.
"""

from __future__ import annotations

import re
from collections.abc import Mapping
from fnmatch import fnmatchcase

from flows.stages.read.exports import open_sheets
from flows.stages.read.sheets import decode
from flows.stages.read.workbook import is_workbook
from models.errors import ExportError
from models.records.export_profile import ExportProfile

_HEAD_BYTES = 262_144


def choose_profile(content: bytes, file_name: str, profiles: Mapping[str, ExportProfile]) -> str:
    """Name of the one profile that fits the file.

    Raises
    ------
    ExportError
        If none fits, with what each one missed, or if several fit.
    """
    if not content:
        raise ExportError("the file is empty", where=file_name, remedy="export it again")
    misses = {name: missed(content, file_name, profile) for name, profile in profiles.items()}
    fitting = [name for name, miss in misses.items() if miss is None]
    if len(fitting) == 1:
        return fitting[0]
    if fitting:
        raise ExportError(
            f"several export profiles fit: {', '.join(sorted(fitting))}",
            where=file_name,
            remedy="make their [detect] patterns tell these files apart",
        )
    told = "; ".join(f"{name}: {miss}" for name, miss in sorted(misses.items()))
    raise ExportError(
        f"no export profile fits ({told or 'the site has none'})",
        where=file_name,
        remedy="add a profile below config/profiles, or mend [detect] in one",
    )


def missed(content: bytes, file_name: str, profile: ExportProfile) -> str | None:
    """What keeps a profile from fitting a file, or None where it fits."""
    detect = profile.detect
    patterns = [pattern.casefold() for pattern in detect.file_name]
    if patterns and not any(fnmatchcase(file_name.casefold(), pattern) for pattern in patterns):
        return f"the file name is not like {' or '.join(detect.file_name)}"
    if is_workbook(content) != (profile.container == "xlsx"):
        return f"it is {'a workbook' if is_workbook(content) else 'no workbook'}"
    if not detect.head:
        return None
    try:
        lines = _head(content, file_name, profile)
    except ExportError as unreadable:
        return unreadable.what
    for pattern in detect.head:
        if not any(re.search(pattern, line) for line in lines):
            return f"none of its first {detect.head_lines} lines has {pattern}"
    return None


def _head(content: bytes, file_name: str, profile: ExportProfile) -> list[str]:
    count = profile.detect.head_lines
    if profile.container == "xlsx":
        sheets = open_sheets(content, file_name, profile)
        return [sheet.line(index) for sheet in sheets for index in range(min(count, sheet.line_count))]
    head = content[:_HEAD_BYTES]
    if len(content) > _HEAD_BYTES:
        # Cut at a line's end, so that no character is torn; in UTF-16 the LF has two bytes.
        end = head.rfind(b"\n")
        double = head[:2] in (b"\xff\xfe", b"\xfe\xff") or profile.text.encoding.startswith("utf-16")
        head = head[: end // 2 * 2 + 2] if double else head[: end + 1]
    data, _ = decode(head or content, profile.text.encoding, file_name)
    return [line.rstrip("\r") for line in data.decode().split("\n")[:count]]
