"""Progress curves to rates, rates to constants.

For a notebook, `from models.kinetics import fit, fit_michaelis_menten, own_law`; everything else is in the
modules it lives in. Nothing is imported until it is asked for.
"""

from __future__ import annotations

from importlib import import_module
from typing import TYPE_CHECKING

if TYPE_CHECKING:
    from models.kinetics.notebook import fit, fit_michaelis_menten
    from models.kinetics.own_laws import own_law
    from models.kinetics.single_fit import Fit, FitRefused

_HOME = {
    "Fit": "models.kinetics.single_fit",
    "FitRefused": "models.kinetics.single_fit",
    "fit": "models.kinetics.notebook",
    "fit_michaelis_menten": "models.kinetics.notebook",
    "own_law": "models.kinetics.own_laws",
}

__all__ = ["Fit", "FitRefused", "fit", "fit_michaelis_menten", "own_law"]


def __getattr__(name: str) -> object:
    if name not in _HOME:
        raise AttributeError(f"module 'models.kinetics' has no attribute '{name}'")
    return getattr(import_module(_HOME[name]), name)
