"""Numbers as instruments write them: decimal comma, thousands, overflow and missing tokens.

Knows nothing of wells or times.
"""

from __future__ import annotations

import re
from collections.abc import Sequence
from dataclasses import dataclass
from functools import cached_property

import numpy as np
import numpy.typing as npt
import pyarrow as pa

from models.records.export_profile import ExportProfile

OK, OVERFLOW, MISSING, UNREADABLE = 0, 1, 2, 3
STATE_NAMES = ("ok", "overflow", "missing")

Reals = npt.NDArray[np.float64]
States = npt.NDArray[np.uint8]

_PLAIN = re.compile(r"[+-]?(\d+\.?\d*|\.\d+)([eE][+-]?\d+)?")


@dataclass(frozen=True)
class NumberRule:
    """How numbers are written in one profile."""

    decimal: str = "."
    thousands: str = ""
    overflow: frozenset[str] = frozenset()
    missing: frozenset[str] = frozenset()

    @cached_property
    def grouped(self) -> re.Pattern[str] | None:
        """A number with its thousands in groups of three, or None where groups are not used."""
        if not self.thousands:
            return None
        group, point = re.escape(self.thousands), re.escape(self.decimal)
        return re.compile(rf"[+-]?\d{{1,3}}({group}\d{{3}})+({point}\d*)?")


def number_rule(profile: ExportProfile) -> NumberRule:
    """The rule that a profile states."""
    values = profile.values
    return NumberRule(
        values.decimal, values.thousands, frozenset(values.overflow), frozenset(values.missing) - {""}
    )


def token_state(text: str, rule: NumberRule) -> int:
    """Whether a text is a token for overflow or missing, or else has to be a number (OK)."""
    if not text or text in rule.missing:
        return MISSING
    return OVERFLOW if text in rule.overflow else OK


def parse_numbers(texts: Sequence[str], rule: NumberRule) -> tuple[Reals, States]:
    """Numbers and states of many texts; NaN where the state is not OK.

    Parameters
    ----------
    texts
        Cells as written, blanks round them allowed.

    Returns
    -------
    tuple
        values (n,), states (n,): OK, OVERFLOW, MISSING or UNREADABLE.
    """
    stripped = [text.strip() for text in texts]
    states = np.fromiter((token_state(text, rule) for text in stripped), np.uint8, len(stripped))
    spelled = [
        _with_point(text, rule) if state == OK else None for text, state in zip(stripped, states, strict=True)
    ]
    try:
        array = pa.array(spelled, pa.string()).cast(pa.float64())
        values = array.to_numpy(zero_copy_only=False).astype(np.float64)
    except pa.ArrowInvalid:
        values = np.array(
            [np.nan if text is None or not _PLAIN.fullmatch(text) else float(text) for text in spelled],
            dtype=np.float64,
        )
    values[~np.isfinite(values)] = np.nan
    states[np.isnan(values) & (states == OK)] = UNREADABLE
    return values, states


def _with_point(text: str, rule: NumberRule) -> str:
    """The number with a decimal point and without groups; what cannot be one is left so that it fails."""
    if rule.grouped is not None and rule.grouped.fullmatch(text):
        text = text.replace(rule.thousands, "")
    if rule.decimal == ".":
        return text
    return "unreadable" if "." in text else text.replace(rule.decimal, ".")
