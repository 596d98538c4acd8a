"""Paper and ink: the colours, line widths and sizes of every figure, light, dark and for print."""

from __future__ import annotations

from dataclasses import dataclass


@dataclass(frozen=True)
class Theme:
    """Colours of one kind of paper.

    Attributes
    ----------
    paper, ink, soft, pale, rule
        Ground, text and curves, axes and units, void and residual marks, thin rules.
    held
        What waits for a person.
    fit, band
        Fitted lines, and the band of their uncertainty.
    """

    paper: str
    ink: str
    soft: str
    pale: str
    rule: str
    held: str
    fit: str
    band: str


LIGHT = Theme("#fbf8f2", "#1d1a16", "#5d564c", "#726a5d", "#ddd5c6", "#a84c06", "#0b6b6b", "#cfe3e0")
DARK = Theme("#171512", "#ece6da", "#b3a999", "#8f8677", "#3a352d", "#ee9a55", "#5fb9b3", "#2a4745")
PRINT = Theme("#ffffff", "#000000", "#444444", "#777777", "#cccccc", "#a84c06", "#0b6b6b", "#e2e2e2")
THEMES = {"light": LIGHT, "dark": DARK, "print": PRINT}

TEXT_PT, SMALL_PT = 9.0, 7.5
THIN, LINE, HEAVY = 0.6, 1.2, 1.8
MARK_PT = 5.0
# Lines that belong together are told apart by their dashes, not by colours.
DASHES: tuple[tuple[float, tuple[float, ...]], ...] = (
    (0, ()),
    (0, (5, 2)),
    (0, (2, 1.5)),
    (0, (6, 2, 1, 2)),
    (0, (1, 1)),
    (0, (8, 2, 2, 2, 2, 2)),
)
