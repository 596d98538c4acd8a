"""The registry of rate laws. A new law is one module here and one entry in LAWS."""

from __future__ import annotations

from models.errors import UnknownName
from models.kinetics.laws.hill import HILL
from models.kinetics.laws.law import Conditions, Constant, RateLaw, at_levels
from models.kinetics.laws.michaelis_menten import MICHAELIS_MENTEN

LAWS: tuple[RateLaw, ...] = (MICHAELIS_MENTEN, HILL)


def law(name: str) -> RateLaw:
    """Return the rate law with this name.

    Raises
    ------
    UnknownName
        If no law has this name.
    """
    for each in LAWS:
        if each.name == name:
            return each
    raise UnknownName(
        f"there is no rate law '{name}'", remedy=f"laws are {', '.join(each.name for each in LAWS)}"
    )


__all__ = ["HILL", "LAWS", "MICHAELIS_MENTEN", "Conditions", "Constant", "RateLaw", "at_levels", "law"]
