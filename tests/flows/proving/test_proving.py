"""Proving: what is simulated, what is caught and by whom, and that the same seed gives the same."""

from __future__ import annotations

import math

import numpy as np
import pytest
from click.testing import CliRunner

from checks.gates import GATES, resolve_limits
from flows.cli.proved import csv_rows, drawing, show
from flows.cli.root import tree
from flows.cli.tables import console
from flows.proving.bench import common_bench
from flows.proving.characteristics import (
    Caught,
    Clean,
    Curve,
    Task,
    prove_clean,
    prove_trial,
    simulate,
    tasks,
    through_line,
)
from flows.proving.trials import TRIALS, for_bench
from flows.site.configuration import load_configuration
from flows.site.layout import create_site
from flows.site.shipped import shipped
from models.errors import ConfigurationError, HalfsatError
from models.simulation import TRIPLICATE_NOISE
from tests.flows.stages.test_rate_and_fit import assay

PROFILE = load_configuration(shipped("config")).profiles["wide"]


def bench(**changes):
    stated = assay(laws=["michaelis_menten"], signal={"kind": "absorbance", "linear_limit": 4.5}, **changes)
    return common_bench("a", stated, PROFILE, resolve_limits({}, stated.gates), noise=TRIPLICATE_NOISE)


def trial(name: str):
    return next(each for each in TRIALS if each.name.startswith(name))


def curve(shares: list[float]) -> Curve:
    sizes = trial("blank").sizes
    points = [
        Caught(size, 20, 20, round(20 * s), 0, 0, 0, (("blank_drift", round(20 * s)), ("fit_misfit", 1)))
        for size, s in zip(sizes, shares, strict=True)
    ]
    return Curve(trial("blank"), tuple(points))


def test_trials_name_gates_that_exist_and_grow_from_hardly_there_to_glaring():
    assert {gate for each in TRIALS for gate in each.named_by} <= set(GATES)
    for each in TRIALS:
        assert each.clear in each.sizes
        ordered = sorted(each.sizes, reverse=each.name.startswith("highest"))
        assert list(each.sizes) == ordered


def test_clean_plates_are_left_alone_and_counted():
    clean = prove_clean(bench(), 6, 1)
    assert clean.well_count == 6 * 48
    assert clean.held_well_count <= 2
    assert {gate.gate for gate in clean.gates} == set(GATES)
    subjects = {(gate.gate, gate.subject): gate.subjects for gate in clean.gates}
    assert subjects["substrate_depletion", "well"] == 6 * 48
    assert subjects["fit_misfit", "series"] == 12
    assert subjects["plate_position", "plate_read"] == 6
    # A lot at one enzyme level, a plate without standards: there is nothing to judge.
    assert subjects["enzyme_inactivation", "lot"] == 0
    assert subjects["standard_curve", "plate_read"] == 0
    assert 0.005 < clean.log_ratio_sd < 0.2
    assert clean.smallest_change(4) == pytest.approx(math.exp(2.8016 * clean.log_ratio_sd / 2) - 1, rel=1e-4)


def test_a_glaring_fault_is_named_by_its_gate_and_a_tiny_one_is_not():
    found = prove_trial(bench(), trial("substrate consumed"), 6, 1, (0.01, 0.4))
    tiny, glaring = found.points
    # A well with enzyme enough for that may lie off its series' curve, but its substrate is not gone.
    assert tiny.named == 0
    assert (glaring.caught, glaring.named, glaring.large) == (6, 6, 6)


def test_sizes_that_go_through_the_line_together_give_what_each_gives_alone():
    lag = trial("lag")
    together = prove_trial(bench(), lag, 2, 3, (0.2, 0.6))
    alone = [prove_trial(bench(), lag, 2, 3, (size,)).points[0] for size in (0.2, 0.6)]
    assert list(together.points) == alone


def test_a_fault_of_a_lot_and_one_of_the_plate_are_caught():
    for name, size in (("highest substrate", 0.5), ("edge effect", 0.2)):
        (point,) = prove_trial(bench(), trial(name), 4, 1, (size,)).points
        assert point.named == 4, name


def test_a_gate_that_is_off_catches_nothing_and_is_not_counted():
    lenient = bench(gates={"detector_range": {"on": False}})
    (point,) = prove_trial(lenient, trial("top reads past"), 3, 1, (1.0,)).points
    assert point.named == 0
    assert "detector_range" not in {gate.gate for gate in prove_clean(lenient, 2, 1).gates}


def test_the_same_seed_gives_the_same_and_a_fault_leaves_the_noise():
    one, other = (Task(bench(), trial("enzyme missing"), 3, 5, (0.25,)).run() for _ in range(2))
    assert one.points == other.points
    quiet = simulate(bench(), (5, 1, 0))
    again = simulate(bench(), (5, 1, 0))
    np.testing.assert_array_equal(quiet.signal, again.signal)
    assert not np.array_equal(quiet.signal, simulate(bench(), (5, 1, 1)).signal)


def test_a_simulated_plate_goes_through_the_line_with_its_constants():
    made = bench()
    fitted = through_line(made, [simulate(made, (1, 0, 0))])
    km = fitted.tables["estimates"].query("constant == 'km' and wells == 'clear'")["value"]
    np.testing.assert_allclose(km, 80.0, rtol=0.1)


def test_gates_that_catch_are_told_in_order_and_those_of_chance_left_out():
    (point,) = prove_trial(bench(), trial("edge effect"), 3, 1, (0.2,)).points
    assert dict(point.gates)["plate_position"] == point.caught == 3
    assert curve([0.0, 0.2, 0.5, 1.0, 1.0]).caught_by() == ("blank_drift",)


def test_the_size_caught_lies_between_the_sizes_tried():
    assert curve([0.0, 0.0, 0.5, 1.0, 1.0]).size_caught(0.5) == pytest.approx(0.15)
    assert curve([0.0, 0.0, 0.5, 1.0, 1.0]).size_caught(0.95) == pytest.approx(0.195)
    assert math.isnan(curve([0.0, 0.1, 0.1, 0.2, 0.2]).size_caught(0.5))
    # A dip between is chance: the curve that is read rises.
    assert curve([0.0, 0.6, 0.4, 1.0, 1.0]).size_caught(0.5) == pytest.approx(0.1)


def test_what_an_assay_cannot_have_is_not_tried():
    plain = for_bench(bench())
    assert not any(each.name.startswith("temperature") for each in plain)
    warm = for_bench(bench(conditions={"temperature_c": 30.0}))
    assert any(each.name.startswith("temperature") for each in warm)


def test_an_assay_with_a_standard_curve_is_refused_with_a_way_out():
    curve_assay = assay(absorption=None, standard_curve={"points_from": "plate"})
    with pytest.raises(HalfsatError, match="standard curve cannot be proved"):
        common_bench("a", curve_assay, PROFILE, resolve_limits({}, {}))


def test_parts_are_clean_plates_and_every_fault():
    parts = tasks(bench(), 4, 1)
    assert parts[0].trial is None
    assert [part.trial.name for part in parts[1:]] == [each.name for each in for_bench(bench())]
    assert all(part.sizes == (part.trial.clear,) for part in tasks(bench(), 4, 1, clear_only=True)[1:])


def test_tables_hold_at_80_columns_and_rows_and_drawing_say_the_same(capsys):
    clean = Clean((), 100, 1, 0.03)
    curves = [curve([0.0, 0.2, 0.5, 1.0, 1.0])]
    show(console(), bench(), clean, curves)
    printed = capsys.readouterr().out
    assert max(len(line) for line in printed.splitlines()) <= 80
    assert "15 %" in printed
    assert "blank_drift" in printed
    rows = csv_rows(clean, curves)
    assert [row[7] for row in rows[1:]] == [0, 4, 10, 20, 20]
    assert {len(row) for row in rows} == {len(rows[0])}
    assert rows[-1][-1] == "blank_drift:20 fit_misfit:1"
    assert b"<svg" in drawing(curves, ".svg")


def test_the_command_names_the_assays_that_there_are_and_the_figures_it_can_write(tmp_path):
    site = create_site(tmp_path / "site", shipped("config"))
    given = ["site", "prove", "--site", str(site.root), "--assay"]
    unknown = CliRunner().invoke(tree, [*given, "nonesuch"])
    assert isinstance(unknown.exception, ConfigurationError)
    assert "alkaline_phosphatase_405" in str(unknown.exception)
    odd = CliRunner().invoke(tree, [*given, "alkaline_phosphatase_405", "--plot", "rates.bmp"])
    assert odd.exit_code == 2
    assert ".svg, .png or .pdf" in odd.output
