"""The two plates of the tiny site: wells, levels and exact Michaelis-Menten rates."""

from __future__ import annotations

from datetime import UTC, datetime

KM_UM, VMAX_UM_PER_S = 50.0, 0.2
LEVELS_UM = (10.0, 20.0, 80.0, 320.0)
LOTS = {"A": ("QX-7", "sample"), "B": ("REF-1", "reference")}
READS, INTERVAL_S = 5, 10.0
SIGNAL_PER_UM = 0.01
FIRST_NIGHT = datetime(2026, 3, 2, 21, 0, tzinfo=UTC)
PLATES = ("TP-1", "TP-2")
HELD = ("TP-2", "A4")


def all_wells() -> list[str]:
    return [f"{row}{column}" for row in LOTS for column in range(1, len(LEVELS_UM) + 1)] + ["C1"]


def signal(plate: str, well: str, time_s: float) -> float:
    rate = 0.0 if well == "C1" else rate_um_per_s(substrate_um(well))
    return round(0.1 + PLATES.index(plate) * 0.001 + rate * SIGNAL_PER_UM * time_s, 9)


def substrate_um(well: str) -> float:
    return 0.0 if well == "C1" else LEVELS_UM[int(well[1:]) - 1]


def rate_um_per_s(substrate: float) -> float:
    return VMAX_UM_PER_S * substrate / (KM_UM + substrate)
