"""Units as people write them in a header, and their conversion to the units that tables hold.

Knows dimensions and factors only: no file, no column.
"""

from __future__ import annotations

import re
from functools import cache
from typing import Any, Literal

from models.errors import UnknownName

Quantity = Literal["amount", "mass"]

# Longer or stranger text is refused before pint sees it: a header is written by somebody else.
_PLAUSIBLE = re.compile(r"[A-Za-zµ/*^·⁻¹²³0-9 .\-]{1,40}")
_GLUED_POWER = re.compile(r"(?<![A-Za-zµ0-9^*])(d|c|m|µ|u)?m3(?![0-9])")
_SPACED_POWER = re.compile(r"([A-Za-zµ]+)-([1-3])(?![0-9])")
# Powers of two digits, and powers of numbers: 9**9**9 would be computed before it is found to be no unit.
_UNTOWARD_POWER = re.compile(r"(\^|\*\*)\s*-?\s*[0-9]{2,}|[0-9]{3,}|[0-9⁻¹²³.]\s*(\^|\*\*)|[⁻¹²³]{3,}")


@cache
def _registry() -> Any:
    """The one unit registry; building it takes half a second, so it waits for the first unit."""
    import pint

    return pint.UnitRegistry(cache_folder=None)


@cache
def concentration_factor(unit: str) -> tuple[Quantity, float]:
    """Dimension of a concentration unit and the factor to the unit that tables hold.

    Parameters
    ----------
    unit
        As written: `mM`, `µmol/L`, `umol/l`, `nmol L-1`, `ng/mL`, `g/L` ... Both signs for micro are read.

    Returns
    -------
    tuple
        `("amount", factor to umol/L)` or `("mass", factor to ng/mL)`.

    Raises
    ------
    UnknownName
        If it is no unit, or not one of amount or mass per volume. The classic slip: `mm` is a length and
        `m` is metre, not mol/L.
    """
    remedy = "write a concentration, such as umol/L, mM, nmol/L or ng/mL"
    written = unit.strip().replace("μ", "µ")
    if not _PLAUSIBLE.fullmatch(written) or _UNTOWARD_POWER.search(written):
        raise UnknownName(f"'{unit}' is not a unit", remedy=remedy)
    spelled = _SPACED_POWER.sub(r"\1^-\2", written.replace("·", " * "))
    spelled = _GLUED_POWER.sub(lambda found: found[0][:-1] + "^3", spelled)
    registry = _registry()
    try:
        quantity = registry.Quantity(1.0, registry.parse_units(spelled))
        if quantity.check("[substance] / [length] ** 3"):
            return "amount", _tidy(quantity.to("umol/L").magnitude)
        if quantity.check("[mass] / [length] ** 3"):
            return "mass", _tidy(quantity.to("ng/mL").magnitude)
    # pint raises many kinds for text that is no unit (undefined name, syntax, type, division by zero).
    except Exception as unreadable:
        raise UnknownName(f"'{unit}' is not a unit", remedy=remedy) from unreadable
    raise UnknownName(f"'{unit}' is neither amount nor mass per volume", remedy=remedy)


def _tidy(factor: float) -> float:
    """The factor as a decimal: 1000, not 999.9999999999999, so that 0.1 mmol/L is 100 umol/L exactly."""
    return float(f"{float(factor):.12g}")
