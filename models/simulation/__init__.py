"""Plates with known truth and chosen faults: for the demo, recovery tests and proving a site's limits."""

from models.simulation.design import (
    MAP_COLUMNS,
    Design,
    level_layout,
    map_frame,
    substrate_levels,
    triplicate_design,
)
from models.simulation.plate import (
    TRIPLICATE_NOISE,
    TRIPLICATE_TRUTH,
    LotTruth,
    Noise,
    SimulatedPlate,
    simulate_plate,
)

__all__ = [
    "MAP_COLUMNS",
    "TRIPLICATE_NOISE",
    "TRIPLICATE_TRUTH",
    "Design",
    "LotTruth",
    "Noise",
    "SimulatedPlate",
    "level_layout",
    "map_frame",
    "simulate_plate",
    "substrate_levels",
    "triplicate_design",
]
