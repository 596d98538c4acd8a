"""The gates: one module each, and the registry that names them.

A new gate is a new module and one line here. Importing this package does not import Great Expectations.
"""

from checks.gates import (
    below_detection,
    blank_drift,
    control_window,
    detector_range,
    enzyme_inactivation,
    enzyme_linearity,
    fit_misfit,
    initial_slope_nonlinear,
    initial_vs_full_curve,
    low_end_not_covered,
    outlier_in_series,
    plate_position,
    read_schedule,
    reference_off_chart,
    replicate_scatter,
    saturation_not_reached,
    standard_curve,
    steady_state_valid,
    substrate_depletion,
    temperature_band,
)
from checks.gates.gate import Gate, GateInput, Limits, Measure, Setting
from checks.gates.limits import resolve

GATES: dict[str, Gate] = {
    module.GATE.name: module.GATE
    for module in (
        detector_range,
        read_schedule,
        temperature_band,
        standard_curve,
        substrate_depletion,
        initial_slope_nonlinear,
        blank_drift,
        below_detection,
        control_window,
        outlier_in_series,
        saturation_not_reached,
        low_end_not_covered,
        replicate_scatter,
        fit_misfit,
        initial_vs_full_curve,
        steady_state_valid,
        enzyme_linearity,
        enzyme_inactivation,
        plate_position,
        reference_off_chart,
    )
}


def resolve_limits(
    site: Limits, assay: Limits, *, where: tuple[str, str] = ("gates.toml", "the assay")
) -> Limits:
    """Limits in force: every gate with every setting, the assay's over the site's over the defaults.

    Parameters
    ----------
    site, assay
        By gate and setting, only what differs; `on = false` turns a gate off.
    where
        What an error calls the two.

    Returns
    -------
    Limits
        Every gate with `on` and all of its settings.

    Raises
    ------
    ConfigurationError
        If a gate or setting is unknown (the nearest name is suggested), or a value is of the wrong kind or
        out of its range.
    """
    return resolve(GATES, site, assay, where)


__all__ = ["GATES", "Gate", "GateInput", "Limits", "Measure", "Setting", "resolve_limits"]
