"""Numbers as a reviewer reads them in a finding: measured beside its limit, never the same text for both."""

from __future__ import annotations

from collections.abc import Sequence

SMALLEST_CHANCE = 1e-4
"""Chances below this are told as below it: their digits say nothing."""


def plain(value: float) -> str:
    """A limit as short as it is exact: 10, 0.5, 2.5."""
    return f"{value:.6g}"


def beside(measured: float, limit: float, scale: float = 1.0) -> tuple[str, str]:
    """Texts of a measured value and its limit, with enough digits to tell them apart.

    Parameters
    ----------
    measured, limit
        The two values.
    scale
        100 gives per cent.
    """
    limit_text = plain(limit * scale)
    for digits in range(1, 7):
        text = f"{measured * scale:.{digits}f}"
        if float(text) != float(limit_text):
            return text, limit_text
    return f"{measured * scale:.6g}", limit_text


def significant(measured: float, limit: float, fewest: int = 3) -> str:
    """A measured value in so many significant digits that it is not the text of its limit."""
    for digits in range(fewest, 12):
        text = f"{measured:.{digits}g}"
        if float(text) != limit:
            return text
    return f"{measured!r}"


def chance(p: float, limit: float) -> str:
    """A p value: `0.0023`, or `below 0.0001`; never the text of its limit."""
    if p < SMALLEST_CHANCE < limit:
        return f"below {SMALLEST_CHANCE:.4f}"
    return significant(p, limit, 2)


def counted(count: float, noun: str) -> str:
    """A number of things: `1 read`, `3 reads`."""
    text = f"{count:.0f}"
    return f"{text} {noun}" if text == "1" else f"{text} {noun}s"


def listed(names: Sequence[str], most: int = 6) -> str:
    """Names in a row: `B1, B2, B3`; beyond `most` of them the rest is counted."""
    if len(names) <= most:
        return ", ".join(names)
    return f"{', '.join(names[: most - 1])} and {len(names) - most + 1} more"
