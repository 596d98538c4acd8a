"""Gates on fitted series: low end, replicates, enzyme, misfit, whole curves; the reference on its chart."""

from __future__ import annotations

import statistics
from collections.abc import Callable
from dataclasses import replace
from typing import Any

import numpy as np
import pandas as pd
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from pydantic import ValidationError
from scipy.stats import chi2

from checks.gates.fit_misfit import GATE as FIT_MISFIT
from checks.gates.gate import Gate, GateInput
from checks.gates.initial_vs_full_curve import GATE as INITIAL_VS_FULL_CURVE
from checks.gates.low_end_not_covered import GATE as LOW_END
from checks.gates.reference_off_chart import GATE as REFERENCE_OFF_CHART
from checks.gates.replicate_scatter import GATE as REPLICATE_SCATTER
from checks.gates.steady_state_valid import GATE as STEADY_STATE
from tests.checks.batches import an_assay, clean_series, judged, with_assay, with_estimate, with_frame

NAN = float("nan")
HYPERBOLIC = {"series_id": "hyperbolic"}
OF_SERIES = (LOW_END, REPLICATE_SCATTER, STEADY_STATE, FIT_MISFIT, INITIAL_VS_FULL_CURVE)
ALL_GATES = (*OF_SERIES, REFERENCE_OFF_CHART)


def told(findings: pd.DataFrame) -> list[list[Any]]:
    return findings[["subject", "series_id", "outcome", "severity"]].to_numpy().tolist()


HELD = [["series", "hyperbolic", "breach", "hold"]]
UNKNOWN = [["series", "hyperbolic", "not_assessed", "none"]]


def not_assessed(findings: pd.DataFrame, words: str) -> bool:
    return told(findings) == UNKNOWN and words in findings["sentence"].iloc[0]


@pytest.mark.parametrize("gate", ALL_GATES, ids=lambda gate: gate.name)
def test_a_clean_series_is_judged_and_not_held(gate: Gate) -> None:
    assert judged(gate, clean_series()).empty
    assert gate.metrics(clean_series())["reason"].isna().all()


@pytest.mark.parametrize("gate", ALL_GATES, ids=lambda gate: gate.name)
def test_gates_on_fits_need_fits(gate: Gate) -> None:
    data = clean_series()
    bare = replace(data, series=None, estimates=None, fits=None, points=None, comparisons=None)
    with pytest.raises(ValueError, match="judges fits: it needs"):
        judged(gate, bare)


@pytest.mark.parametrize("gate", OF_SERIES, ids=lambda gate: gate.name)
def test_a_refused_series_is_not_assessed_and_says_why(gate: Gate) -> None:
    data = with_frame(clean_series(), "series", HYPERBOLIC, refusal="two levels only", law=None)
    kept = {name: getattr(data, name) for name in ("estimates", "fits", "points", "comparisons")}
    kept = {name: frame[frame["series_id"] != "hyperbolic"] for name, frame in kept.items()}
    assert not_assessed(judged(gate, replace(data, **kept)), "the series was not fitted: two levels only")


@pytest.mark.parametrize("gate", OF_SERIES, ids=lambda gate: gate.name)
def test_fits_that_do_not_count_are_not_judged(gate: Gate) -> None:
    data = clean_series()
    assert data.estimates is not None
    assert data.fits is not None
    assert data.points is not None
    held = {"fit_id": "with held wells", "wells": "all", "lack_of_fit_p": 1e-9, "runs_p": 1e-9}
    other = {"fit_id": "not chosen", "chosen": False, "lack_of_fit_p": 1e-9, "runs_p": 1e-9}
    grid = {"fit_id": "of a grid", "series_id": None, "grid_id": "g", "lack_of_fit_p": 1e-9}
    fits = [data.fits, *(data.fits.assign(**kind) for kind in (held, other, grid))]
    estimates = data.estimates.assign(wells="all", value=1e-6)
    points = data.points.assign(fit_id="with held wells", v_um_per_s=np.arange(20.0) ** 3)
    every = replace(
        data,
        fits=pd.concat(fits),
        estimates=pd.concat([estimates, data.estimates]),
        points=pd.concat([points, data.points]),
    )
    assert judged(gate, every).empty


@pytest.mark.parametrize(
    ("series", "constant", "k_um", "words"),
    [
        ("hyperbolic", "km", 10.0, None),
        (
            "hyperbolic",
            "km",
            9.9,
            "10 µM, is 1.01 times Km (limit 1): every level runs at 50 % of Vmax or more, so Km rests on",
        ),
        ("hyperbolic", "km", 2.5, "is 4.0 times Km (limit 1): every level runs at 80 % of Vmax"),
        ("cooperative", "k_half", 10.0, None),
        # (10 / 5)^2 = 4, so 80 % though S / K0.5 is 2.
        ("cooperative", "k_half", 5.0, "is 2.0 times K0.5 (limit 1): every level runs at 80 % of Vmax"),
    ],
)
def test_the_lowest_level_lies_at_k_or_below(
    series: str, constant: str, k_um: float, words: str | None
) -> None:
    findings = judged(LOW_END, with_estimate(clean_series(), series, constant, value=k_um))
    assert findings["series_id"].tolist() == ([] if words is None else [series])
    if words is not None:
        assert words in findings["sentence"].iloc[0]
        assert findings[["measured", "limit_value"]].to_numpy().tolist() == [
            [pytest.approx(10.0 / k_um), 1.0]
        ]


@pytest.mark.parametrize("gate", [LOW_END, STEADY_STATE], ids=lambda gate: gate.name)
@pytest.mark.parametrize("values", [{"unit": "mmol/L"}, {"value": NAN}, {"chosen": False}, {"value": 0.0}])
def test_without_a_k_there_is_nothing_to_compare(gate: Gate, values: dict[str, object]) -> None:
    data = with_estimate(clean_series(), "hyperbolic", "km", **values)
    assert not_assessed(judged(gate, data), "no K in umol/L")


def replicates(rates: list[float], error: float = 0.01, level: float = 40.0) -> GateInput:
    """The clean batch with other rates in the wells of one level of the hyperbolic series."""
    data = clean_series()
    assert data.points is not None
    wells = data.wells[(data.wells["analysis_id"] == "plate-1") & (data.wells["substrate_um"] == level)]
    names = wells["well"][wells["series_id"].notna()].tolist()
    for well, rate in zip(names, rates, strict=True):
        place = {"analysis_id": "plate-1", "well": well}
        data = with_frame(data, "points", place, v_um_per_s=rate)
        data = with_frame(data, "rates", place, v0_se_um_per_s=error)
    return data


def pair(cv: float, mean: float = 0.6) -> list[float]:
    """Two rates with this coefficient of variation: their difference over root 2 over the mean."""
    half = cv * mean / np.sqrt(2.0)
    return [mean - half, mean + half]


def test_replicates_that_differ_by_15_per_cent_hold_their_series() -> None:
    assert judged(REPLICATE_SCATTER, replicates(pair(0.1499))).empty
    findings = judged(REPLICATE_SCATTER, replicates(pair(0.1501)))
    assert told(findings) == HELD
    assert findings["measured"].tolist() == [pytest.approx(0.1501)]
    # Each with an error of 0.01 in 0.6, which explains 1.7 %.
    assert findings["sentence"].tolist() == [
        "Replicates at 40 µM (A3, C1) scatter by 15.01 % (limit 15 %), of which their own errors explain "
        "1.7 %: not all of them can be right, and the fit rests on them alike."
    ]


def test_scatter_that_the_rates_own_errors_explain_holds_nothing() -> None:
    # Six wells of the four levels with pairs: chi-square of 1 degree at 0.01 / 4 is 9.14; here
    # (difference)^2 / (2 SE^2) is just below and just above it.
    critical = float(chi2.isf(0.01 / 4, 1))
    assert critical == pytest.approx(9.14, abs=0.01)
    low, high = pair(0.5)
    error = (high - low) / np.sqrt(2.0 * critical)
    assert judged(REPLICATE_SCATTER, replicates(pair(0.5), error * 1.001)).empty
    assert told(judged(REPLICATE_SCATTER, replicates(pair(0.5), error * 0.999))) == HELD


def test_errors_that_are_not_known_excuse_nothing() -> None:
    findings = judged(REPLICATE_SCATTER, replicates(pair(0.2), NAN))
    assert told(findings) == HELD
    assert "explain" not in findings["sentence"].iloc[0]


def test_a_noisy_level_does_not_hide_a_bad_one() -> None:
    data = replicates(pair(0.9, 0.2), error=1.0, level=80.0)
    worse = replicates(pair(0.3), level=40.0)
    assert judged(REPLICATE_SCATTER, data).empty
    assert data.points is not None
    assert worse.points is not None
    both = with_frame(data, "points", {"fit_id": "fit of hyperbolic", "well": "A3"}, v_um_per_s=pair(0.3)[0])
    both = with_frame(both, "points", {"fit_id": "fit of hyperbolic", "well": "C1"}, v_um_per_s=pair(0.3)[1])
    assert "at 40 µM (A3, C1) scatter by 30.0 %" in judged(REPLICATE_SCATTER, both)["sentence"].iloc[0]


def test_wells_that_are_held_have_no_part_and_one_well_is_no_replicate() -> None:
    data = replicates(pair(0.9))
    assert data.points is not None
    out = (data.points["series_id"] == "hyperbolic") & (data.points["well"] == "C1")
    assert judged(REPLICATE_SCATTER, replace(data, points=data.points[~out])).empty
    singles = data.points.drop_duplicates(["series_id", "fitted_um_per_s"])
    findings = judged(REPLICATE_SCATTER, replace(data, points=singles))
    assert findings["outcome"].tolist() == ["not_assessed", "not_assessed"]
    assert findings["sentence"].str.contains("no level of the series has two clear wells").all()


def many_series(rates: np.ndarray, errors: np.ndarray) -> GateInput:
    """Series on plate-1 with levels of replicates: rates and errors, shape (series, levels, replicates)."""
    count = len(rates)
    number, level, _ = (index.reshape(-1) for index in np.indices(rates.shape))
    well = [f"w{place}" for place in range(rates.size)]
    ids = pd.DataFrame({"analysis_id": "plate-1", "well": well})
    name = [f"s{one}" for one in number]
    data = clean_series()
    assert data.series is not None
    assert data.fits is not None
    first = [f"s{one}" for one in range(count)]
    return replace(
        data,
        wells=ids.assign(substrate_um=2.0**level, role="sample"),
        rates=ids.assign(v0_se_um_per_s=errors.reshape(-1)),
        series=pd.DataFrame({"series_id": first, "analysis_id": "plate-1", "refusal": None}),
        fits=pd.DataFrame({"series_id": first, "fit_id": first, "chosen": True, "wells": "clear"}),
        points=ids.assign(series_id=name, fit_id=name, v_um_per_s=rates.reshape(-1)),
    )


@settings(max_examples=40, deadline=None)
@given(st.integers(0, 10**6))
def test_the_worst_level_is_the_one_that_a_plain_loop_finds(seed: int) -> None:
    generator = np.random.default_rng(seed)
    rates = 1.0 + 0.3 * generator.standard_normal((3, 3, 3))
    errors = generator.uniform(0.01, 0.3, rates.shape)
    data = many_series(rates, errors)
    assert data.points is not None
    shuffled = replace(
        data,
        wells=data.wells.sample(frac=1, random_state=seed),
        points=data.points.sample(frac=1, random_state=seed + 1),
        rates=data.rates.sample(frac=1, random_state=seed + 2),
    )
    for batch in (data, shuffled):
        found = REPLICATE_SCATTER.metrics(batch)
        for number, row in enumerate(found.to_dict("records")):
            worst = 0.0
            for rate, error in zip(rates[number], errors[number], strict=True):
                weight = error**-2
                mean = float(np.average(rate, weights=weight))
                if chi2.sf(float(np.sum(weight * (rate - mean) ** 2)), 2) < 0.01 / 3:
                    worst = max(worst, statistics.stdev(rate) / abs(statistics.mean(rate)))
            assert row["unexplained_cv"] == pytest.approx(worst, rel=1e-9)


def test_clean_series_near_the_detection_limit_are_held_less_than_once_in_a_hundred() -> None:
    # 1,000 series of 8 levels in triplicate: 2.8 % of dispensing, and errors up to 40 % of the slowest rate.
    generator = np.random.default_rng(20260301)
    rate = np.geomspace(0.02, 1.0, 8)[None, :, None] * np.ones((1000, 8, 3))
    error = np.full_like(rate, 0.008)
    seen = rate * (1 + 0.028 * generator.standard_normal(rate.shape))
    seen += error * generator.standard_normal(rate.shape)
    cv = REPLICATE_SCATTER.metrics(many_series(seen, error))["unexplained_cv"]
    naive = np.std(seen, axis=2, ddof=1) / np.mean(seen, axis=2)
    assert np.mean(np.max(naive, axis=1) > 0.15) > 0.9
    assert np.mean(cv > 0.15) <= 0.01


@pytest.mark.parametrize(
    ("enzyme", "share", "words"),
    [
        # K + lowest substrate is 90 µM: 900 nM is 1 % of it.
        ({"enzyme_nm": 900.0}, None, ""),
        (
            {"enzyme_nm": 909.0},
            0.0101,
            "The enzyme, 909 nM, is 1.01 % of Km plus the lowest clear substrate, 90",
        ),
        # 50,000 g/mol: 1 nM is 50 ng/mL.
        ({"enzyme_nm": NAN, "enzyme_ng_per_ml": 45_000.0}, None, ""),
        ({"enzyme_nm": NAN, "enzyme_ng_per_ml": 90_000.0}, 0.02, "The enzyme, 1800 nM, is 2.0 % of Km plus"),
    ],
)
def test_enzyme_is_a_hundredth_of_k_and_substrate(
    enzyme: dict[str, float], share: float | None, words: str
) -> None:
    data = with_frame(clean_series(), "series", HYPERBOLIC, **enzyme)
    findings = judged(STEADY_STATE, with_assay(data, molar_mass_g_per_mol=50_000.0))
    assert told(findings) == ([] if share is None else HELD)
    if share is not None:
        assert findings["measured"].tolist() == [pytest.approx(share)]
        assert words in findings["sentence"].iloc[0]


def test_enzyme_by_mass_without_a_molar_mass_is_no_matter_and_unknown_enzyme_is_not_assessed() -> None:
    by_mass = with_frame(clean_series(), "series", HYPERBOLIC, enzyme_nm=NAN, enzyme_ng_per_ml=1e9)
    assert judged(STEADY_STATE, by_mass).empty
    assert STEADY_STATE.metrics(by_mass)["series_id"].tolist() == ["cooperative"]
    unknown = with_frame(clean_series(), "series", HYPERBOLIC, enzyme_nm=NAN)
    assert not_assessed(judged(STEADY_STATE, unknown), "does not say how much enzyme")


@pytest.mark.parametrize(
    ("lack", "runs", "p_value", "words"),
    [
        # Two tests share the limit of 0.01, whether or not both can be told.
        (0.005, 0.5, None, ""),
        (
            0.0049,
            0.5,
            0.0098,
            "misses the means of replicates by more than these scatter: chance does that with",
        ),
        (0.5, 0.0049, 0.0098, "lies above its rates over one stretch of substrate and below over another"),
        (0.0049, NAN, 0.0098, "with a probability of 0.0098, two tests allowed for (limit 0.01)"),
        (NAN, 0.0049, 0.0098, "lies above its rates"),
        (0.005, NAN, None, ""),
        (1e-12, 0.3, 2e-12, "below 0.0001, two tests allowed for (limit 0.01)"),
    ],
)
def test_misfit_is_held_at_one_in_a_hundred(
    lack: float, runs: float, p_value: float | None, words: str
) -> None:
    data = with_frame(clean_series(), "fits", HYPERBOLIC, lack_of_fit_p=lack, runs_p=runs)
    findings = judged(FIT_MISFIT, data)
    assert told(findings) == ([] if p_value is None else HELD)
    if p_value is not None:
        assert findings["measured"].tolist() == [pytest.approx(p_value)]
        assert words in findings["sentence"].iloc[0]


def test_a_series_of_few_single_wells_cannot_show_a_misfit() -> None:
    data = with_frame(clean_series(), "fits", HYPERBOLIC, lack_of_fit_p=NAN, runs_p=NAN)
    assert not_assessed(judged(FIT_MISFIT, data), "neither replicates nor levels enough")


def test_two_tests_of_a_true_law_together_hold_one_in_a_hundred() -> None:
    # Under the law both p values are uniform; independent, they are the worst case that Bonferroni allows.
    p = np.random.default_rng(20260302).uniform(size=(20_000, 2))
    names = [f"s{number}" for number in range(len(p))]
    data = clean_series()
    series = pd.DataFrame({"series_id": names, "analysis_id": "plate-1", "refusal": None})
    fits = pd.DataFrame({"series_id": names, "chosen": True, "wells": "clear", "law": "hill"})
    fits = fits.assign(lack_of_fit_p=p[:, 0], runs_p=p[:, 1])
    found = FIT_MISFIT.metrics(replace(data, series=series, fits=fits))["p_value"]
    assert 0.007 < np.mean(found < 0.01) <= 0.012


def test_whole_curves_that_tell_another_km_hold_their_series() -> None:
    values = {"km_ratio": 1.42, "km_ratio_low": 1.18, "km_ratio_high": NAN, "vmax_ratio": 0.97}
    same = with_frame(clean_series(), "comparisons", HYPERBOLIC, p_value=0.01, **values)
    assert judged(INITIAL_VS_FULL_CURVE, same).empty
    other = with_frame(clean_series(), "comparisons", HYPERBOLIC, p_value=0.0099, **values)
    findings = judged(INITIAL_VS_FULL_CURVE, other)
    assert told(findings) == HELD
    assert findings["sentence"].tolist() == [
        "Whole curves give 1.42 times the Km of the initial rates (95 % 1.18 to open) and 0.97 times their "
        "Vmax: if both were right, that has a probability of 0.0099 (limit 0.01). Something changes during "
        "the read."
    ]


def test_a_comparison_that_is_missing_is_not_assessed_unless_the_law_has_no_whole_curve() -> None:
    data = clean_series()
    assert data.comparisons is not None
    none = replace(data, comparisons=data.comparisons[:0])
    assert not_assessed(judged(INITIAL_VS_FULL_CURVE, none), "whole curves gave no estimate to compare")
    unknown = with_frame(data, "comparisons", HYPERBOLIC, p_value=NAN)
    assert not_assessed(judged(INITIAL_VS_FULL_CURVE, unknown), "uncertainty of the two estimates together")


def charted(constant: str, value: float, series: str = "hyperbolic") -> GateInput:
    return with_estimate(clean_series(), series, constant, value=value)


@pytest.mark.parametrize(
    ("value", "words"),
    [
        # The chart of Km is 80 with a standard deviation of 4.
        (91.9, None),
        (68.1, None),
        (92.1, "Km of the reference lot R1 is 92.1 umol/L, 3.02 sd from the 80 of its chart (limit 3 sd)"),
        (60.0, "Km of the reference lot R1 is 60 umol/L, 5.0 sd from the 80 of its chart (limit 3 sd)"),
    ],
)
def test_a_reference_beyond_3_sd_of_its_chart_holds_the_plate(value: float, words: str | None) -> None:
    findings = judged(REFERENCE_OFF_CHART, charted("km", value))
    expected = [] if words is None else [["plate_read", "plate-1", "breach", "hold"]]
    assert findings[["subject", "analysis_id", "outcome", "severity"]].to_numpy().tolist() == expected
    if words is not None:
        assert words in findings["sentence"].iloc[0]
        assert findings["measured"].tolist() == [pytest.approx(abs(value - 80.0) / 4.0)]


def test_the_constant_furthest_off_tells() -> None:
    bases = [
        {"lot": "R1", "constant": "km", "mean": 70.0, "sd": 3.0, "source": "invented"},
        {"lot": "R1", "constant": "vmax", "mean": 1.0, "sd": 0.1, "source": "invented"},
    ]
    findings = judged(REFERENCE_OFF_CHART, with_assay(clean_series(), chart_bases=bases))
    assert findings["measured"].tolist() == [pytest.approx(10.0), pytest.approx(10.0)]
    assert findings["sentence"].str.startswith("Vmax of the reference lot R1 is 2 umol/L/s").all()


OFF = [{"lot": "R1", "constant": "km", "mean": 1.0, "sd": 0.1, "source": "invented"}]
NO_MATTER: dict[str, Callable[[GateInput], GateInput]] = {
    "no base": lambda data: with_assay(data, chart_bases=[]),
    "base of another lot": lambda data: with_assay(data, chart_bases=[OFF[0] | {"lot": "R2"}]),
}


@pytest.mark.parametrize("name", NO_MATTER)
def test_a_reference_without_a_base_has_no_chart(name: str) -> None:
    data = NO_MATTER[name](clean_series())
    assert REFERENCE_OFF_CHART.metrics(data).empty
    assert judged(REFERENCE_OFF_CHART, data).empty


def test_a_chart_without_a_reference_or_its_constant_is_not_assessed() -> None:
    data = with_assay(clean_series(), chart_bases=OFF)
    findings = judged(REFERENCE_OFF_CHART, data)
    # The cooperative series has no Km to put on the chart.
    assert findings[["analysis_id", "outcome"]].to_numpy().tolist() == [
        ["plate-1", "breach"],
        ["plate-2", "not_assessed"],
    ]
    assert "no clear estimate of a constant on its chart" in findings["sentence"].iloc[1]
    samples = replace(data, wells=data.wells.assign(role="sample"), series=data.series.assign(role="sample"))
    assert (
        judged(REFERENCE_OFF_CHART, samples)["sentence"].tolist()
        == ["Not assessed: the plate has no reference lot, for which the assay states a chart."] * 2
    )


def test_what_a_modulator_does_to_the_reference_is_not_on_its_chart() -> None:
    data = with_assay(clean_series(), chart_bases=OFF)
    findings = judged(REFERENCE_OFF_CHART, with_frame(data, "series", HYPERBOLIC, modulator_um=5.0))
    assert findings["outcome"].tolist() == ["not_assessed", "not_assessed"]
    assert len(judged(REFERENCE_OFF_CHART, with_frame(data, "series", HYPERBOLIC, modulator_um=0.0))) == 2


@pytest.mark.parametrize(
    ("bases", "message"),
    [
        (OFF * 2, "chart_bases state km of lot R1 twice"),
        ([OFF[0] | {"sd": 0.0}], "greater than 0"),
        ([OFF[0] | {"mean": -1.0}], "greater than 0"),
        ([{"lot": "R1", "constant": "km", "mean": 1.0, "sd": 0.1}], "source"),
    ],
)
def test_a_chart_base_that_cannot_be_is_refused(bases: list[dict[str, object]], message: str) -> None:
    assert an_assay(chart_bases=OFF).chart_bases[0].mean == 1.0
    with pytest.raises(ValidationError, match=message):
        an_assay(chart_bases=bases)
