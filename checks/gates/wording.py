"""Numbers as a reviewer reads them in a finding: measured beside its limit, never the same text for both."""

from __future__ import annotations


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


def counted(count: float, noun: str) -> str:
    """A number of things: `1 read`, `3 reads`."""
    text = f"{count:.0f}"
    return f"{text} {noun}" if text == "1" else f"{text} {noun}s"
