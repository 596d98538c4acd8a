"""Plate maps: units, roles, spellings, and every contradiction named with its line."""

from __future__ import annotations

import io
import math
from pathlib import Path

import openpyxl
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from flows.stages.read import PlateMap, is_plate_map, read_plate_map
from flows.stages.read.map_rules import ROLES
from models.errors import PlateMapError

ROOT = Path(__file__).resolve().parents[4]
HEAD = "plate_id,well,role,lot,substrate [umol/L],enzyme [nmol/L]"


def one(text: str) -> PlateMap:
    (found,) = read_plate_map(text.encode(), "map.csv")
    return found


def refusal(text: str | bytes) -> str:
    with pytest.raises(PlateMapError) as caught:
        read_plate_map(text if isinstance(text, bytes) else text.encode(), "map.csv")
    assert caught.value.where.startswith("map.csv")
    assert caught.value.remedy
    return str(caught.value)


def test_the_example_map() -> None:
    content = (ROOT / "fixtures/exports/P0412_map.csv").read_bytes()
    assert is_plate_map(content, "P0412_map.csv")
    (found,) = read_plate_map(content, "P0412_map.csv")
    assert (found.plate_id, found.assay) == ("P0412", "lactate_dehydrogenase_340")
    wells = found.wells.set_index("well")
    assert list(wells.index[:7]) == ["A1", "A2", "A3", "A4", "A5", "A6", "B1"]
    assert wells.loc["B3", ["role", "lot", "substrate_um", "enzyme_ng_per_ml"]].tolist() == [
        "sample",
        "LOT-2201",
        100.0,
        50.0,
    ]
    assert wells.loc["D1", "lot"] is None
    assert wells.loc["D1", "modulator"] is None
    assert math.isnan(wells.loc["D1", "enzyme_ng_per_ml"])
    assert math.isnan(wells.loc["B3", "enzyme_nm"])


@pytest.mark.parametrize(
    ("unit", "factor"),
    [
        ("mmol/L", 1000.0),
        ("mM", 1000.0),
        ("µM", 1.0),
        ("μmol/l", 1.0),
        ("umol L-1", 1.0),
        ("nM", 0.001),
        ("mol/m3", 1000.0),
        ("pmol/uL", 1.0),
    ],
)
def test_units_of_amount(unit: str, factor: float) -> None:
    text = f"plate_id,well,role,lot,substrate [{unit}],enzyme ({unit})\nP,A1,sample,L,0.1,0.1\n"
    wells = one(text).wells
    assert wells["substrate_um"][0] == pytest.approx(0.1 * factor, rel=1e-12)
    assert wells["enzyme_nm"][0] == pytest.approx(100 * factor, rel=1e-12)


@pytest.mark.parametrize(("unit", "factor"), [("ng/mL", 1.0), ("µg/ml", 1e3), ("mg/L", 1e3), ("g/L", 1e6)])
def test_enzyme_by_mass(unit: str, factor: float) -> None:
    wells = one(f"plate_id,well,role,lot,substrate [mM],enzyme [{unit}]\nP,A1,sample,L,1,2\n").wells
    assert wells["enzyme_ng_per_ml"][0] == pytest.approx(2 * factor, rel=1e-12)
    assert math.isnan(wells["enzyme_nm"][0])


def test_enzyme_may_be_given_by_amount_here_and_by_mass_there_but_not_both() -> None:
    head = "plate_id,well,role,lot,substrate [mM],enzyme [nM],enzyme [ng/mL]\n"
    wells = one(head + "P,A1,sample,L,1,2,\nP,A2,sample,L,1,,3\n").wells
    assert wells["enzyme_nm"].tolist()[0] == 2
    assert wells["enzyme_ng_per_ml"].tolist()[1] == 3
    assert "given by amount and by mass" in refusal(head + "P,A1,sample,L,1,2,3\n")


def test_text_stays_text() -> None:
    lots = ["=1+2", "+4", "-5", "@sum", "007", "1e3"]
    text = HEAD + "\n" + "\n".join(f"P,A{n + 1},sample,{lot},1,1" for n, lot in enumerate(lots))
    assert one(text).wells["lot"].tolist() == lots


def test_several_plates_spellings_and_order() -> None:
    text = (
        "Well;Plate ID;Role;Lot;Substrate [mM];Product [uM];assay\n"
        "B02;P2;Sample;L1;0,5;;a1\nA1;P1;enzyme blank;;;;\nA01;P2;SAMPLE;L1;1;;\n\nC3;P2;standard;;;2,5;\n"
    )
    second, first = read_plate_map(text.encode("utf-16"), "map.csv")
    assert (first.plate_id, first.assay, second.plate_id, second.assay) == ("P1", None, "P2", "a1")
    assert second.wells["well"].tolist() == ["A1", "B2", "C3"]
    assert second.wells["substrate_um"].tolist()[:2] == [1000, 500]
    assert second.wells["product_um"].tolist()[2] == 2.5
    assert first.wells["substrate_um"].tolist() == [0.0]


def test_workbooks() -> None:
    book = openpyxl.Workbook()
    book.worksheets[0].append(["about this plate"])
    sheet = book.create_sheet("map")
    sheet.append(["plate_id", "well", "role", "lot", "substrate [mM]"])
    sheet.append(["P1", "A1", "sample", 4711, 0.25])
    stream = io.BytesIO()
    book.save(stream)
    assert is_plate_map(stream.getvalue(), "map.xlsx")
    (found,) = read_plate_map(stream.getvalue(), "map.xlsx")
    assert found.wells.loc[0, ["lot", "substrate_um"]].tolist() == ["4711", 250.0]
    sheet.append(["P1", "A01", "sample", "x", 1])
    stream = io.BytesIO()
    book.save(stream)
    with pytest.raises(
        PlateMapError, match="sheet map, row 3: well A1 of plate P1 stands twice, first in row 2"
    ):
        read_plate_map(stream.getvalue(), "map.xlsx")


@pytest.mark.parametrize(
    ("text", "words"),
    [
        (HEAD + "\nP,A1,sampel,L,1,1\n", ["line 2", "no role 'sampel'", "did you mean sample?"]),
        ("plate_id,well,role,subtrate [mM]\nP,A1,empty,\n", ["line 1, field 4", "did you mean substrate?"]),
        ("plate_id,well,role,substrate\nP,A1,empty,\n", ["line 1", "substrate has no unit", "[umol/L]"]),
        ("plate_id,well,role,substrate [mm]\nP,A1,empty,\n", ["line 1", "neither amount nor mass"]),
        ("plate_id,well,role,substrate [zorks]\nP,A1,empty,\n", ["line 1", "'zorks' is not a unit"]),
        ("plate_id,well,role,substrate [mg/mL]\nP,A1,empty,\n", ["line 1", "by mass", "by amount"]),
        ("plate_id,well,role,lot,lot\nP,A1,empty,,\n", ["line 1", "columns 4 and 5 both give lot"]),
        (HEAD + "\nP,A1,sample,,1,1\n", ["line 2", "well A1", "a sample needs a lot"]),
        (HEAD + "\nP,A1,reference,L,,1\n", ["line 2", "a reference needs its substrate"]),
        (HEAD + "\nP,A1,blank,,1,1\n", ["line 2", "a blank holds everything but enzyme"]),
        (HEAD + "\nP,A1,enzyme_blank,,1,1\n", ["line 2", "an enzyme_blank holds everything but substrate"]),
        (HEAD + "\nP,A1,standard,,,\n", ["line 2", "a standard needs its product"]),
        (HEAD + "\nP,A1,sample,L,1,1\nP,A01,sample,L,1,1\n", ["line 3", "A1", "twice", "first in line 2"]),
        (HEAD + "\nP,A1,sample,L,-1,1\n", ["line 2, field 5", "'-1' is not a concentration"]),
        (HEAD + "\nP,A1,sample,L,lots,1\n", ["line 2, field 5", "'lots' is not a concentration"]),
        (HEAD + "\nP,A1,sample,L,nan,1\n", ["line 2, field 5", "'nan' is not a concentration"]),
        (HEAD + "\nP,Z99,sample,L,1,1\n", ["line 2", "'Z99'"]),
        (HEAD + "\n,A1,sample,L,1,1\n", ["line 2", "plate_id is empty"]),
        (HEAD + "\nP,A1,sample,L,1,1,7\n", ["line 2", "7 fields"]),
        (HEAD + "\n", ["line 1", "no wells"]),
        ("plate_id,well,role,assay\nP,A1,empty,x\nP,A2,empty,y\n", ["line 3", "two assays, x and y"]),
        (
            "plate_id,well,role,lot,substrate [mM],modulator,modulator [uM]\nP,A1,sample,L,1,,2\n",
            ["line 2", "without a modulator"],
        ),
        (
            "plate_id,well,role,lot,substrate [mM],modulator,modulator [uM]\nP,A1,sample,L,1,tea,\n",
            ["line 2", "without its concentration"],
        ),
        ("a,b\n1,2\n", ["no plate map"]),
        ("", ["empty"]),
    ],
)
def test_a_flaw_is_named_with_its_line(text: str, words: list[str]) -> None:
    message = refusal(text)
    for word in words:
        assert word in message


def test_a_torn_workbook_is_refused() -> None:
    assert "damaged" in refusal(b"PK\x03\x04 and so on")


def test_exports_are_no_maps() -> None:
    for path in (ROOT / "fixtures/exports").glob("*"):
        assert is_plate_map(path.read_bytes(), path.name) == path.name.endswith("_map.csv")


@settings(max_examples=60, deadline=None)
@given(
    st.lists(
        st.tuples(
            st.integers(1, 16),
            st.integers(1, 24),
            st.sampled_from(ROLES),
            st.decimals(0, 1000, places=3),
            st.text("abcXYZ019=-+@ ", min_size=1, max_size=8).filter(str.strip),
        ),
        unique_by=lambda each: each[:2],
        min_size=1,
        max_size=20,
    ),
    st.sampled_from([",", ";", "\t", "|"]),
)
def test_maps_read_back_equal(rows: list[tuple[int, int, str, object, str]], sign: str) -> None:
    lines = [sign.join(["plate_id", "well", "role", "lot", "substrate [mM]", "product [nM]"])]
    for row, column, role, amount, lot in rows:
        substrate = "" if role in ("enzyme_blank", "empty", "standard") else str(amount)
        product = str(amount) if role == "standard" else ""
        lines.append(sign.join(["P 1", f"{chr(64 + row)}{column:02d}", role, lot, substrate, product]))
    wells = one("\n".join(lines)).wells.set_index("well")
    assert len(wells) == len(rows)
    for row, column, role, amount, lot in rows:
        found = wells.loc[f"{chr(64 + row)}{column}"]
        assert (found["role"], found["lot"]) == (role, lot.strip())
        if role == "standard":
            assert found["product_um"] == pytest.approx(float(str(amount)) / 1000, rel=1e-12)
        elif role == "empty":
            assert math.isnan(found["substrate_um"])
        else:
            expected = 0.0 if role == "enzyme_blank" else float(str(amount)) * 1000
            assert found["substrate_um"] == pytest.approx(expected, rel=1e-12)
