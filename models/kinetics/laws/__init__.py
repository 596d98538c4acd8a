"""The registry of rate laws. A new law is one module here and one entry in LAWS."""

from __future__ import annotations

from models.errors import UnknownName
from models.kinetics.laws.activation import ESSENTIAL_ACTIVATION, PARTIAL_ACTIVATION
from models.kinetics.laws.concerted import CONCERTED_DIMER, CONCERTED_TETRAMER, CONCERTED_TETRAMER_GENERAL
from models.kinetics.laws.dose_response import DOSE_RESPONSE
from models.kinetics.laws.hill import HILL
from models.kinetics.laws.inhibition import COMPETITIVE, MIXED, NONCOMPETITIVE, UNCOMPETITIVE
from models.kinetics.laws.law import Conditions, Constant, RateLaw, at_levels
from models.kinetics.laws.michaelis_menten import MICHAELIS_MENTEN
from models.kinetics.laws.substrate_inhibition import SUBSTRATE_INHIBITION
from models.kinetics.laws.tight_binding import TIGHT_BINDING

LAWS: tuple[RateLaw, ...] = (
    MICHAELIS_MENTEN,
    HILL,
    SUBSTRATE_INHIBITION,
    CONCERTED_DIMER,
    CONCERTED_TETRAMER,
    CONCERTED_TETRAMER_GENERAL,
    COMPETITIVE,
    UNCOMPETITIVE,
    NONCOMPETITIVE,
    MIXED,
    ESSENTIAL_ACTIVATION,
    PARTIAL_ACTIVATION,
    TIGHT_BINDING,
    DOSE_RESPONSE,
)


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


__all__ = [
    "COMPETITIVE",
    "CONCERTED_DIMER",
    "CONCERTED_TETRAMER",
    "CONCERTED_TETRAMER_GENERAL",
    "DOSE_RESPONSE",
    "ESSENTIAL_ACTIVATION",
    "HILL",
    "LAWS",
    "MICHAELIS_MENTEN",
    "MIXED",
    "NONCOMPETITIVE",
    "PARTIAL_ACTIVATION",
    "SUBSTRATE_INHIBITION",
    "TIGHT_BINDING",
    "UNCOMPETITIVE",
    "Conditions",
    "Constant",
    "RateLaw",
    "at_levels",
    "law",
]
