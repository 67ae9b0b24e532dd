from __future__ import annotations

import subprocess
import sys
from itertools import pairwise
from pathlib import Path

import matplotlib as mpl
import numpy as np
import pandas as pd
import pytest
from matplotlib.patches import Rectangle
from report.conftest import Fit, Fitted, Result, make_curve

from microsim.report.figure_evidence import skewed, varying_arcs
from microsim.report.figures import (
    all_figures,
    bridge_figure,
    fit_figure,
    occupancy_figure,
    rates_figure,
    save_figures,
    slug,
    tolerance_figure,
)
from microsim.report.style import line_look, svg_bytes


def _texts(axes: object) -> list[str]:
    return [t.get_text() for t in axes.texts]  # type: ignore[attr-defined]


def test_the_bridge_leads_from_the_cohort_to_the_full_value(result: Result) -> None:
    figure = bridge_figure(result, strategy="nurse_led", use="carried", rule="half-cycle")
    gap = result.tables["gap"]
    chosen = gap[(gap["use"] == "carried") & (gap["cycle_rule"] == "half-cycle") & gap["threshold"].notna()]
    assert len(figure.axes) == len(chosen) == 2
    for axes, row in zip(figure.axes, chosen.itertuples(), strict=True):
        bars = {round(p.get_y() + p.get_height() / 2): p for p in axes.patches if isinstance(p, Rectangle)}
        assert sorted(bars) == [0, 1, 2, 3, 4]
        ends = {k: bar.get_x() + bar.get_width() for k, bar in bars.items()}
        assert ends[0] == pytest.approx(row.cohort)
        assert bars[1].get_x() == pytest.approx(row.cohort)
        assert bars[2].get_x() == pytest.approx(ends[1])
        assert bars[3].get_x() == pytest.approx(ends[2])
        assert ends[3] == pytest.approx(row.full)
        assert ends[4] == pytest.approx(row.full)


def test_a_term_that_is_zero_by_construction_has_words_and_no_bar(result: Result) -> None:
    figure = bridge_figure(result, strategy="nurse_led", use="own", rule="continuous")
    axes = figure.axes[0]
    assert _texts(axes).count("by construction") == 2
    rows = {round(p.get_y() + p.get_height() / 2) for p in axes.patches if isinstance(p, Rectangle)}
    assert rows == {3}


def test_steps_that_bars_would_dwarf_get_a_narrow_axis_that_says_so(result: Result) -> None:
    wide = bridge_figure(result, strategy="nurse_led", use="carried", rule="half-cycle").axes[0]
    narrow = bridge_figure(result, strategy="nurse_led", use="own", rule="half-cycle").axes[0]
    assert wide.get_xlim()[0] < 0 < wide.get_xlim()[1]
    assert narrow.get_xlim()[0] > 0
    assert "does not start at zero" in narrow.get_title(loc="left")
    assert "does not start at zero" not in wide.get_title(loc="left")
    values = sorted(float(line.get_xdata()[0]) for line in narrow.lines if line.get_marker() == "D")
    gap = result.tables["gap"]
    row = gap[(gap["use"] == "own") & (gap["cycle_rule"] == "half-cycle") & (gap["threshold"] == 20_000)].iloc[0]
    assert values == sorted([row["cohort"], row["full"]])


def test_sixteen_lines_never_share_colour_and_dash() -> None:
    looks = [line_look(k) for k in range(16)]
    assert len({str(look) for look in looks}) == 16
    assert all(a[0] != b[0] and a[1] != b[1] for a, b in pairwise(looks))


def test_the_difference_panel_shows_cohort_minus_individual(result: Result) -> None:
    figure = occupancy_figure(result, "nurse_led")
    assert len(figure.axes) == 6
    rows = result.tables["occupancy"]
    rows = rows[(rows["strategy"] == "nurse_led") & (rows["state"] == "Home")]
    wide = rows.pivot_table(index="time", columns="model", values="probability")
    drawn = [line for line in figure.axes[1].lines if len(line.get_xdata()) > 2]
    for model, line in zip(("memoryless own", "memoryless carried"), drawn, strict=True):
        np.testing.assert_allclose(line.get_ydata(), wide[model] - wide["individual"], atol=1e-15)


def test_models_differ_in_dash_and_not_in_colour_alone(result: Result) -> None:
    lines = occupancy_figure(result, "nurse_led").axes[0].lines
    looks = {str(line.get_linestyle()) + str(line.__dict__.get("_unscaled_dash_pattern")) for line in lines}
    assert len(lines) == len(looks) == 3


def test_the_tolerance_band_is_as_wide_as_declared(result: Result) -> None:
    axes = tolerance_figure(result).axes[0]
    bands = [p for p in axes.patches if isinstance(p, Rectangle)]
    assert [b.get_width() for b in bands] == [2 * 250.0, 2 * 261.5]
    assert _texts(axes) == ["≠ not adequate", "? unresolved"]


def test_very_skewed_stays_get_a_log_axis_and_others_do_not(result: Result) -> None:
    assert skewed(result.fits["home_stay"])
    assert not skewed(result.fits["bed_stay"])
    assert fit_figure(result.fits["home_stay"]).axes[0].get_xscale() == "log"
    assert fit_figure(result.fits["home_stay"], log_time=False).axes[0].get_xscale() == "linear"


def test_numbers_at_risk_stand_clear_of_one_another() -> None:
    curve = make_curve(shape=1.2, scale=10.0, last=30.0, n=5_000)
    dense = np.linspace(0.0, 30.0, 61)
    many = type(curve)(**{**vars(curve), "risk_times": dense, "at_risk": np.arange(61) + 1000})
    figure = fit_figure(Fitted(Fit("weibull", {}, {}), many, "a", "b", "day", "dense"))
    figure.draw_without_rendering()
    axes = figure.axes[0]
    boxes = [t.get_window_extent() for t in axes.texts if t.get_text() != "Number at risk"]
    assert len(boxes) > 3
    assert all(a.x1 < b.x0 for a, b in pairwise(boxes))


def test_only_rates_that_vary_are_drawn(result: Result) -> None:
    arcs = varying_arcs(result)
    assert arcs == [("background", "Home", "Dead"), ("background", "Hospital", "Dead")]
    figure = rates_figure(result, arcs)
    assert len(figure.axes) == 2
    assert len(figure.axes[0].lines) == 3


def test_svg_text_stays_text_and_bytes_repeat(result: Result) -> None:
    first = svg_bytes(tolerance_figure(result), "tolerance")
    assert first == svg_bytes(tolerance_figure(result), "tolerance")
    assert "Nurse-led follow-up, 20,000</text>" in first.decode()


def test_figures_leave_the_global_style_alone(result: Result) -> None:
    before = dict(mpl.rcParams)
    all_figures(result)
    assert dict(mpl.rcParams) == before


def test_a_dollar_sign_in_a_label_is_a_dollar_sign(result: Result) -> None:
    result.summary["labels"]["states"]["Home"] = "costs $5 or $_^"
    text = svg_bytes(occupancy_figure(result, "usual_care"), "x").decode()
    assert "costs $5 or $_^" in text


def test_every_figure_is_saved_twice_under_a_distinct_name(result: Result, tmp_path: Path) -> None:
    result.tables = {k: v for k, v in result.tables.items() if k in ("verdict", "gap", "net_benefit")}
    result.fits["home stay"] = result.fits["home_stay"]
    drawings = all_figures(result)
    paths = save_figures(drawings, tmp_path / "figures", png=True)
    names = [p.name for p in paths]
    assert len(names) == len(set(names)) == 2 * len(drawings)
    assert {p.suffix for p in paths} == {".svg", ".png"}
    assert all(p.stat().st_size > 1_000 for p in paths)
    assert {p.suffix for p in save_figures(drawings, tmp_path / "plain")} == {".svg"}
    assert paths[1].read_bytes()[:8] == b"\x89PNG\r\n\x1a\n"


def test_a_file_name_is_made_of_plain_characters() -> None:
    assert slug("../Nurse led: α") == "nurse-led"
    assert slug("///") == "x"


def test_a_state_nobody_reaches_still_draws(result: Result) -> None:
    rows = result.tables["occupancy"].assign(probability=0.0)
    result.tables["occupancy"] = pd.DataFrame(rows)
    figure = occupancy_figure(result, "usual_care")
    assert figure.axes[0].get_ylim()[1] > 0


def test_the_room_loads_no_engine_no_compiler_and_no_pyplot() -> None:
    code = (
        "import sys, microsim.report.html, microsim.report.terminal, microsim.report.figures\n"
        "bad = [m for m in sys.modules if m.split('.')[0] in ('numba', 'simpy') or m.startswith(('microsim.engine', "
        "'microsim.reference', 'microsim.cohort', 'microsim.program', 'matplotlib.pyplot'))]\n"
        "assert not bad, bad"
    )
    root = Path(__file__).parents[2]
    done = subprocess.run([sys.executable, "-c", code], cwd=root, capture_output=True, text=True, check=False)
    assert done.returncode == 0, done.stderr
