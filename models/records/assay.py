"""What an assay measures, under which conditions, and how its signal becomes product.

One TOML file an assay. Keys carry their units; nothing here reads a file.
"""

from __future__ import annotations

import math
from typing import TYPE_CHECKING, Literal

import numpy as np
from numpy.typing import NDArray
from pydantic import Field, model_validator

from models.calibration.choices import EXTRAPOLATION, Direction, Model, Weighting
from models.calibration.path_length import (
    WATER_PER_CM,
    WATER_PER_CM_RELATIVE_ERROR,
    path_from_volume_cm,
)
from models.kinetics.robust import Loss
from models.records.record import Record

if TYPE_CHECKING:
    from models.calibration.calibration import Calibration
    from models.calibration.standard_curve import CalibrationRefusal

SettingValue = bool | int | float


class WaterBand(Record):
    """Path length of each well from the absorbance of water in the near infrared."""

    channel_977: str = "977"
    """Channel of the export with the absorbance at 977 nm."""
    channel_900: str = "900"
    """Channel of the export with the absorbance at 900 nm."""
    water_per_cm: float | None = Field(default=None, ge=0.1, le=0.3)
    """A977 - A900 of 1 cm of water at the assay's temperature, as the site found it; left out, a common value
    is used with an error for it."""
    source: str | None = Field(default=None, min_length=3)
    """Where water_per_cm comes from; needed with it."""

    @model_validator(mode="after")
    def _value_with_source(self) -> WaterBand:
        if (self.water_per_cm is None) != (self.source is None):
            raise ValueError("water_per_cm and its source go together")
        return self

    @property
    def per_cm(self) -> float:
        """A977 - A900 per cm of water in force."""
        return WATER_PER_CM if self.water_per_cm is None else self.water_per_cm

    @property
    def relative_error_shared(self) -> float:
        """Relative standard error of that value, which all wells share: 0 for the site's own."""
        return WATER_PER_CM_RELATIVE_ERROR if self.water_per_cm is None else 0.0


class Absorption(Record):
    """Signal to product by molar absorption: P = dA / (d_epsilon l)."""

    change_per_molar_per_cm: float = Field(gt=0)
    """Magnitude of the change of molar absorption coefficient, L/mol/cm."""
    source: str = Field(min_length=3)
    """Where the coefficient comes from: publication or the site's own determination."""
    change_relative_error: float | None = Field(default=None, gt=0, lt=1)
    """Relative standard error of the coefficient, where it is known; all wells share it."""
    path_length_cm: float | None = Field(default=None, gt=0, le=10)
    """Path length, cm, where it is stated."""
    fill_volume_ul: float | None = Field(default=None, gt=0)
    """Fill volume, uL: with the well's area it gives the path length."""
    well_area_mm2: float | None = Field(default=None, gt=0)
    """Cross-section of the well, mm2."""
    water_band: WaterBand | None = None
    """Path length of each well from the water band, in place of the two other ways."""

    @model_validator(mode="after")
    def _one_path_length(self) -> Absorption:
        ways = (
            self.path_length_cm is not None,
            self.fill_volume_ul is not None and self.well_area_mm2 is not None,
            self.water_band is not None,
        )
        if sum(ways) != 1:
            raise ValueError(
                "state path_length_cm, or fill_volume_ul together with well_area_mm2, or a [water_band]"
            )
        return self

    @property
    def path_cm(self) -> float:
        """Path length, cm: stated, or volume over area (1 uL over 1 mm2 is 1 mm).

        Raises
        ------
        ValueError
            If each well has its own, from the water band.
        """
        if self.path_length_cm is not None:
            return self.path_length_cm
        if self.fill_volume_ul is None or self.well_area_mm2 is None:
            raise ValueError("with a water band each well has its own path length: use signal_per_um_per_cm")
        return path_from_volume_cm(self.fill_volume_ul, self.well_area_mm2)

    @property
    def signal_per_um_per_cm(self) -> float:
        """Signal per umol/L of product and cm of path; the classic slip is to forget 1 mol/L = 1e6 umol/L."""
        return self.change_per_molar_per_cm / 1e6

    @property
    def signal_per_um(self) -> float:
        """Signal per umol/L of product, where all wells have one path length."""
        return self.signal_per_um_per_cm * self.path_cm

    @property
    def relative_error_shared(self) -> float:
        """Relative standard error of the conversion that all wells share; 0 where none is known."""
        of_band = 0.0 if self.water_band is None else self.water_band.relative_error_shared
        return math.hypot(self.change_relative_error or 0.0, of_band)


class Response(Record):
    """Signal to product by a stated response, as from a standard curve measured once."""

    signal_per_um: float = Field(gt=0)
    """Signal per umol/L of product."""
    source: str = Field(min_length=3)
    """Where the response comes from."""


class StandardPoint(Record):
    """One standard of a stated curve."""

    product_um: float = Field(ge=0)
    """Known product, umol/L."""
    signal: float
    """Its signal; several readings of one product are several points."""


class StandardCurve(Record):
    """Signal to product through a curve fitted to standards."""

    points_from: Literal["plate", "stated"]
    """Whether the standards are the plate's own wells of role standard, or the points stated here."""
    model: Model = "linear"
    """Shape of the curve."""
    weighting: Weighting = "constant"
    """How the scatter of a signal grows with it: constant, proportional, or as the replicates show."""
    extrapolation: float = Field(default=EXTRAPOLATION, ge=0, le=0.5)
    """Share of the range of standards by which a product may lie beyond it."""
    points: tuple[StandardPoint, ...] = ()
    """The standards, where they are stated."""
    source: str | None = Field(default=None, min_length=3)
    """Where stated points come from."""

    @model_validator(mode="after")
    def _points_where_stated(self) -> StandardCurve:
        if self.points_from == "plate" and (self.points or self.source):
            raise ValueError('points and source belong to points_from = "stated"')
        if self.points_from == "stated" and not (self.points and self.source):
            raise ValueError('points_from = "stated" needs points and their source')
        return self

    def stated(self, direction: Direction) -> Calibration | CalibrationRefusal:
        """The curve through the points stated here."""
        return self.fit(
            np.array([point.product_um for point in self.points], dtype=np.float64),
            np.array([point.signal for point in self.points], dtype=np.float64),
            direction,
        )

    def fit(
        self, product_um: NDArray[np.float64], signal: NDArray[np.float64], direction: Direction
    ) -> Calibration | CalibrationRefusal:
        """The curve through these standards, shape (standards,), as this record says."""
        # Here, since it takes a second that reading a configuration should not.
        from models.calibration.standard_curve import calibrate

        return calibrate(product_um, signal, self.model, self.weighting, direction, self.extrapolation)


class Sample(Record):
    """How the enzyme sample comes into the assay: gives activity per mL of the sample itself."""

    assay_volume_ul: float = Field(gt=0)
    """Volume of the assay mixture in the well, uL."""
    sample_volume_ul: float = Field(gt=0)
    """Volume of the (diluted) sample in it, uL."""
    dilution: float = Field(default=1.0, ge=1)
    """How many times the sample was diluted before it was pipetted; 1 for not at all."""
    protein_mg_per_ml: float | None = Field(default=None, gt=0)
    """Protein of the undiluted sample, mg/mL: gives activity per mg of it."""

    @model_validator(mode="after")
    def _sample_fits(self) -> Sample:
        if self.sample_volume_ul > self.assay_volume_ul:
            raise ValueError("sample_volume_ul is more than assay_volume_ul, which contains it")
        return self


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


class WholeCurves(Record):
    """The integrated rate law fitted to whole progress curves, beside the initial rates."""

    fit: bool = True
    """Whether it is fitted."""
    product_inhibition: bool = False
    """Whether the product inhibits competitively, with a constant that is fitted."""
    enzyme_loss: bool = False
    """Whether the enzyme loses activity first-order, with a rate constant that is fitted."""
    dead_time_s: float = Field(default=0.0, ge=0)
    """Time from the start of the reaction to the first read, s, where it is known."""


class Inhibition(Record):
    """What turns the IC50 or the apparent Ki of a dose response into Ki (Cheng and Prusoff 1973)."""

    mode: Literal["competitive", "uncompetitive", "noncompetitive"]
    """How the inhibitor binds."""
    km_um: float | None = Field(default=None, gt=0)
    """Michaelis constant, umol/L; left out, that of the same lot on the same plate is used."""
    km_standard_error_um: float | None = Field(default=None, gt=0)
    """Its standard error, umol/L."""
    km_source: str | None = Field(default=None, min_length=3)
    """Where it comes from; needed with it."""

    @model_validator(mode="after")
    def _value_with_source(self) -> Inhibition:
        if (self.km_um is None) != (self.km_source is None):
            raise ValueError("km_um and km_source go together")
        if self.km_standard_error_um is not None and self.km_um is None:
            raise ValueError("km_standard_error_um needs km_um")
        return self


class ChartBase(Record):
    """Where a constant of a reference lot has always lain: the centre and width of its control chart."""

    lot: str = Field(min_length=1)
    """The reference lot."""
    constant: str = Field(min_length=1)
    """The constant, as estimates name it, such as km, k_half, vmax or kcat."""
    mean: float = Field(gt=0)
    """Mean of the plate reads that the base rests on, in the unit in which the constant is stored."""
    sd: float = Field(gt=0)
    """Standard deviation between those plate reads, in the same unit."""
    source: str = Field(min_length=3)
    """Where the base comes from: which plate reads, and when."""


class Assay(Record):
    """One assay: enzyme, reaction, signal, and what its results are held against."""

    enzyme: str = Field(min_length=1)
    """Accepted name of the enzyme."""
    ec_number: str | None = Field(default=None, pattern=r"^\d+(\.(\d+|-|n\d+)){3}$")
    """EC number, such as 1.1.1.27."""
    substrate: str = Field(min_length=1)
    """The substrate that is varied."""
    solubility_limit_um: float | None = Field(default=None, gt=0)
    """Highest substrate, umol/L, that stays dissolved in the assay mixture: no higher level is suggested."""
    product: str = Field(min_length=1)
    """The product, or the species whose signal is read."""
    plates: tuple[str, ...] = ()
    """Patterns of plate ids that belong to this assay, with * and ?; a plate map may name it instead."""
    laws: tuple[str, ...] = ("michaelis_menten",)
    """Candidate rate laws of a series, the simplest first."""
    modulator_laws: tuple[str, ...] = ()
    """Candidate laws of a lot's wells with all levels of an inhibitor or activator together."""
    loss: Loss = "none"
    """Weight of rates far from a fit: none for least squares as they are, huber or tukey for less."""
    whole_curves: WholeCurves = WholeCurves()
    """How whole progress curves are fitted beside the initial rates."""
    inhibition: Inhibition | None = None
    """What turns the IC50 of a dose response into Ki."""
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
    standard_curve: StandardCurve | None = None
    """Signal to product through a standard curve."""
    product_recovery: float = Field(default=1.0, gt=0, le=2)
    """Share of the product that the measurement finds, such as after a quench or an extraction."""
    sample: Sample | None = None
    """How the enzyme sample comes into the assay."""
    limiting_reagent: LimitingReagent | None = None
    """A reagent used up with the substrate; conversion counts against whichever runs out first."""
    window: Window = Window()
    """How short a window may be."""
    schedule: Schedule = Schedule()
    """What the read schedule should have been."""
    conditions: Conditions = Conditions()
    """Conditions to report."""
    chart_bases: tuple[ChartBase, ...] = ()
    """Bases of the control charts of reference lots: a plate read waits where a constant leaves its band."""
    gates: dict[str, dict[str, SettingValue]] = Field(default_factory=dict)
    """Gate limits that differ from the site's, by gate and setting."""

    @model_validator(mode="after")
    def _one_conversion(self) -> Assay:
        ways = (self.absorption, self.response, self.standard_curve)
        if sum(way is not None for way in ways) != 1:
            raise ValueError(
                "state either [absorption] or [response] or [standard_curve]: how the signal becomes product"
            )
        if self.standard_curve is not None and self.standard_curve.points_from == "stated":
            from models.calibration.standard_curve import CalibrationRefusal

            curve = self.standard_curve.stated(self.signal.direction)
            if isinstance(curve, CalibrationRefusal):
                raise ValueError(f"the stated standard curve cannot be used: {curve.reason}")
        if not self.laws:
            raise ValueError("laws must name at least one rate law")
        return self

    @model_validator(mode="after")
    def _one_base_a_constant(self) -> Assay:
        stated = [(base.lot, base.constant) for base in self.chart_bases]
        twice = next((key for key in stated if stated.count(key) > 1), None)
        if twice is not None:
            raise ValueError(f"chart_bases state {twice[1]} of lot {twice[0]} twice")
        return self

    def consumable_um(self, substrate_um: float) -> float:
        """Substrate, umol/L, that can be consumed before substrate or limiting reagent runs out."""
        if self.limiting_reagent is None:
            return substrate_um
        return min(substrate_um, self.limiting_reagent.concentration_um / self.product_per_substrate)
