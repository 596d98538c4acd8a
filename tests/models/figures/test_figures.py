"""Figures: what stands in them, the same bytes every time, and nothing imported before it is drawn."""

from __future__ import annotations

import re
import subprocess
import sys
from concurrent.futures import ThreadPoolExecutor

import matplotlib
import numpy as np
import pytest

from models.figures.drawing import house_style, marks, pdf_bytes, png_bytes, stacked_panels, svg_bytes
from models.figures.kinetics import FittedLine, draw_profile, draw_progress, draw_rates
from models.figures.lines import Line, Panel, draw_panels
from models.figures.theme import DARK, LIGHT, THEMES
from models.kinetics import fit

SUBSTRATE = np.repeat([10.0, 20, 40, 80, 160, 320, 640], 3)


def a_fit(seed: int = 1):
    generator = np.random.default_rng(seed)
    rate = 0.05 * SUBSTRATE / (80 + SUBSTRATE) * (1 + 0.03 * generator.standard_normal(SUBSTRATE.size))
    return fit(SUBSTRATE, rate)


@pytest.mark.parametrize("theme", THEMES)
@pytest.mark.parametrize("written", [svg_bytes, png_bytes, pdf_bytes])
def test_a_figure_gives_the_same_bytes_every_time(written, theme):
    first, second = (written(a_fit().figure(theme=theme)) for _ in range(2))
    assert first == second
    assert len(first) > 2000


def test_the_figure_of_a_fit_has_its_residuals_beneath_and_its_band():
    found = a_fit()
    main, below = found.figure().axes
    assert below.get_xlabel() == "substrate, µM"
    shown = np.concatenate([line.get_ydata() for line in below.lines if line.get_marker() == "o"])
    np.testing.assert_allclose(shown, found.rates - found.rate(SUBSTRATE), rtol=1e-12)
    (band,) = main.collections
    (curve,) = (line for line in main.lines if line.get_marker() == "None")
    assert band.get_paths()[0].contains_point((curve.get_xdata()[50], curve.get_ydata()[50]))


def test_settings_of_a_notebook_neither_show_nor_change():
    plain = svg_bytes(a_fit().figure())
    with matplotlib.rc_context({"font.size": 30, "axes.edgecolor": "red", "svg.hashsalt": "other"}):
        assert svg_bytes(a_fit().figure()) == plain
        assert matplotlib.rcParams["axes.edgecolor"] == "red"


def test_threads_draw_the_same_as_one_alone():
    plain = svg_bytes(a_fit().figure())
    with ThreadPoolExecutor(3) as pool:
        assert set(pool.map(lambda _: svg_bytes(a_fit().figure()), range(3))) == {plain}


def test_text_of_an_svg_is_text_in_the_systems_sans():
    text = svg_bytes(a_fit().figure()).decode()
    assert ">substrate, µM</text>" in text
    assert set(re.findall(r"font-family: ([^;\"]*)", text)) == {
        "system-ui, -apple-system, 'Segoe UI', Roboto, 'Helvetica Neue', 'DejaVu Sans', sans-serif"
    }


@pytest.mark.parametrize("log_substrate", [False, True])
def test_drawing_leaves_no_state_behind(log_substrate):
    # Reading the backend would import pyplot.
    before = {name: matplotlib.rcParams[name] for name in matplotlib.rcParams if name != "backend"}
    with house_style():
        assert matplotlib.rcParams["svg.hashsalt"] == "halfsat"
    a_fit().figure(log_substrate)
    assert {name: matplotlib.rcParams[name] for name in before} == before
    assert "matplotlib.pyplot" not in sys.modules


def test_rates_without_modulator_stand_apart_on_a_logarithmic_axis():
    doses = np.repeat([0.0, *np.geomspace(0.02, 60.0, 11)], 2)
    rate = 0.03 * (0.1 + 0.9 / (1 + (doses / 1.6) ** 1.2)) * (1 + 0.01 * np.cos(7 * np.arange(doses.size)))
    found = fit(np.full(doses.size, 100.0), rate, "dose_response", modulator=doses)
    main, below = found.figure(log_substrate=True).axes
    points = next(line for line in below.lines if line.get_marker() == "o")
    assert len(points.get_xdata()) == doses.size
    zero_at = points.get_xdata().min()
    assert zero_at < 0.02
    assert main.xaxis.get_major_formatter().format_ticks([zero_at, 0.02])[0] == "0"
    curve = max(
        (line for line in main.lines if line.get_marker() == "None"), key=lambda line: len(line.get_xdata())
    )
    # The line reaches every dose and does not cross the gap to zero.
    assert zero_at < curve.get_xdata().min() < 0.02
    assert curve.get_xdata().max() == pytest.approx(60.0)


def test_a_logarithmic_axis_without_a_value_above_zero_stays_linear():
    x = np.zeros(3)
    assert draw_rates(x, x, x, [], logarithmic=True).axes[0].get_xscale() == "linear"


def test_a_strange_standing_is_an_error():
    _, (axes,) = stacked_panels()
    with pytest.raises(ValueError, match="doubtful"):
        marks(axes, LIGHT, np.ones(1), np.ones(1), ["doubtful"])


def test_on_a_logarithmic_axis_nothing_lies_at_zero():
    main, _ = a_fit().figure(log_substrate=True).axes
    assert main.get_xscale() == "log"
    assert all((line.get_xdata() > 0).all() for line in main.lines if line.get_marker() == "None")


def test_each_level_of_a_modulator_has_a_line_told_apart_by_its_dashes():
    s, i = (axis.ravel() for axis in np.meshgrid([10.0, 40, 160, 640], [0.0, 5, 20]))
    v = 0.05 * s / (80 * (1 + i / 12) + s) * (1 + 0.01 * np.cos(np.arange(s.size)))
    main, _ = fit(s, v, "competitive_inhibition", modulator=i).figure().axes
    lines = [line for line in main.lines if line.get_marker() == "None"]
    assert [line.get_label() for line in lines] == ["0", "5", "20"]
    assert main.get_legend().get_title().get_text() == "modulator, µM"
    assert len({str(line._unscaled_dash_pattern) for line in lines}) == 3


def test_the_band_covers_as_often_as_it_says():
    """95 % of bands hold the true rate at a level: of 400, 92 to 98 % with a chance of 1 in 100 to miss."""
    at = 100
    held = 0
    for seed in range(400):
        generator = np.random.default_rng([5, seed])
        noise = 0.0008 * generator.standard_normal(SUBSTRATE.size)
        band = fit(SUBSTRATE, 0.05 * SUBSTRATE / (80 + SUBSTRATE) + noise).band().iloc[at]
        true = 0.05 * band["substrate"] / (80 + band["substrate"])
        held += band["low"] <= true <= band["high"]
    assert 0.92 <= held / 400 <= 0.98


@pytest.mark.parametrize(("standing", "fill"), [("clear", "full"), ("held", "left"), ("void", "full")])
def test_standing_shows_without_colour(standing, fill):
    _, (axes,) = stacked_panels()
    marks(axes, LIGHT, np.array([1.0]), np.array([2.0]), [standing])
    ring = axes.lines[0]
    assert ring.get_fillstyle() == fill
    assert (len(axes.lines) == 2) == (standing == "void")


def test_points_that_are_not_known_are_left_out():
    _, (axes,) = stacked_panels()
    marks(axes, LIGHT, np.array([1.0, np.nan, 3.0]), np.array([2.0, 2.0, np.nan]))
    assert axes.lines[0].get_xdata().tolist() == [1.0]


def test_a_progress_curve_shows_window_line_and_residuals():
    time_s = np.arange(20) * 10.0
    product = 0.2 * time_s + 1.0
    product[3] = np.nan
    figure = draw_progress(time_s, product, (0.0, 90.0), 0.2, blank_um=0.01 * time_s, theme=DARK)
    main, below = figure.axes
    assert main.get_ylabel() == "substrate turned over, µM"
    (residuals,) = (line for line in below.lines if line.get_marker() == "o")
    np.testing.assert_allclose(residuals.get_ydata(), 0.0, atol=1e-12)
    assert len(residuals.get_xdata()) == 9


def test_a_curve_without_a_usable_read_is_drawn_empty():
    nothing = np.full(5, np.nan)
    assert svg_bytes(draw_progress(np.arange(5.0), nothing, (0.0, 2.0), np.nan)).startswith(b"<?xml")


def test_a_profile_has_its_limit_and_the_ends_that_are_closed():
    values = np.linspace(50, 120, 30)
    (axes,) = draw_profile(values, ((values - 80) / 10) ** 2, 4.0, (60.0, np.nan), "Km", "µM").axes
    assert axes.get_xlabel() == "Km, µM"
    assert len(axes.lines) == 3
    assert [text.get_text() for text in axes.texts] == ["95 %", "60"]


def test_the_profile_of_a_fit_is_drawn_with_its_ends():
    found = a_fit()
    (axes,) = found.profile_figure("km", "dark").axes
    low, high = found.table().loc["km", ["low", "high"]]
    assert [text.get_text() for text in axes.texts] == ["95 %", f"{low:.4g}", f"{high:.4g}"]
    assert axes.get_xlabel() == "km, µM"


def test_panels_carry_limits_with_their_values():
    line = Line(np.arange(4.0), np.arange(4.0) ** 2, "caught")
    points = Line(np.arange(4.0), np.ones(4), standing=np.array(["held"] * 4, dtype=object), joined=False)
    panel = Panel("lag", (line, points), "lag, s", "caught", limits=((0.95, "95 %"),), y_range=(0, 1))
    figure = draw_panels([panel, panel, panel])
    assert len(figure.axes) == 3
    assert [text.get_text() for text in figure.axes[0].texts] == ["95 %"]
    assert figure.axes[0].get_ylim() == (0, 1)


def test_a_residual_figure_marks_what_is_held():
    x = np.arange(1.0, 5.0)
    figure = draw_rates(x, x, x, [FittedLine(x, x)], standing=np.array(["clear", "held", "void", "clear"]))
    fills = {line.get_fillstyle() for line in figure.axes[1].lines if line.get_marker() == "o"}
    assert fills == {"full", "left"}


def test_fitting_does_not_import_the_plot_library():
    code = (
        "import sys; from models.kinetics import fit; fit([1, 2, 3, 4], [1, 1.6, 2, 2.2]); "
        "sys.exit('matplotlib' in sys.modules)"
    )
    assert subprocess.run([sys.executable, "-c", code], check=False).returncode == 0
