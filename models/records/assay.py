"""What an assay measures, under which conditions, and how its signal becomes product.

One TOML file an assay. Keys carry their units; nothing here reads a file.
"""

from __future__ import annotations

from typing import Literal

from pydantic import Field, model_validator

from models.records.record import Record

SettingValue = bool | int | float


class Absorption(Record):
    """Signal to product by molar absorption: P = dA / (d_epsilon l)."""

    change_per_molar_per_cm: float = Field(gt=0)
    """Magnitude of the change of molar absorption coefficient, L/mol/cm."""
    source: str = Field(min_length=3)
    """Where the coefficient comes from: publication or the site's own determination."""
    path_length_cm: float | None = Field(default=None, gt=0, le=10)
    """Path length, cm, where it is stated."""
    fill_volume_ul: float | None = Field(default=None, gt=0)
    """Fill volume, uL: with the well's area it gives the path length."""
    well_area_mm2: float | None = Field(default=None, gt=0)
    """Cross-section of the well, mm2."""

    @model_validator(mode="after")
    def _one_path_length(self) -> Absorption:
        from_volume = self.fill_volume_ul is not None and self.well_area_mm2 is not None
        if (self.path_length_cm is not None) == from_volume:
            raise ValueError("state path_length_cm, or fill_volume_ul together with well_area_mm2")
        return self

    @property
    def path_cm(self) -> float:
        """Path length, cm: stated, or volume over area (1 uL over 1 mm2 is 1 mm)."""
        if self.path_length_cm is not None:
            return self.path_length_cm
        assert self.fill_volume_ul is not None
        assert self.well_area_mm2 is not None
        return self.fill_volume_ul / self.well_area_mm2 / 10.0

    @property
    def signal_per_um(self) -> float:
        """Signal per umol/L of product; the classic slip is to forget 1 mol/L = 1e6 umol/L."""
        return self.change_per_molar_per_cm * self.path_cm / 1e6


class Response(Record):
    """Signal to product by a stated response, as from a standard curve measured once."""

    signal_per_um: float = Field(gt=0)
    """Signal per umol/L of product."""
    source: str = Field(min_length=3)
    """Where the response comes from."""


class Signal(Record):
    """What the instrument reads."""

    kind: Literal["absorbance", "fluorescence", "luminescence"]
    """What kind of signal it is."""
    channel: str | None = None
    """Channel of the export to use, such as "340"; may be left out where there is one only."""
    direction: Literal["rises", "falls"] = "rises"
    """Whether the signal rises or falls as product forms."""
    linear_limit: float | None = Field(default=None, gt=0)
    """Signal above which the detector is no longer linear."""
    product_zero: Literal["first_read", "blank"] = "first_read"
    """Where product counts from: each well's first read, or the matching blank (which also sees what was
    consumed before the first read; it needs blanks that differ from the samples by the enzyme alone)."""


class LimitingReagent(Record):
    """A reagent beside the substrate that is used up with it, such as a dye or a coenzyme."""

    name: str = Field(min_length=1)
    """What it is."""
    concentration_um: float = Field(gt=0)
    """Concentration at the start, umol/L."""


class Window(Record):
    """How short a window may be."""

    shortest_points: int = Field(default=5, ge=4, le=50)
    """Fewest reads that make a usable window."""


class Schedule(Record):
    """What the read schedule should have been; what is left out is not checked."""

    read_count: int | None = Field(default=None, ge=2)
    """Reads a well should have."""
    interval_s: float | None = Field(default=None, gt=0)
    """Time between reads, s."""


class Conditions(Record):
    """Conditions that the STRENDA guidelines ask to be reported."""

    temperature_c: float | None = Field(default=None, ge=-20, le=130)
    """Assay temperature, degC."""
    ph: float | None = Field(default=None, ge=0, le=14)
    """pH of the assay mixture."""
    buffer: str | None = None
    """Buffer, its concentration and counter-ion."""
    ionic_additions: str | None = None
    """Metal salts and other ionic additions with their concentrations."""
    other_components: str | None = None
    """Further components, such as a coupling enzyme with its activity."""


class Assay(Record):
    """One assay: enzyme, reaction, signal, and what its results are held against."""

    enzyme: str = Field(min_length=1)
    """Accepted name of the enzyme."""
    ec_number: str | None = Field(default=None, pattern=r"^\d+(\.(\d+|-|n\d+)){3}$")
    """EC number, such as 1.1.1.27."""
    substrate: str = Field(min_length=1)
    """The substrate that is varied."""
    product: str = Field(min_length=1)
    """The product, or the species whose signal is read."""
    plates: tuple[str, ...] = ()
    """Patterns of plate ids that belong to this assay, with * and ?; a plate map may name it instead."""
    laws: tuple[str, ...] = ("michaelis_menten",)
    """Candidate rate laws, the simplest first."""
    molar_mass_g_per_mol: float | None = Field(default=None, gt=0)
    """Molar mass of the enzyme (per active site), g/mol: gives kcat where enzyme is given by mass."""
    product_per_substrate: float = Field(default=1.0, gt=0)
    """Product (or signal-giving species) formed per substrate consumed."""
    signal: Signal
    """What the instrument reads."""
    absorption: Absorption | None = None
    """Signal to product by molar absorption."""
    response: Response | None = None
    """Signal to product by a stated response."""
    limiting_reagent: LimitingReagent | None = None
    """A reagent used up with the substrate; conversion counts against whichever runs out first."""
    window: Window = Window()
    """How short a window may be."""
    schedule: Schedule = Schedule()
    """What the read schedule should have been."""
    conditions: Conditions = Conditions()
    """Conditions to report."""
    gates: dict[str, dict[str, SettingValue]] = Field(default_factory=dict)
    """Gate limits that differ from the site's, by gate and setting."""

    @model_validator(mode="after")
    def _one_conversion(self) -> Assay:
        if (self.absorption is None) == (self.response is None):
            raise ValueError("state either [absorption] or [response]: how the signal becomes product")
        if not self.laws:
            raise ValueError("laws must name at least one rate law")
        return self

    @property
    def signal_per_um(self) -> float:
        """Signal per umol/L of product, positive."""
        conversion = self.absorption or self.response
        assert conversion is not None
        return conversion.signal_per_um

    def consumable_um(self, substrate_um: float) -> float:
        """Substrate, umol/L, that can be consumed before substrate or limiting reagent runs out."""
        if self.limiting_reagent is None:
            return substrate_um
        return min(substrate_um, self.limiting_reagent.concentration_um / self.product_per_substrate)
