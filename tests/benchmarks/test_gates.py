"""A small run of the gates' benchmark: the page is whole, narrow, and its verdict follows its figures."""

from __future__ import annotations

import math
from dataclasses import replace

import pytest

from flows.proving.characteristics import Caught, Clean, CleanGate, Curve
from tests.benchmarks.gates import (
    SEED,
    WANTED,
    Bought,
    Cost,
    bought,
    clean_rows,
    cost,
    parts,
    report,
    the_bench,
    trial,
    two_level_bench,
)

BUYS = Bought(0.02, 0.9, 0.0, 0.4, 0.1)


def clean(**held: int) -> Clean:
    gates = ("outlier_in_series", "enzyme_inactivation", "standard_curve")
    rows = [
        CleanGate(name, "well", 0 if name == "standard_curve" else 400, held.get(name, 0), 0)
        for name in gates
    ]
    return Clean(tuple(rows), 400, held.get("wells", 0), 0.03)


def curve(name: str, caught: int, named: int) -> Curve:
    return Curve(trial(name), (Caught(trial(name).clear, 100, 80, caught, named, caught, named),))


def test_the_page_is_whole_and_narrow_and_good_where_every_figure_is_reached():
    curves = [curve(name, 80, 80) for name in WANTED]
    text, kept = report(clean(), clean(), curves, BUYS, Cost(16, 20.0, 1.0))
    assert kept
    assert max(len(line) for line in text.splitlines()) <= 80
    assert all(name in text for name in WANTED)
    assert "nothing to judge by" in text


@pytest.mark.parametrize(
    ("plain", "curves", "costs"),
    [
        (clean(outlier_in_series=5), [curve("edge effect", 80, 80)], Cost(16, 20.0, 1.0)),
        (clean(wells=13), [curve("edge effect", 80, 80)], Cost(16, 20.0, 1.0)),
        (clean(), [curve("edge effect", 78, 78)], Cost(16, 20.0, 1.0)),
        (clean(), [curve("edge effect", 80, 75)], Cost(16, 20.0, 1.0)),
        (clean(), [curve("edge effect", 80, 80)], Cost(16, 20.0, 2.5)),
    ],
)
def test_one_figure_that_is_missed_is_marked_and_fails_the_page(plain, curves, costs):
    text, kept = report(plain, clean(), curves, BUYS, costs)
    assert not kept
    assert any(flag in text for flag in ("above", "short"))


def test_gates_of_several_enzyme_levels_are_counted_where_there_are_several():
    names = [(row.gate, row.held) for row in clean_rows(clean(), clean(enzyme_inactivation=1))]
    assert names == [("outlier_in_series", 0), ("standard_curve", 0), ("enzyme_inactivation", 1)]
    levels = two_level_bench(the_bench()).design.wells.groupby("lot")["enzyme_nm"].nunique()
    assert levels.to_dict() == {"lot": 2, "reference": 1}


def test_a_small_run_counts_every_plate_and_gates_buy_better_constants():
    chosen = parts(the_bench(), 2, SEED, ("highest substrate over K",))
    plain, fault = chosen[0].run(), chosen[2].run()
    assert isinstance(plain, Clean)
    assert plain.well_count == 2 * 48
    assert isinstance(fault, Curve)
    assert fault.points[0].large_named == fault.points[0].plates == 2
    buys = bought(the_bench(), 6, SEED)
    assert buys.km_error_without > 3 * buys.km_error_with
    assert 0.0 <= buys.undecided < 1.0


def test_cost_is_of_whole_plates_and_the_gates_are_part_of_it():
    found = cost(replace(the_bench()), 1, runs=1)
    assert found.plates == 1
    assert found.plain_s > 0.0
    assert math.isfinite(found.share)
