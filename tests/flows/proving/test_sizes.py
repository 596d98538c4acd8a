"""Sizes of faults in standard errors: against regressions with the fault as one more term, and by chance."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pandas as pd
import pytest

from flows.proving.bench import common_bench
from flows.proving.sizes import curve_size, edge_error, relative_errors, residual_error
from models.plates import plate_format, well_position
from models.simulation import TRIPLICATE_NOISE, Noise, simulate_plate
from models.simulation.faults import Bubble, Depletion, Lag, PipettingError
from tests.flows.proving.test_proving import PROFILE, bench

RNG = np.random.default_rng


def rates_of(made) -> pd.DataFrame:
    """Rates as the truth has them, with an error that grows towards low rates."""
    wells = made.design.wells
    wells = wells[wells["lot"].notna()]
    k = np.array([made.truth[lot].k_um for lot in wells["lot"]])
    v = 0.05 * wells["substrate_um"] / (k + wells["substrate_um"])
    return wells.assign(v0_um_per_s=v, v0_se_um_per_s=2e-4 + 0.01 * v).reset_index(drop=True)


def coefficient_error(terms: np.ndarray, sigma: np.ndarray) -> float:
    """Standard error of the last term's coefficient in a weighted regression."""
    scaled = terms / sigma[:, None]
    return float(np.sqrt(np.linalg.inv(scaled.T @ scaled)[-1, -1]))


def test_the_size_of_a_curved_trace_is_what_repeated_estimates_scatter_by():
    made = bench()
    design = replace(made.design, wells=made.design.wells.query("well == 'D2'"))
    fault = (Lag(40.0, ("D2",)),)

    def signal(faults, noise, seed):
        return simulate_plate(design, made.truth, noise, faults, RNG(seed)).signal[0]

    clean = signal((), Noise(), 0)
    trace = signal(fault, Noise(), 0) - clean
    more = signal((PipettingError(enzyme_factor=1.001),), Noise(), 0) - clean
    terms = np.stack([np.ones_like(clean), more, trace], axis=1)
    noise = Noise(signal_sd=made.noise.signal_sd)
    found = [np.linalg.lstsq(terms, signal((), noise, n) - clean, rcond=None)[0][-1] for n in range(800)]
    assert curve_size(made, fault, ("D2",), (600.0,)) == pytest.approx(1.0 / np.std(found), rel=0.08)


def test_more_enzyme_leaves_no_trace_of_its_own_and_two_wells_tell_more_than_one():
    made = bench()
    assert curve_size(made, (Depletion(1.05, ("D2",)),), ("D2",), (600.0,)) < 0.1
    one = curve_size(made, (Bubble(200.0, 0.1, ("D2",)),), ("D2",), (600.0,))
    both = curve_size(made, (Bubble(200.0, 0.1, ("D2", "D3")),), ("D2", "D3"), (600.0, 600.0))
    assert both == pytest.approx(one * np.sqrt(2.0), rel=1e-6)
    assert curve_size(made, (Bubble(200.0, 0.1, ("D2",)),), ("D2",), (150.0,)) == 0.0


def test_without_noise_every_fault_is_large():
    quiet = replace(bench(), noise=Noise())
    assert curve_size(quiet, (Lag(1.0, ("D2",)),), ("D2",), (600.0,)) == np.inf


def test_a_wells_error_is_that_of_a_term_of_its_own_beside_the_lots_constants():
    made = bench()
    rates = rates_of(made).query("lot == 'lot'").reset_index(drop=True)
    sigma = relative_errors(made, rates)
    order = 80.0 / (80.0 + rates["substrate_um"].to_numpy())
    for place in (0, 12, 23):
        own = (np.arange(len(rates)) == place).astype(float)
        terms = np.stack([np.ones(len(rates)), -order, own], axis=1)
        expected = coefficient_error(terms, sigma)
        assert residual_error(made, rates, rates["well"][place]) == pytest.approx(expected, rel=1e-6)
        assert expected > sigma[place]


def test_the_edges_error_is_that_of_a_term_beside_the_mean_of_every_condition():
    made = bench()
    # The same scatter in all wells of a condition, and replicates that lie wholly at the edge tell nothing.
    rates = rates_of(made)
    form = plate_format(made.design.well_count)
    places = [well_position(well) for well in rates["well"]]
    edge = np.array([r in (1, form.row_count) or c in (1, form.column_count) for r, c in places], dtype=float)
    conditions = pd.get_dummies(rates["lot"] + rates["substrate_um"].astype(str)).to_numpy(dtype=float)
    terms = np.concatenate([conditions, edge[:, None]], axis=1)
    assert edge_error(made, rates) == pytest.approx(
        coefficient_error(terms, relative_errors(made, rates)), rel=1e-6
    )
    inside = rates[~edge.astype(bool)]
    assert edge_error(made, inside) == np.inf


def test_dispensing_and_the_rates_own_errors_add_up():
    made = common_bench("a", bench().assay, PROFILE, bench().limits, noise=TRIPLICATE_NOISE)
    rates = rates_of(made)
    found = relative_errors(made, rates)
    assert found.min() >= TRIPLICATE_NOISE.enzyme_cv
    exact = relative_errors(replace(made, noise=Noise()), rates)
    np.testing.assert_allclose(exact, rates["v0_se_um_per_s"] / rates["v0_um_per_s"])
