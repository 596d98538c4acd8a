"""Published fits of other laws and of equations of one's own: certified sets, an inhibition grid, shared
constants, saturation of haemoglobin.

Every expected number stands beside its source. Data come from fixtures/reference.
"""

from __future__ import annotations

from collections.abc import Callable, Iterator

import numpy as np
import pandas as pd

from models.kinetics.intervals import profile_intervals
from models.kinetics.law_fits import LawFit, fit_law
from models.kinetics.laws import MICHAELIS_MENTEN, Conditions, RateLaw, at_levels, law
from models.kinetics.own_laws import own_law
from models.kinetics.replicate_weights import apparent_order
from models.kinetics.selection import aicc
from models.kinetics.shift import Group, compare_shared
from tests.published.published_values import REFERENCE, Agreement

CERTIFIED = "NIST StRD, certified to 11 digits, dataset doi:10.18434/T43G6C"
INRA = "INRA set vmkmki (Baty et al. 2015, doi:10.18637/jss.v066.i05), refitted with R 4.2 nls"
BOTH = "Bates and Watts 1988, A1.3, both states together; digits from R 4.2 nls"
SEVERINGHAUS = "Severinghaus 1979, doi:10.1152/jappl.1979.46.3.599"
CARR = "Carr 1960 in Bates and Watts 1988, A1.5; digits from R 4.2 nls"

NIST: dict[str, dict[str, tuple[float, float, float, float]]] = {
    "Misra1a": {
        "b1": (500.0, 250.0, 238.94212918, 2.7070075241),
        "b2": (0.0001, 0.0005, 0.00055015643181, 7.2668688436e-06),
    },
    "Rat42": {
        "b1": (100.0, 75.0, 72.462237576, 1.7340283401),
        "b2": (1.0, 2.5, 2.6180768402, 0.088295217536),
        "b3": (0.1, 0.07, 0.067359200066, 0.0034465663377),
    },
    "MGH09": {
        "b1": (25.0, 0.25, 0.19280693458, 0.011435312227),
        "b2": (39.0, 0.39, 0.19128232873, 0.19633220911),
        "b3": (41.5, 0.415, 0.12305650693, 0.080842031232),
        "b4": (39.0, 0.39, 0.13606233068, 0.090025542308),
    },
    "Hahn1": {
        "b1": (10.0, 1.0, 1.0776351733, 0.17070154742),
        "b2": (-1.0, -0.1, -0.12269296921, 0.012000289189),
        "b3": (0.05, 0.005, 0.004086375061, 0.00022508314937),
        "b4": (-1e-05, -1e-06, -1.4262662514e-06, 2.7578037666e-07),
        "b5": (-0.05, -0.005, -0.0057609940901, 0.00024712888219),
        "b6": (0.001, 0.0001, 0.00024053735503, 1.0449373768e-05),
        "b7": (-1e-06, -1e-07, -1.2314450199e-07, 1.3027335327e-08),
    },
    "Chwirut2": {
        "b1": (0.1, 0.15, 0.16657666537, 0.03830328681),
        "b2": (0.01, 0.008, 0.0051653291286, 0.00066621605126),
        "b3": (0.02, 0.01, 0.012150007096, 0.0015304234767),
    },
    "DanWood": {
        "b1": (1.0, 0.7, 0.76886226176, 0.01828197386),
        "b2": (5.0, 4.0, 3.8604055871, 0.051726610913),
    },
}
"""Both certified starts, certified value and standard deviation of each constant, 11 digits."""
NIST_SUMS = {
    "Misra1a": 0.12455138894,
    "Rat42": 8.0565229338,
    "MGH09": 0.00030750560385,
    "Hahn1": 1.5324382854,
    "Chwirut2": 513.04802941,
    "DanWood": 0.0043173084083,
}

EQUATIONS: dict[str, tuple[Callable[..., np.ndarray], str | None]] = {
    "Misra1a": (lambda x, b1, b2: b1 * (1 - np.exp(-b2 * x)), "b1"),
    "Rat42": (lambda x, b1, b2, b3: b1 / (1 + np.exp(b2 - b3 * x)), "b1"),
    "MGH09": (lambda x, b1, b2, b3, b4: b1 * (x * x + x * b2) / (x * x + x * b3 + b4), "b1"),
    "Hahn1": (
        lambda x, b1, b2, b3, b4, b5, b6, b7: (
            (b1 + x * (b2 + x * (b3 + x * b4))) / (1 + x * (b5 + x * (b6 + x * b7)))
        ),
        None,
    ),
    "Chwirut2": (lambda x, b1, b2, b3: np.exp(-b1 * x) / (b2 + b3 * x), None),
    "DanWood": (lambda x, b1, b2: b1 * x**b2, "b1"),
}

INHIBITION = {
    "competitive_inhibition": {
        "constants": (18.0557251890087, 15.214478240251, 22.282272661597),
        "errors": (0.628831530815076, 2.5005032900643, 4.90604240255889),
        "low": (16.7845059210712, 10.9175106241472, 14.7020360197277),
        "high": (19.4607905141023, 20.5062162687138, 34.3928784228403),
        "sums": (177.252934670881, 277.192784192826),
    },
    "noncompetitive_inhibition": {
        "constants": (20.5866611832562, 22.7786429864604, 101.356342250742),
        "errors": (0.43064030525998, 1.47377927466561, 7.33034438668873),
        "low": (19.7350374144149, 19.9644914038906, 88.2719639209633),
        "high": (21.4816114720329, 25.9127115824191, 117.342477187641),
        "sums": (54.9666137795558, 192.891458680878),
    },
    "uncompetitive_inhibition": {
        "constants": (21.7539753606668, 28.0709107991992, 71.9780834289628),
        "errors": (0.45847991064774, 1.66709991561185, 4.78707307853614),
        "low": (20.8644397017077, 24.8921370069577, 63.3498978721781),
        "high": (22.6961827650241, 31.5979442270051, 82.2526900240589),
        "sums": (42.1052150510555, 173.699543841682),
    },
}
"""Value, standard error, profile interval, sum of squares and AIC: R 4.2 nls, which stops at a relative
offset of 1e-5 and interpolates its profiles."""
MIXED_RECIPROCAL = {
    "vmax": (21.8932555361172, 0.523356980781469),
    "km": (28.788321748735, 2.09344398321178),
    "1 / k_ic": (-0.00114826065190872, 0.00184607915956963),
    "1 / k_iu": (0.0144272325534178, 0.00130930067584084),
}
"""Mixed inhibition in reciprocal constants: 1 / k_ic comes out below zero, so that k_ic is not held."""


def law_agreements() -> list[Agreement]:
    """Every published value with what is found here."""
    return [*_certified(), *_inhibition(), *_both_states(), *_haemoglobin(), *_isomerisation()]


def read(name: str) -> pd.DataFrame:
    """A file of fixtures/reference."""
    return pd.read_csv(REFERENCE / name, comment="#")


def _column(frame: pd.DataFrame, name: str) -> np.ndarray:
    return frame[name].to_numpy(dtype=float)[:, None]


def aic(fit: LawFit) -> float:
    """Akaike's criterion without the correction for few points, as R gives it."""
    k, n = fit.law.constant_count + 1.0, fit.point_count
    corrected = aicc(fit.residual_sum, np.zeros(1), n, fit.law.constant_count)
    return float((corrected - 2.0 * k * (k + 1.0) / (n - k - 1.0))[0])


def _certified() -> Iterator[Agreement]:
    for name, certified in NIST.items():
        data = read(f"nist_{name.lower()}.csv")
        equation, amplitude = EQUATIONS[name]
        for number in (1, 2):
            starts = {constant: values[number - 1] for constant, values in certified.items()}
            fit = fit_law(
                own_law(name, equation, starts, amplitude=amplitude),
                at_levels(_column(data, "x_1")),
                _column(data, "y_1"),
            )
            where = f"{name}, start {number}"
            for row, (constant, (_, _, value, error)) in enumerate(certified.items()):
                found, found_error = float(fit.constants[row, 0]), float(fit.standard_error[row, 0])
                yield Agreement(where, constant, value, found, 6.0, CERTIFIED)
                yield Agreement(where, f"standard error of {constant}", error, found_error, 6.0, CERTIFIED)
            found_sum = float(fit.residual_sum[0])
            yield Agreement(where, "residual sum of squares", NIST_SUMS[name], found_sum, 6.0, CERTIFIED)


def fit_inhibition(each: RateLaw) -> tuple[LawFit, np.ndarray, np.ndarray]:
    """A law fitted to the grid of INRA, all wells at once, with its intervals."""
    data = read("inra_inhibition.csv")
    conditions = at_levels(_column(data, "s_unstated"), _column(data, "i_unstated"))
    conditions = Conditions(
        conditions.substrate_um,
        conditions.log_substrate,
        conditions.modulator_um,
        further=(conditions.modulator,),
    )
    rates = _column(data, "v_unstated")
    fit = fit_law(each, conditions, rates)
    return (fit, *profile_intervals(fit, conditions, rates, np.ones_like(rates)))


def mixed_in_reciprocals() -> RateLaw:
    """Mixed inhibition with 1 / k_ic and 1 / k_iu as constants, which may pass zero."""
    return own_law(
        "mixed in reciprocals",
        lambda s, i, v, k, rc, ru: v * s / (k * (1 + i * rc) + s * (1 + i * ru)),
        {"vmax": 20.0, "km": 20.0, "1 / k_ic": 0.01, "1 / k_iu": 0.01},
        amplitude="vmax",
    )


def _inhibition() -> Iterator[Agreement]:
    for name, expected in INHIBITION.items():
        fit, low, high = fit_inhibition(law(name))
        found = {"constants": fit.constants, "errors": fit.standard_error, "low": low, "high": high}
        needed = {"constants": 4.0, "errors": 3.5, "low": 2.7, "high": 2.7}
        for row, constant in enumerate(fit.law.constants):
            for what, values in found.items():
                label = constant.name if what == "constants" else f"{constant.name} {what}"
                yield Agreement(name, label, expected[what][row], float(values[row, 0]), needed[what], INRA)
        sums, criterion = expected["sums"]
        yield Agreement(name, "sum of squares", sums, float(fit.residual_sum[0]), 6.0, INRA)
        yield Agreement(name, "AIC", criterion, aic(fit), 6.0, INRA)
    fit, _, _ = fit_inhibition(mixed_in_reciprocals())
    for row, (constant, (value, error)) in enumerate(MIXED_RECIPROCAL.items()):
        found = float(fit.constants[row, 0])
        yield Agreement("mixed, in reciprocals", constant, value, found, 4.0, INRA)
        found = float(fit.standard_error[row, 0])
        yield Agreement("mixed, in reciprocals", f"standard error of {constant}", error, found, 3.5, INRA)
    yield Agreement("mixed, in reciprocals", "AIC", 175.31625361913, aic(fit), 6.0, INRA)


def _both_states() -> Iterator[Agreement]:
    data = read("puromycin.csv")
    groups = []
    for state in ("untreated", "treated"):
        mine = data[data["state"] == state]
        rates = _column(mine, "rate_counts_per_min2")
        groups.append(Group(at_levels(_column(mine, "conc_ppm")), rates, np.ones_like(rates)))
    test = compare_shared(MICHAELIS_MENTEN, groups, ["km"])
    expected = {
        "sum of squares, own km": (2055.05310824084, test.separate_sum, 6.0),
        "sum of squares, one km": (2240.89143883911, test.shared_sum, 6.0),
        "one km": (0.0579715690003472, test.together[1, 0], 5.0),
        "vmax untreated, one km": (166.603966170078, test.together[0, 0], 5.0),
        "rise of vmax, one km": (42.0259088636267, test.together[0, 1] - test.together[0, 0], 5.0),
        "F for own km": (1.71816887223397, test.f_value, 6.0),
        "p for own km": (0.205552272201789, test.p_value, 6.0),
    }
    for quantity, (published, found, needed) in expected.items():
        yield Agreement("Puromycin, both", quantity, published, float(found), needed, BOTH)


def _haemoglobin() -> Iterator[Agreement]:
    """The published equation's constants found from its table, and P50 and slope from the fit."""
    data = read("severinghaus_1979.csv")
    pressure = _column(data, "pO2_mmHg")
    saturation = _column(data, "saturation_fraction_from_equation")
    own = own_law(
        "saturation",
        lambda p, a, b: 1.0 / (a / (p**3 + b * p) + 1.0),
        {"a": 10000.0, "b": 80.0},
        source=SEVERINGHAUS,
    )
    fit = fit_law(own, at_levels(pressure), saturation)
    a, b = fit.constants[:, 0]
    yield Agreement("Haemoglobin", "a", 23400.0, float(a), 6.0, SEVERINGHAUS)
    yield Agreement("Haemoglobin", "b", 150.0, float(b), 6.0, SEVERINGHAUS)
    p50 = max(np.roots([1.0, 0.0, b, -a]), key=lambda root: -abs(root.imag)).real
    yield Agreement("Haemoglobin", "P50", 26.86, float(p50), 3.7, SEVERINGHAUS)
    order = apparent_order(own, at_levels(np.array([[p50]])), (np.array([a]), np.array([b])))[0, 0]
    # Hill slope d ln(S / (1 - S)) / d ln P = order / (1 - S), S = 1/2; analytic value of the equation.
    yield Agreement("Haemoglobin", "Hill slope at P50", 2.6556820494477704, 2.0 * order, 6.0, SEVERINGHAUS)


def _isomerisation() -> Iterator[Agreement]:
    """Strongly ill-conditioned: standard errors exceed b2 to b4."""
    data = read("carr_1960.csv")
    own = own_law(
        "isomerisation",
        lambda n, h, i, b1, b2, b3, b4: b1 * b3 * (n - i / 1.632) / (1 + b2 * h + b3 * n + b4 * i),
        {"b1": 35.0, "b2": 0.1, "b3": 0.05, "b4": 0.2},
        amplitude="b1",
    )
    pentane = _column(data, "n_pentane_psia")
    further = (_column(data, "hydrogen_psia"), _column(data, "isopentane_psia"))
    fit = fit_law(own, Conditions(pentane, np.log(pentane), further=further), _column(data, "rate_per_h"))
    expected = {
        "b1": (35.9202752542957, 8.21235930946632),
        "b2": (0.0708423209416894, 0.178677533744718),
        "b3": (0.03772940342043, 0.100057769741385),
        "b4": (0.167132655566193, 0.415959259909335),
    }
    for row, (constant, (value, error)) in enumerate(expected.items()):
        yield Agreement("Isomerisation", constant, value, float(fit.constants[row, 0]), 4.0, CARR)
        found = float(fit.standard_error[row, 0])
        yield Agreement("Isomerisation", f"standard error of {constant}", error, found, 3.5, CARR)
    yield Agreement(
        "Isomerisation", "sum of squares", 3.23448227540717, float(fit.residual_sum[0]), 6.0, CARR
    )
