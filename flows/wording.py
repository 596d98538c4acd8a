"""How numbers, units, constants and standings are written for people: one way, in terminal, page and report.

Pure text; knows no table, colour or page.
"""

from __future__ import annotations

import math
from decimal import ROUND_HALF_EVEN, Decimal

MARKS = {"clear": "○", "held": "◐", "void": "⊘"}

CONSTANT_SYMBOLS = {
    "km": "Km",
    "k_half": "K0.5",
    "vmax": "Vmax",
    "kcat": "kcat",
    "kcat_per_km": "kcat/Km",
    "kcat_per_k_half": "kcat/K0.5",
    "hill_n": "n",
    "k_ic": "Kic",
    "k_iu": "Kiu",
    "k_i": "Ki",
    "k_si": "Ksi",
    "k_a": "Ka",
    "ki": "Ki",
    "ki_app": "apparent Ki",
    "ic50": "IC50",
    "specific_activity": "specific activity",
    "specific_activity_katal": "specific activity",
    "volume_activity": "activity",
    "volume_activity_katal": "activity",
    "sample_activity": "activity per mg of protein",
    "sample_activity_katal": "activity per mg of protein",
}

UNIT_SYMBOLS = {
    "umol/L": "µM",
    "umol/L/s": "µM/s",
    "1/s": "/s",
    "L/mol/s": "/M/s",
    "umol/min/mg": "U/mg",
    "nmol/s/mg": "nkat/mg",
    "umol/min/mL": "U/mL",
    "nmol/s/mL": "nkat/mL",
    "1": "",
}


def constant_symbol(constant: str) -> str:
    """The trade's sign for a constant, or its plain name where there is none."""
    return CONSTANT_SYMBOLS.get(constant, constant.replace("_", " "))


def unit_symbol(unit: str) -> str:
    """A unit as people write it beside a number; empty for a pure number."""
    return UNIT_SYMBOLS.get(unit, unit)


def number(value: float | None, uncertainty: float | None = None, *, digits: int = 3) -> str:
    """A number with as many digits as its uncertainty allows.

    Parameters
    ----------
    value
        What is written; None or NaN gives a dash.
    uncertainty
        Its standard error: the last digit written is the second significant digit of it. None writes
        `digits` significant digits.
    digits
        Significant digits where the uncertainty is not known.

    Examples
    --------
    >>> number(82.4317, 3.4), number(82.4317), number(0.00123456, 0.00004), number(147213.0, 6100.0)
    ('82.4', '82.4', '0.001235', '1.472e5')
    """
    if value is None or not math.isfinite(value):
        return "–"
    if value == 0:
        return "0"
    exact = Decimal(value)
    if uncertainty is not None and math.isfinite(uncertainty) and uncertainty > 0:
        last = min(Decimal(uncertainty).adjusted() - 1, exact.adjusted())
    else:
        last = exact.adjusted() - digits + 1
    rounded = exact.quantize(Decimal(1).scaleb(last), rounding=ROUND_HALF_EVEN)
    if abs(value) < 1e-4 or (last >= 0 and abs(value) >= 1e5):
        mantissa, _, exponent = f"{rounded:.{max(rounded.adjusted() - last, 0)}e}".partition("e")
        return f"{mantissa}e{int(exponent)}"
    whole, _, fraction = f"{rounded:f}".partition(".")
    grouped = f"{int(whole):,}".replace(",", " ") if len(whole.lstrip("-")) > 4 else whole
    return f"{grouped}.{fraction}" if fraction else grouped


def interval(low: float | None, high: float | None, uncertainty: float | None = None) -> str:
    """A 95 % interval in words: `76.1 to 89.5`, `above 41`, `below 12`, or `open` on both sides."""
    low_known = low is not None and math.isfinite(low)
    high_known = high is not None and math.isfinite(high)
    if low_known and high_known:
        return f"{number(low, uncertainty)} to {number(high, uncertainty)}"
    if low_known:
        return f"above {number(low, digits=2)}"
    return f"below {number(high, digits=2)}" if high_known else "open"
