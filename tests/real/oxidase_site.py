"""A site for the real oxidase plates, written as a user would: profile, assays and plate maps.

The measurements stay where they are (ACS Omega 2021, doi:10.1021/acsomega.0c04918, CC-BY 4.0); maps and
exports are made from them in the test's own folder.
"""

from __future__ import annotations

import csv
from dataclasses import dataclass
from pathlib import Path

from flows.site.layout import Site, create_site

OXIDASES = Path(__file__).resolve().parents[3] / "shared" / "real" / "oxidases"
ABSENT = "the real oxidase measurements (../shared/real/oxidases) are not here"


@dataclass(frozen=True)
class Oxidase:
    """One enzyme: prefix of its files, assay name, and the article's Km with its SEM [umol/L]."""

    prefix: str
    assay: str
    enzyme: str
    substrate: str
    km_um: float
    km_sem_um: float

    @property
    def plate_ids(self) -> list[str]:
        return [f"{self.prefix}_data_rep{number}" for number in (1, 2, 3)]


# Km: ACS Omega 2021, doi:10.1021/acsomega.0c04918, mean +- SEM of three plates.
GLUTAMATE_OXIDASE = Oxidase("GlutOX", "glutamate_oxidase", "L-glutamate oxidase", "L-glutamate", 200.0, 30.0)
LACTATE_OXIDASE = Oxidase("LOX", "lactate_oxidase", "lactate oxidase", "L-lactate", 1150.0, 150.0)
BOTH = (GLUTAMATE_OXIDASE, LACTATE_OXIDASE)

SITE = """
name = "Oxidases of doi:10.1021/acsomega.0c04918"
"""

DYE_UM = 50.0
"""Dye in each well [umol/L], the article's methods."""
SIGNAL_PER_UM = 4831.0
"""Slope of the low part, up to 2 umol/L, of the resorufin standard curve published with the plates."""
READ_INTERVAL_S = 30.0
"""One read every 0.5 min: notes of the data repository."""

# The file holds no times.
PROFILE = r"""
shape = "wells_by_rows"

[detect]
file_name = ["*_data_rep?.tsv"]
head = ["^Chamber ID\t"]

[text]
encoding = "utf-8"
delimiter = "tab"

[plate]
id_in_file_name = "(?P<plate_id>\\w+_data_rep\\d)\\.tsv"
format = 384

[columns]
well = "Chamber ID"

[wells]
pattern = "S(?P<row>\\d+)-A(?P<column>\\d+)"

[time]
interval_s = 30
"""

# Conditions: 20 mmol/L HEPES pH 7.4, 50 umol/L dye, 0.1 U/mL peroxidase (the article's methods).
ASSAY = """
enzyme = "{enzyme}"
substrate = "{substrate}"
product = "resorufin"
plates = ["{prefix}_*"]

[signal]
kind = "fluorescence"
product_zero = "blank"

[response]
signal_per_um = {signal_per_um}
source = "low part (up to 2 umol/L) of the resorufin standard curve published with the plates"

[limiting_reagent]
name = "dye that peroxidase turns into resorufin"
concentration_um = {dye_um}

[conditions]
ph = 7.4
buffer = "20 mmol/L HEPES"
other_components = "0.1 U/mL peroxidase"

# The coupling enzyme takes its first minutes to keep pace, in every well: that lag is the assay's, and rates
# are taken after it (Easterby 1973, Biochim. Biophys. Acta 293, 552-558, from memory).
[gates.initial_slope_nonlinear]
hold_lag_and_burst = false
"""

_MAP_HEAD = ("plate_id", "well", "role", "lot", "substrate [mmol/L]", "enzyme [ng/mL]")


def write_oxidase_site(root: Path) -> Site:
    """Make a site at `root` with both enzymes' assays, and fill its inbox with six exports and two maps."""
    config = root.with_name(root.name + "-config")
    for folder in ("profiles", "assays"):
        (config / folder).mkdir(parents=True)
    (config / "site.toml").write_text(SITE, encoding="utf-8")
    (config / "profiles" / "resorufin_rows.toml").write_text(PROFILE, encoding="utf-8")
    for oxidase in BOTH:
        text = ASSAY.format(
            enzyme=oxidase.enzyme,
            substrate=oxidase.substrate,
            prefix=oxidase.prefix,
            signal_per_um=SIGNAL_PER_UM,
            dye_um=DYE_UM,
        )
        (config / "assays" / f"{oxidase.assay}.toml").write_text(text, encoding="utf-8")
    site = create_site(root, config)
    for oxidase in BOTH:
        for plate_id in oxidase.plate_ids:
            (site.inbox / f"{plate_id}.tsv").write_bytes((OXIDASES / f"{plate_id}.tsv").read_bytes())
        _write_map(site.inbox / f"{oxidase.prefix}_map.csv", oxidase)
    return site


def _write_map(path: Path, oxidase: Oxidase) -> None:
    substrates = _levels(f"{oxidase.prefix}_sample.tsv", "sample_well", "sample_substrate_conc", "mM")
    enzymes = _levels(f"{oxidase.prefix}_assay.tsv", "assay_well", "assay_enzyme_conc", "ng/ml")
    with path.open("w", encoding="utf-8", newline="") as file:
        rows = csv.writer(file)
        rows.writerow(_MAP_HEAD)
        for plate_id in oxidase.plate_ids:
            for sample, substrate in substrates.items():
                for assay, enzyme in enzymes.items():
                    well = f"{chr(64 + int(sample[1:]))}{int(assay[1:])}"
                    role = _role(float(substrate), float(enzyme))
                    lot, level = ("", "") if role == "blank" else (oxidase.prefix, enzyme)
                    rows.writerow([plate_id, well, role, lot, substrate, level])


def _role(substrate: float, enzyme: float) -> str:
    if enzyme == 0:
        return "blank"
    return "sample" if substrate > 0 else "enzyme_blank"


def _levels(name: str, well: str, level: str, unit: str) -> dict[str, str]:
    with (OXIDASES / name).open(encoding="utf-8", newline="") as file:
        rows = list(csv.DictReader(file, delimiter="\t"))
    stated = {row[f"{level.rsplit('_', 1)[0]}_unit"] for row in rows}
    if stated != {unit}:
        raise ValueError(f"{name} states {stated}, not {unit}")
    return {row[well]: row[level] for row in rows}
