"""Gates that judge wells, plates and lots by fits and curves: outliers, position, linearity, inactivation.

Batches are made by hand: exact Michaelis-Menten rates with scatter from a seeded generator, and what is wrong
with one of them.
"""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pandas as pd
import pytest

from checks.assess import assess
from checks.gates import enzyme_inactivation, enzyme_linearity, outlier_in_series, plate_position
from checks.gates.gate import Gate, GateInput, Phase
from checks.gates.limits import resolve
from models.kinetics.progress.integrated import product_formed
from tests.checks.batches import an_assay

KM_UM, VMAX_PER_NM = 80.0, 0.05
LEVELS_UM = 80.0 * np.geomspace(0.25, 12.0, 8)
TIME_S = np.arange(31) * 20.0
SCATTER = 0.02


def a_plate(
    enzyme_nm: tuple[float, ...] = (1.0,), plate: str = "plate-1", seed: int = 1, loss_per_s: float = 0.0
) -> GateInput:
    """A lot in triplicate columns of each enzyme level, substrate down the rows; the fit is the truth."""
    rng = np.random.default_rng(seed)
    rows = [
        {
            "analysis_id": plate,
            "well": f"{'ABCDEFGH'[row]}{3 * level + column + 1}",
            "row_number": row + 1,
            "column_number": 3 * level + column + 1,
            "role": "sample",
            "lot": "L1",
            "substrate_um": substrate,
            "enzyme_nm": enzyme,
            "series_id": f"{plate} series {level}",
        }
        for level, enzyme in enumerate(enzyme_nm)
        for row, substrate in enumerate(LEVELS_UM)
        for column in range(3)
    ]
    wells = pd.DataFrame(rows)
    fitted = VMAX_PER_NM * wells["enzyme_nm"] * wells["substrate_um"] / (KM_UM + wells["substrate_um"])
    scatter = SCATTER * rng.standard_normal(len(wells))
    rate = fitted * (1 + scatter)
    rates = wells[["analysis_id", "well"]].assign(
        v0_um_per_s=rate,
        v0_se_um_per_s=0.002 * fitted,
        raw_rate_um_per_s=rate,
        blank_rate_um_per_s=0.0,
        mean_substrate_um=wells["substrate_um"],
        shape="straight",
    )
    product = product_formed(
        wells["substrate_um"].to_numpy()[:, None],
        (VMAX_PER_NM * wells["enzyme_nm"] * (1 + scatter)).to_numpy()[:, None],
        KM_UM,
        TIME_S,
        np.inf,
        loss_per_s,
    )
    product = product + 0.24 * rng.standard_normal(product.shape)
    readings = pd.DataFrame(
        {
            "analysis_id": plate,
            "well": np.repeat(wells["well"].to_numpy(), TIME_S.size),
            "read_number": np.tile(np.arange(1, TIME_S.size + 1), len(wells)),
            "time_s": np.tile(TIME_S, len(wells)),
            "signal": product.ravel() * 0.006,
            "state": "ok",
            "product_um": product.ravel(),
        }
    )
    series = wells.drop_duplicates("series_id")[["series_id", "analysis_id", "lot", "enzyme_nm"]]
    fits = series.assign(
        fit_id="fit of " + series["series_id"],
        law="michaelis_menten",
        wells="clear",
        chosen=True,
        point_count=24,
        degrees_of_freedom=22,
    )
    points = wells[["analysis_id", "well", "series_id", "substrate_um"]].assign(
        fit_id="fit of " + wells["series_id"],
        v_um_per_s=rate,
        fitted_um_per_s=fitted,
        v_sd_um_per_s=SCATTER * fitted,
        leverage=2 / 24,
        studentised_residual=(scatter - scatter.mean()) / scatter.std(),
    )
    return GateInput(
        pd.DataFrame({"analysis_id": [plate], "recipe_id": "recipe-1", "assay": "an assay"}),
        wells,
        readings,
        rates,
        series=series.assign(refusal=None),
        fits=fits,
        points=points,
        plate_reads=pd.DataFrame({"analysis_id": [plate], "plate_format": 96}),
        assays={"recipe-1": an_assay()},
    )


def findings_of(gate: Gate, phase: Phase, data: GateInput, **settings: float | bool) -> pd.DataFrame:
    limits = resolve({gate.name: gate}, {gate.name: settings}, {})
    return assess(phase, data, {"recipe-1": limits}, {gate.name: gate}).findings


def with_rates_times(data: GateInput, chosen: pd.Series, factor: float) -> GateInput:
    """The batch with the rates of some wells multiplied, in rates and points."""
    assert data.points is not None
    times = np.where(chosen, factor, 1.0)
    return replace(
        data,
        rates=data.rates.assign(v0_um_per_s=data.rates["v0_um_per_s"] * times),
        points=data.points.assign(v_um_per_s=data.points["v_um_per_s"] * times),
    )


def with_points(data: GateInput, well: str, **values: object) -> GateInput:
    assert data.points is not None
    points = data.points.copy()
    for name, value in values.items():
        points.loc[points["well"] == well, name] = value
    return replace(data, points=points)


OUTLIER, POSITION = outlier_in_series.GATE, plate_position.GATE
LINEARITY, INACTIVATION = enzyme_linearity.GATE, enzyme_inactivation.GATE


@pytest.mark.parametrize(
    ("gate", "phase"),
    [(OUTLIER, "fit"), (POSITION, "series"), (LINEARITY, "series"), (INACTIVATION, "series")],
)
def test_clean_plates_have_no_finding(gate: Gate, phase: Phase) -> None:
    for seed in range(5):
        assert findings_of(gate, phase, a_plate((1.0, 2.0), seed=seed)).empty


def test_a_well_far_from_its_series_is_held_with_what_was_measured() -> None:
    # t = 6 among 24 points with 21 degrees of freedom: 24 x 2 x 2.96e-6 (Student's distribution, scipy).
    fitted = VMAX_PER_NM * LEVELS_UM[2] / (KM_UM + LEVELS_UM[2])
    data = with_points(a_plate(), "C2", studentised_residual=6.0, v_um_per_s=1.24 * fitted)
    findings = findings_of(OUTLIER, "fit", data)
    assert findings[["well", "outcome", "severity"]].to_numpy().tolist() == [["C2", "breach", "hold"]]
    assert findings["measured"].item() == pytest.approx(24 * 2 * 2.93e-6, rel=0.05)
    sentence = findings["sentence"].item()
    # Without its own pull (leverage 1/12) the curve is further off than the residual of 24 %.
    assert "27 % above the curve" in sentence
    assert "6.0 standard errors" in sentence
    assert "(limit 0.01)" in sentence
    assert findings_of(OUTLIER, "fit", data, limit=1e-5).empty


def test_the_number_of_points_tried_counts() -> None:
    # Two-sided p of t = 4 with 21 degrees of freedom is 6.5e-4: over 24 points 0.016, over 8 points 0.005.
    data = with_points(a_plate(), "C2", studentised_residual=-4.0)
    assert findings_of(OUTLIER, "fit", data).empty
    assert data.fits is not None
    fewer = replace(data, fits=data.fits.assign(point_count=8))
    assert findings_of(OUTLIER, "fit", fewer)["well"].tolist() == ["C2"]


def test_only_fits_that_count_are_judged() -> None:
    data = with_points(a_plate(), "C2", studentised_residual=9.0)
    assert data.fits is not None
    other = replace(data, fits=data.fits.assign(wells="all"))
    findings = findings_of(OUTLIER, "fit", other)
    assert (findings["outcome"] == "not_assessed").all()
    assert len(findings) == 24
    assert findings["sentence"].unique().tolist() == ["Not assessed: its series was not fitted."]


@pytest.mark.parametrize(
    ("degrees", "residual", "words"),
    [(1, 2.0, "no rate to spare"), (22, np.nan, "the fit's scatter cannot be told")],
)
def test_a_residual_without_a_scale_is_not_assessed(degrees: int, residual: float, words: str) -> None:
    data = with_points(a_plate(), "C2", studentised_residual=residual)
    assert data.fits is not None
    findings = findings_of(OUTLIER, "fit", replace(data, fits=data.fits.assign(degrees_of_freedom=degrees)))
    assert (findings["outcome"] == "not_assessed").all()
    assert words in findings.loc[findings["well"] == "C2", "sentence"].item()


def test_wells_held_before_are_no_business_of_the_outlier_gate() -> None:
    data = a_plate()
    assert data.points is not None
    assert findings_of(OUTLIER, "fit", replace(data, points=data.points[data.points["well"] != "C2"])).empty


@pytest.mark.parametrize("column", [2, 5])
@pytest.mark.parametrize("factor", [0.9, 1.12])
def test_a_column_that_runs_differently_is_held(column: int, factor: float) -> None:
    data = a_plate((1.0, 2.0))
    moved = with_rates_times(data, data.wells["column_number"] == column, factor)
    findings = findings_of(POSITION, "series", moved)
    assert findings[["subject", "severity"]].to_numpy().tolist() == [["plate_read", "hold"]]
    assert findings["measured"].item() == pytest.approx(abs(factor - 1), abs=0.025)
    assert f"Column {column} runs" in findings["sentence"].item()
    assert ("below" if factor < 1 else "above") in findings["sentence"].item()
    assert findings_of(POSITION, "series", moved, limit=0.3).empty


def test_an_edge_that_runs_differently_is_called_the_edge() -> None:
    data = a_plate((1.0, 1.5, 2.0, 3.0))
    edge = data.wells["row_number"].isin([1, 8]) | data.wells["column_number"].isin([1, 12])
    findings = findings_of(POSITION, "series", with_rates_times(data, edge, 0.9))
    assert "The edge of the plate runs" in findings["sentence"].item()
    assert findings["measured"].item() == pytest.approx(0.1, abs=0.025)


def test_a_curve_that_does_not_fit_is_not_blamed_on_the_rows() -> None:
    data = a_plate((1.0, 2.0))
    assert findings_of(POSITION, "series", with_rates_times(data, data.wells["row_number"] == 3, 1.3)).empty


def test_small_or_chance_effects_are_left_alone() -> None:
    data = a_plate((1.0, 2.0))
    column = data.wells["column_number"] == 2
    assert findings_of(POSITION, "series", with_rates_times(data, column, 0.97), limit=0.05).empty
    one_well = (data.wells["well"] == "C2") | (data.wells["well"] == "D2")
    assert findings_of(POSITION, "series", with_rates_times(data, one_well, 0.9)).empty


def test_a_layout_without_replicates_is_not_assessed() -> None:
    data = a_plate()
    assert data.points is not None
    single = replace(data, points=data.points[data.points["well"].str.endswith("2")])
    findings = findings_of(POSITION, "series", single)
    assert findings["outcome"].tolist() == ["not_assessed"]
    assert "whose condition was also measured elsewhere" in findings["sentence"].item()
    nothing = findings_of(POSITION, "series", replace(data, points=data.points.iloc[:0]))
    assert nothing["sentence"].tolist() == ["Not assessed: no series of the plate was fitted."]


def test_a_plates_finding_does_not_depend_on_the_order_of_its_rows() -> None:
    data = a_plate((1.0, 2.0))
    moved = with_rates_times(data, data.wells["column_number"] == 5, 0.93)
    assert moved.points is not None
    turned = replace(moved, points=moved.points.iloc[::-1], wells=moved.wells.iloc[::-1])
    first, other = (plate_position.metrics(each) for each in (moved, turned))
    assert (
        first[["effect", "p_value"]].to_numpy().tolist() == other[["effect", "p_value"]].to_numpy().tolist()
    )


def test_a_level_out_of_proportion_holds_the_lot() -> None:
    data = a_plate((0.5, 1.0, 2.0))
    findings = findings_of(LINEARITY, "series", with_rates_times(data, data.wells["enzyme_nm"] == 2.0, 0.8))
    assert findings[["subject", "lot", "severity"]].to_numpy().tolist() == [["lot", "L1", "hold"]]
    assert findings["measured"].item() == pytest.approx(0.2, abs=0.03)
    assert "At 2 nM of enzyme the lot runs" in findings["sentence"].item()
    assert "below the line through zero" in findings["sentence"].item()


def test_departures_within_the_limit_or_within_scatter_are_left_alone() -> None:
    data = a_plate((0.5, 1.0))
    top = data.wells["enzyme_nm"] == 1.0
    small = with_rates_times(data, top, 0.94)
    assert findings_of(LINEARITY, "series", small).empty
    assert len(findings_of(LINEARITY, "series", small, limit=0.03)) == 1
    rng = np.random.default_rng(3)
    noisy = with_rates_times(data, top, 0.88)
    wild = 1 + 0.3 * rng.uniform(-1, 1, len(top))
    noisy = replace(noisy, rates=noisy.rates.assign(v0_um_per_s=noisy.rates["v0_um_per_s"] * wild))
    assert findings_of(LINEARITY, "series", noisy).empty


def test_the_substrate_that_is_used_up_is_no_lack_of_proportion() -> None:
    # With four times the enzyme the mean substrate is 8 % lower; at low substrate the rate is 8 % lower too.
    data = a_plate((0.5, 2.0))
    left = np.where(data.wells["enzyme_nm"] == 2.0, 0.84, 0.99)
    mean = data.wells["substrate_um"] * left
    slower = (mean / (KM_UM + mean)) / (data.wells["substrate_um"] / (KM_UM + data.wells["substrate_um"]))
    rates = data.rates.assign(
        mean_substrate_um=mean, v0_um_per_s=data.rates["v0_um_per_s"].to_numpy() * slower.to_numpy()
    )
    found = enzyme_linearity.metrics(replace(data, rates=rates))
    unaware = enzyme_linearity.metrics(
        replace(data, rates=rates.assign(mean_substrate_um=data.wells["substrate_um"]))
    )
    assert abs(found["departure"].item()) < 0.02
    assert abs(unaware["departure"].item()) > 0.05


def test_wells_that_the_fit_left_out_do_not_bend_the_line() -> None:
    data = a_plate((0.5, 1.0))
    moved = with_rates_times(data, data.wells["enzyme_nm"].eq(1.0) & data.wells["row_number"].le(4), 0.5)
    assert moved.points is not None
    kept = moved.points.merge(data.wells[["well", "enzyme_nm", "row_number"]], on="well")
    kept = kept[~(kept["enzyme_nm"].eq(1.0) & kept["row_number"].le(4))]
    assert not findings_of(LINEARITY, "series", moved).empty
    assert findings_of(LINEARITY, "series", replace(moved, points=kept)).empty


@pytest.mark.parametrize("gate", [LINEARITY, INACTIVATION])
def test_at_one_enzyme_level_the_question_does_not_arise(gate: Gate) -> None:
    assert findings_of(gate, "series", a_plate()).empty


def test_rates_lost_in_noise_are_not_assessed() -> None:
    data = a_plate((0.5, 1.0))
    faint = replace(data, rates=data.rates.assign(v0_se_um_per_s=1.0))
    assert (
        "no two enzyme levels of the lot have clear rates"
        in findings_of(LINEARITY, "series", faint)["sentence"].item()
    )


def test_an_enzyme_that_dies_holds_the_lot() -> None:
    quarter = -np.log(0.75) / TIME_S[-1]
    findings = findings_of(INACTIVATION, "series", a_plate((1.0, 2.0, 4.0), loss_per_s=quarter))
    assert findings[["subject", "lot", "severity"]].to_numpy().tolist() == [["lot", "L1", "hold"]]
    assert findings["measured"].item() < 0.01
    assert findings["limit_value"].item() == 0.01
    (lost,) = enzyme_inactivation.metrics(a_plate((1.0, 2.0, 4.0), loss_per_s=quarter))["lost"]
    assert lost == pytest.approx(0.25, abs=0.06)
    assert f"loses {lost * 100:.0f} % of its activity in 600 s" in findings["sentence"].item()


def test_a_small_loss_is_left_alone_unless_the_site_wants_it() -> None:
    little = -np.log(0.94) / TIME_S[-1]
    data = a_plate((1.0, 2.0, 4.0, 8.0), loss_per_s=little)
    assert findings_of(INACTIVATION, "series", data).empty
    assert len(findings_of(INACTIVATION, "series", data, least_loss=0.02)) == 1


def test_a_blank_that_runs_is_taken_off_the_curves() -> None:
    data = a_plate((1.0, 2.0))
    drift = 0.05
    drifting = replace(
        data,
        readings=data.readings.assign(
            product_um=data.readings["product_um"] + drift * data.readings["time_s"]
        ),
        rates=data.rates.assign(blank_rate_um_per_s=drift),
    )
    plain, corrected = enzyme_inactivation.metrics(data), enzyme_inactivation.metrics(drifting)
    assert corrected["p_value"].item() == pytest.approx(plain["p_value"].item(), rel=1e-4)


def test_curves_that_cannot_be_compared_are_not_assessed() -> None:
    data = a_plate((1.0, 2.0))
    unusable = replace(data, readings=data.readings.assign(product_um=np.nan))
    findings = findings_of(INACTIVATION, "series", unusable)
    assert findings["outcome"].tolist() == ["not_assessed"]
    assert "overlap in enzyme x time" in findings["sentence"].item()


@pytest.mark.parametrize(("gate", "phase"), [(OUTLIER, "fit"), (POSITION, "series"), (LINEARITY, "series")])
def test_gates_on_fits_need_fits(gate: Gate, phase: Phase) -> None:
    with pytest.raises(ValueError, match="needs fits and points"):
        findings_of(gate, phase, replace(a_plate(), points=None))
