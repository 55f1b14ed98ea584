import itertools
import os
import re
import subprocess
import sys
from dataclasses import replace
from datetime import datetime
from types import SimpleNamespace
from zoneinfo import ZoneInfo

import matplotlib as mpl
import numpy as np
import pyarrow as pa
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from matplotlib.backends.backend_agg import FigureCanvasAgg
from matplotlib.colors import to_rgb
from matplotlib.dates import date2num, num2date
from matplotlib.figure import Figure

from fastsmooth.axis import Axis
from fastsmooth.curve import EDGE, OK, OUTSIDE, THIN, Caution
from fastsmooth.errors import WriteError
from fastsmooth.report import look, words
from fastsmooth.report.labels import Box, Label, Ruler, Spot, dense, place_labels
from fastsmooth.report.picture import draw, figure
from fastsmooth.report.rows import stretches, y_ends
from fastsmooth.report.scales import (
    Track,
    log_ticks,
    number_ticks,
    short_count,
    short_number,
    shown_axis,
    width_ticks,
)
from tests.curves import CASES, DATES, NUMBER, START_US, TIMES, build, cooling, temperatures, valley

SVG_NAMES = {"svg": "http://www.w3.org/2000/svg"}


@pytest.fixture(scope="module")
def pictures():
    """Every case's figure, made once."""
    return {name: figure(make()) for name, make in CASES.items()}


def letters(text):
    """Inches that a text takes, more or less."""
    return 0.08 * len(text)


def texts(made, gid=None):
    return [text.get_text() for text in made.texts if gid is None or text.get_gid() == gid]


def find(made, gid):
    """All artists of one name, in whichever axes."""
    found = [one for axes in made.axes for one in axes.get_children() if one.get_gid() == gid]
    return found + [one for one in made.get_children() if one.get_gid() == gid]


def panel_of(made, gid):
    (axes,) = {one.axes for one in find(made, gid)}
    return axes


def tick_texts(axis):
    return [label.get_text() for label in axis.get_ticklabels() if label.get_visible()]


def written(made):
    """Every visible text with its extent in pixels."""
    renderer = FigureCanvasAgg(made).get_renderer()
    found = list(made.texts)
    for axes in made.axes:
        found += axes.texts
        if axes.axison:
            for axis, shown in ((axes.xaxis, "labelbottom"), (axes.yaxis, "labelleft")):
                if axis.get_tick_params()[shown]:
                    found += axis.get_ticklabels()
    return [(one.get_text(), one.get_window_extent(renderer)) for one in found if one.get_text()]


def covered(made):
    """Pairs of texts that share pixels."""
    return [
        (left, right)
        for (left, a), (right, b) in itertools.combinations(written(made), 2)
        if min(a.x1, b.x1) - max(a.x0, b.x0) > 0.5 and min(a.y1, b.y1) - max(a.y0, b.y0) > 0.5
    ]


# -- the whole picture


@pytest.mark.parametrize("case", list(CASES))
def test_no_text_covers_another_or_leaves_the_picture(pictures, case):
    made = pictures[case]
    assert covered(made) == []
    wide, high = made.get_size_inches() * made.dpi
    for text, box in written(made):
        assert min(box.x0, box.y0) >= 0.0, text
        assert box.x1 <= wide, text
        assert box.y1 <= high, text


@pytest.mark.parametrize("case", list(CASES))
def test_no_text_outside_the_panels_reaches_into_them(pictures, case):
    made = pictures[case]
    inside = {"criterion label", "flat label", "status name"}
    panels = [axes.get_window_extent() for axes in made.axes if axes.axison]
    renderer = FigureCanvasAgg(made).get_renderer()
    for text in made.texts:
        if text.get_gid() in inside:
            continue
        box = text.get_window_extent(renderer)
        for panel in panels:
            apart = (
                box.x1 <= panel.x0 or box.x0 >= panel.x1
                or box.y1 <= panel.y0 or box.y0 >= panel.y1
            )  # fmt: skip
            assert apart, text.get_text()


@pytest.mark.parametrize("case", list(CASES))
def test_every_picture_says_what_it_is(pictures, case):
    made = pictures[case]
    assert texts(made, "small print") == ["A mean curve is not a protection limit."]
    assert texts(made, "title")
    wide, high = made.get_size_inches()
    assert wide == 9.0
    assert 7.5 < high < 11.0


def test_title_and_sentences():
    made = figure(CASES["plain"]())
    assert texts(made, "title") == ["power_kw (kW) against wet_bulb_c (°C)"]
    assert " ".join(texts(made, "subtitle")) == (
        "The line is the mean from 4,000 rows of 4,017 read: local-linear, biweight kernel, "
        "bandwidth 1.35 °C, chosen by leave-one-out. Around it the pointwise 95 % band for the "
        "mean."
    )
    made = figure(CASES["given"]())
    assert " ".join(texts(made, "subtitle")) == (
        "The line is the mean from 4,000 rows of 4,017 read: local-linear, gaussian kernel, "
        "bandwidth 3 °C (standard deviation), as given (leave-one-out would choose 1.35 °C). "
        "Around it the pointwise 90 % band for the smoothed mean, its bias ignored."
    )


def test_units_are_left_out_where_there_are_none():
    curve = CASES["large_numbers"]()
    assert words.title(curve) == "power_kw against wet_bulb_c"
    assert "bandwidth 1.35, chosen" in words.subtitle(curve)
    assert words.criterion(curve) == ("leave-one-out error", "")


def test_level_is_not_rounded_up():
    curve = CASES["plain"]()
    told = {**curve.trace["settings"], "level": 0.9999}
    curve = replace(curve, trace={**curve.trace, "settings": told})
    assert "the pointwise 99.99 % band" in words.subtitle(curve)


def test_all_rows_used_is_said_once():
    curve = CASES["plain"]()
    rows = {"read": 4000, "filtered": 0, "refused": {}, "used": 4000}
    assert "from 4,000 rows: " in words.subtitle(
        replace(curve, trace={**curve.trace, "rows": rows})
    )


@pytest.mark.parametrize(
    ("criterion", "name", "unit"),
    [
        ("leave-one-out", "leave-one-out error", "kW²"),
        ("leave-block-out", "leave-block-out error", "kW²"),
        ("plug-in", "leave-one-out error", "kW²"),
        ("gcv", "generalised cross-validation", "kW²"),
        ("aicc", "corrected information criterion (AICc)", ""),
    ],
)
def test_each_criterion_is_drawn_and_named(criterion, name, unit):
    curve = CASES["plain"]()
    trails = {
        one: valley(one, best, low=0.1, high=20.0, blocks=True)
        for one, best in (("local-constant", 0.9), ("local-linear", 1.35))
    }
    search = replace(curve.search, criterion=criterion, trails=trails)
    made = figure(replace(curve, search=search))
    shown = f"{name} ({unit})" if unit else name
    assert shown in texts(made, "axis name")
    (line,) = find(made, "criterion local-linear")
    np.testing.assert_array_equal(line.get_ydata(), trails["local-linear"].values(criterion))
    assert covered(made) == []


def test_dollars_and_underscores_stand_as_written(tmp_path):
    curve = CASES["plain"]()
    told = {**curve.trace["settings"], "y": "cost_$a$", "x": r"\frac{$x_1$}"}
    curve = replace(curve, trace={**curve.trace, "settings": told})
    made = figure(curve)
    assert texts(made, "title") == [r"cost_$a$ (kW) against \frac{$x_1$} (°C)"]
    draw(curve, tmp_path / "a.svg")


# -- the upper panel


def test_curve_is_drawn_where_it_is_supported_and_nowhere_else(pictures):
    for case in ("plain", "gap", "thin_ends", "times", "log_scale"):
        curve, made = CASES[case](), pictures[case]
        shown = shown_axis(curve.axis, "x", "", (curve.x[0], curve.x[-1]), False, 8.0, letters)
        plotted = shown.plotted(curve.x)
        seen = np.zeros(curve.x.size, bool)
        for name in ("ok", "thin", "edge"):
            for line in find(made, f"curve {name}"):
                places = np.searchsorted(plotted, line.get_xdata())
                np.testing.assert_array_equal(places, np.arange(places[0], places[-1] + 1))
                np.testing.assert_array_equal(line.get_ydata(), curve.estimate[places])
                seen[places] = True
        np.testing.assert_array_equal(seen, curve.status != OUTSIDE)


def test_every_status_has_a_line_style_and_a_word(pictures):
    made = pictures["given"]
    dashes = {
        name: find(made, f"curve {name}")[0]._unscaled_dash_pattern
        for name in ("ok", "thin", "edge")
    }
    assert dashes["ok"][1] is None
    assert dashes["thin"][1][0] > 2 * dashes["edge"][1][0]
    assert sorted(set(texts(made, "status name"))) == ["edge", "thin"]
    assert "outside" in texts(pictures["gap"], "status name")
    assert " ".join(texts(made, "notes")).startswith(
        "Dotted (edge): the window is cut off by the end of the data. "
        "Dashed (thin): fewer than 30 effective rows."
    )


@pytest.mark.parametrize("case", list(CASES))
def test_status_words_stand_at_their_stretches(pictures, case):
    curve, made = CASES[case](), pictures[case]
    panel = panel_of(made, "rows")
    wide = made.get_size_inches()[0]
    (left, _), (right, _) = panel.get_position().get_points()
    ends = curve.density.x_edges[[0, -1]]
    transform = np.log if curve.scale == "log" else np.asarray
    low, high = transform(ends)
    inches = wide * (left + (right - left) * (transform(curve.x) - low) / (high - low))
    for text in made.texts:
        if text.get_gid() == "status name":
            at = text.get_position()[0] * wide
            own = np.array([one == text.get_text() for one in curve.statuses])
            assert np.abs(inches[own] - at).min() < 0.5


@pytest.mark.parametrize("code", [OK, THIN, EDGE, OUTSIDE])
def test_notes_explain_only_what_occurs(code):
    curve = CASES["plain"]()
    note = words.reading_notes(replace(curve, status=np.full(256, code)), False, False)
    found = [word in note for word in ("(thin)", "(edge)", "(outside)")]
    assert found == [code == THIN, code == EDGE, code == OUTSIDE]


def test_stretches_cut_where_the_status_changes():
    assert stretches(np.array([0, 0, 1, 3, 3])) == [(0, 0, 2), (1, 2, 3), (3, 3, 5)]
    assert stretches(np.array([2])) == [(2, 0, 1)]
    assert stretches(np.array([], np.int64)) == []


def test_band_is_drawn_between_its_ends(pictures):
    curve, made = CASES["plain"](), pictures["plain"]
    (band,) = find(made, "band")
    corners = band.get_paths()[0].vertices
    for x, low, high in zip(curve.x, curve.lower, curve.upper, strict=True):
        own = corners[np.isclose(corners[:, 0], x), 1]
        assert np.isclose(own, low).any()
        assert np.isclose(own, high).any()


def test_missing_band_is_said(pictures):
    (band,) = find(pictures["no_band"], "band")
    assert band.get_paths() == []
    said = " ".join(texts(pictures["no_band"], "subtitle"))
    assert said.endswith("No band could be computed.")


def test_curve_without_any_value_is_said(pictures):
    made = pictures["no_curve"]
    assert " ".join(texts(made, "subtitle")).startswith(
        "There is no line: no point has rows near enough."
    )
    assert not find(made, "curve ok")


def test_few_points_are_marked(pictures):
    (dots,) = find(pictures["few_points"], "curve points")
    np.testing.assert_array_equal(dots.get_xdata(), [2.0, 5.0, 8.0, 8.5, 19.5])
    (dots,) = find(pictures["plain"], "curve points")
    assert dots.get_xdata().size == 0


def test_lone_point_among_many_is_marked():
    curve = CASES["plain"]()
    estimate, status = curve.estimate.copy(), curve.status.copy()
    estimate[[99, 101]], status[[99, 101]] = np.nan, OUTSIDE
    made = figure(replace(curve, estimate=estimate, status=status))
    (dots,) = find(made, "curve points")
    np.testing.assert_array_equal(dots.get_xdata(), curve.x[[100]])


def test_rows_strip_holds_the_exact_counts(pictures):
    curve = CASES["plain"]()
    (strip,) = find(pictures["plain"], "rows")
    np.testing.assert_array_equal(strip.get_data().values, curve.density.rows)
    assert strip.axes.get_yscale() == "linear"
    assert tick_texts(strip.axes.yaxis) == [str(int(curve.density.rows.max()))]
    assert panel_of(pictures["decades"], "rows").get_yscale() == "log"
    assert "rows per stretch, logarithmic height" in texts(pictures["decades"])


def test_strip_and_panel_share_x(pictures):
    for made in pictures.values():
        strip, panel = panel_of(made, "rows"), panel_of(made, "curve points")
        assert strip.get_xlim() == panel.get_xlim()
        assert strip.get_xscale() == panel.get_xscale()


def test_log_scale_has_a_log_axis(pictures):
    panel = panel_of(pictures["log_scale"], "curve ok")
    assert panel.get_xscale() == "log"
    assert {"0.1", "10", "1,000"} <= set(tick_texts(panel_of(pictures["log_scale"], "rows").xaxis))
    assert "bandwidth (factor)" in texts(pictures["log_scale"], "axis name")


def test_cells_are_a_picture_in_vector_files(pictures, tmp_path):
    (cells,) = find(pictures["plain"], "cells")
    assert cells.get_rasterized()
    draw(CASES["plain"](), tmp_path / "a.svg")
    drawn = (tmp_path / "a.svg").read_text()
    assert drawn.count("<image ") == 1
    assert len(drawn) < 400_000


def test_empty_cells_stay_white(pictures):
    curve = CASES["plain"]()
    (cells,) = find(pictures["plain"], "cells")
    np.testing.assert_array_equal(cells.get_array().mask, curve.density.sampled.T == 0.0)


# -- limits


def limits(curve):
    low, high = y_ends(curve)
    assert low < high
    return low, high


def test_limits_hold_curve_band_and_bulk():
    for case in ("plain", "gap", "times", "millions"):
        curve = CASES[case]()
        low, high = limits(curve)
        firm = curve.status == OK
        assert low <= curve.lower[firm].min()
        assert high >= curve.upper[firm].max()
        inside = curve.density.y_edges
        shares = curve.density.sampled.sum(axis=0) / curve.density.sampled.sum()
        assert shares[(inside[:-1] >= low) & (inside[1:] <= high)].sum() > 0.97


def test_one_outlier_does_not_widen_the_picture():
    plain = limits(CASES["plain"]())
    low, high = limits(CASES["stray_rows"]())
    assert high < plain[1] + 0.2 * (plain[1] - plain[0])
    assert low > plain[0] - 0.2 * (plain[1] - plain[0])


@pytest.mark.parametrize("share", [0.01, 0.1, 0.3])
@pytest.mark.parametrize("edge", [False, True])
def test_the_line_is_seen_wherever_a_code_for_missing_has_pulled_it(share, edge):
    """A mean of readings and of -9999 lies where no row does, and may be all edge."""
    plain = CASES["plain"]()
    estimate, lower, upper = (
        (1.0 - share) * one - share * 9999.0 for one in (plain.estimate, plain.lower, plain.upper)
    )
    status = np.where(plain.status == OK, EDGE, plain.status) if edge else plain.status
    curve = replace(plain, estimate=estimate, lower=lower, upper=upper, status=status)
    low, high = limits(curve)
    line, band = estimate[np.isfinite(estimate)], np.stack((lower, upper))[:, plain.status == OK]
    assert low < min(line.min(), band.min())
    assert high > max(line.max(), band.max())


@pytest.mark.parametrize("spread", [0.5, 20.0])
def test_code_for_missing_does_not_widen_the_picture(spread):
    curve = CASES["plain"]()
    cells = np.linspace(-500.0, 500.0, 97)
    sampled = np.zeros((160, 96))
    middles = 0.5 * (cells[1:] + cells[:-1])
    sampled[:] = np.exp(-0.5 * ((middles - 70.0) / spread) ** 2)
    sampled[:, 0] = 0.02 * sampled.sum(axis=1)
    low, high = limits(
        replace(curve, density=replace(curve.density, y_edges=cells, sampled=sampled))
    )
    assert low > -200.0
    assert high < 300.0
    if spread < 1.0:
        # All rows are in one cell, so the curve alone decides.
        assert high - low < 120.0


def test_cells_too_coarse_for_the_bulk_are_left_out_and_that_is_said(pictures):
    curve = CASES["outlier"]()
    low, high = limits(curve)
    assert 40.0 < low < high < 120.0
    assert find(pictures["outlier"], "cells") == []
    said = " ".join(texts(pictures["outlier"], "notes"))
    assert "Rows are not shown: far values of y make their cells too coarse." in said


def test_part_of_x_that_the_sample_lacks_is_said():
    curve = CASES["times"]()
    sampled = curve.density.sampled.copy()
    sampled[60:] = 0.0
    made = figure(replace(curve, density=replace(curve.density, sampled=sampled)))
    said = " ".join(texts(made, "notes"))
    assert "Shading rests on a sample, which holds no rows in parts of the axis." in said
    assert "Shading" not in " ".join(texts(figure(curve), "notes"))


def test_band_that_opens_up_where_rows_are_few_is_cut():
    curve = CASES["plain"]()
    upper = curve.upper.copy()
    upper[:5] = 1e9
    status = curve.status.copy()
    status[:5] = THIN
    high = limits(replace(curve, upper=upper, status=status))[1]
    usual = limits(curve)
    assert high < usual[1] + (usual[1] - usual[0])


def test_rounding_of_a_constant_is_not_magnified():
    low, high = limits(CASES["constant"]())
    assert low < 41.0
    assert high > 43.0
    low, high = limits(replace(CASES["no_curve"](), density=empty_density()))
    assert (low, high) == (-1.0, 1.0)


def empty_density():
    made = CASES["plain"]().density
    return replace(made, sampled=np.zeros_like(made.sampled))


@settings(max_examples=60, deadline=None)
@given(
    st.lists(st.floats(-1e12, 1e12), min_size=2, max_size=20),
    st.lists(st.sampled_from([OK, THIN, EDGE, OUTSIDE]), min_size=2, max_size=20),
)
def test_limits_are_finite_whatever_the_curve(values, codes):
    n = min(len(values), len(codes))
    status = np.array(codes[:n])
    estimate = np.where(status == OUTSIDE, np.nan, values[:n])
    curve = replace(
        CASES["plain"](), x=np.arange(float(n)), estimate=estimate, lower=estimate - 1.0,
        upper=np.where(status == THIN, np.nan, estimate + 1.0), status=status,
    )  # fmt: skip
    low, high = limits(curve)
    assert np.isfinite([low, high]).all()
    line = estimate[status != OUTSIDE]
    assert not line.size or (low <= line.min() and line.max() <= high)


# -- the lower panel


def test_chosen_bandwidth_is_marked_on_its_line_and_named(pictures):
    made = pictures["plain"]
    (dot,) = find(made, "best local-linear")
    assert dot.get_xdata()[0] == 1.35
    (line,) = find(made, "criterion local-linear")
    on_line = np.interp(np.log(1.35), np.log(line.get_xdata()), line.get_ydata())
    assert np.isclose(dot.get_ydata()[0], on_line, rtol=1e-12)
    assert sorted(texts(made, "criterion label")) == [
        "local-constant: best 0.945 °C", "local-linear: chosen 1.35 °C",
    ]  # fmt: skip
    assert dot.axes.get_xscale() == "log"


def test_other_estimator_is_fainter(pictures):
    (used,) = find(pictures["plain"], "criterion local-linear")
    (other,) = find(pictures["plain"], "criterion local-constant")
    assert other.get_linewidth() < used.get_linewidth()
    assert other.get_alpha() < used.get_alpha()
    curve = CASES["plain"]()
    told = {**curve.trace["settings"], "estimator": "local-constant"}
    made = figure(replace(curve, trace={**curve.trace, "settings": told}))
    (used,) = find(made, "criterion local-constant")
    assert used.get_color() == look.CURVE
    assert "local-constant: chosen 0.945 °C" in texts(made, "criterion label")


def test_given_bandwidth_is_a_line(pictures):
    (line,) = find(pictures["given"], "given")
    np.testing.assert_array_equal(line.get_xdata(), [3.0, 3.0])
    said = texts(pictures["given"], "criterion label")
    assert "given 3 °C" in said
    assert "local-linear: best 1.35 °C" in said
    assert find(pictures["plain"], "given") == []


def test_given_bandwidth_beyond_the_search_is_still_seen():
    curve = CASES["given"]()
    told = {**curve.trace["settings"], "bandwidth": 400.0}
    made = figure(replace(curve, bandwidth=400.0, trace={**curve.trace, "settings": told}))
    assert panel_of(made, "given").get_xlim()[1] > 400.0
    assert covered(made) == []


def test_plug_in_choice_is_called_so():
    curve = CASES["plain"]()
    made = figure(replace(curve, search=replace(curve.search, criterion="plug-in")))
    said = texts(made, "criterion label")
    assert sorted(said) == ["local-constant: plug-in 0.945 °C", "local-linear: chosen 1.35 °C"]


def test_flat_zones_are_bars_with_words(pictures):
    made = pictures["plain"]
    low, high = CASES["plain"]().search.trails["local-linear"].flat_zone
    (bar,) = find(made, "flat zone local-linear")
    corners = bar.get_paths()[0].vertices[:, 0]
    assert corners.min() == pytest.approx(low, rel=0.02)
    assert corners.max() == pytest.approx(high, rel=0.02)
    said = [text.get_text() for axes in made.axes for text in axes.texts]
    assert "local-linear: flat zone 1.152 to 1.582 °C" in said
    said = [text.get_text() for axes in pictures["one_flat"].axes for text in axes.texts]
    assert said == ["local-linear: flat zone over all widths searched"]
    said = [text.get_text() for axes in pictures["log_scale"].axes for text in axes.texts]
    assert "local-linear: flat zone factor 1.493 to 1.735" in said


def test_infinite_criteria_leave_a_gap_in_the_line(pictures):
    (line,) = find(pictures["infinite_criteria"], "criterion local-linear")
    assert np.isnan(line.get_ydata()[:6]).all()
    assert np.isfinite(line.get_ydata()[6:]).all()
    said = texts(pictures["one_all_infinite"], "criterion label")
    assert "local-constant: undefined at every width" in said


@pytest.mark.parametrize("case", list(CASES))
def test_valley_fills_the_panel(pictures, case):
    curve, made = CASES[case](), pictures[case]
    used = curve.settings["estimator"]
    (line,) = find(made, f"criterion {used}")
    low, high = line.axes.get_ylim()
    values = line.get_ydata()
    least = np.nanmin(values)
    assert low < least < low + 0.4 * (high - low)
    if np.nanmax(values) - least > 1e-9:
        # It rises by a third of the panel at least, on one side at least.
        assert np.nanmax(np.minimum(values, high)) - least > 0.3 * (high - low)


def test_wall_of_the_valley_does_not_flatten_it():
    curve = CASES["plain"]()
    trail = curve.search.trails["local-linear"]
    values = trail.leave_one_out.copy()
    values[-10:] = 1e9
    trails = {"local-linear": replace(trail, leave_one_out=values)}
    made = figure(replace(curve, search=replace(curve.search, trails=trails)))
    low, high = panel_of(made, "criterion local-linear").get_ylim()
    assert high - low < 5.0 * (values[0] - values.min())


def test_valley_shallower_than_its_flat_zone_shows_the_flat_zone():
    curve = CASES["plain"]()
    trail = replace(curve.search.trails["local-linear"], flat_zone=(0.3, 4.0))
    # A rise to the left that is nothing beside the rise to the right.
    values = np.where(trail.bandwidths < 1.35, 102.0 + 1e-6, trail.leave_one_out)
    values[np.argmin(np.abs(trail.bandwidths - 1.35))] = 102.0
    trails = {"local-linear": replace(trail, leave_one_out=values)}
    made = figure(replace(curve, search=replace(curve.search, trails=trails)))
    low, high = panel_of(made, "criterion local-linear").get_ylim()
    at_end = np.interp(np.log(4.0), np.log(trail.bandwidths), values)
    assert high > at_end > low


def test_other_estimator_far_above_is_named_at_the_rim(pictures):
    assert "local-constant: best 0.4 °C (above this panel)" in texts(
        pictures["decades"], "criterion label"
    )
    curve = CASES["decades"]()
    told = {**curve.trace["settings"], "estimator": "local-constant"}
    trails = dict(curve.search.trails)
    linear = trails["local-linear"]
    trails["local-linear"] = replace(linear, leave_one_out=linear.leave_one_out - 5000.0)
    made = figure(
        replace(
            curve, trace={**curve.trace, "settings": told},
            search=replace(curve.search, trails=trails),
        )
    )  # fmt: skip
    assert "local-linear: best 0.5 °C (below this panel)" in texts(made, "criterion label")
    assert covered(made) == []


@settings(max_examples=12, deadline=None)
@given(
    st.floats(-2.0, 2.0), st.floats(-2.0, 2.0), st.floats(-6.0, 1.0), st.floats(-6.0, 1.0),
    st.floats(-3.0, 6.0), st.floats(0.01, 3.0), st.booleans(),
)  # fmt: skip
def test_labels_never_cover_each_other(one, two, depth_one, depth_two, floor, share, fixed):
    trails = {
        name: valley(
            name, 10.0**best, low=0.01, high=100.0, depth=10.0**depth, floor=10.0**floor,
            share=share,
        )
        for name, best, depth in (
            ("local-constant", one, depth_one), ("local-linear", two, depth_two),
        )
    }  # fmt: skip
    curve = CASES["few_points"]()
    told = {**curve.trace["settings"], "bandwidth": 10.0**one if fixed else None}
    made = figure(
        replace(
            curve, bandwidth=10.0**one, trace={**curve.trace, "settings": told},
            search=replace(curve.search, trails=trails),
        )
    )  # fmt: skip
    assert covered(made) == []


# -- cautions


def test_cautions_are_counted_and_shortened(pictures):
    said = texts(pictures["many_cautions"], "cautions")
    assert said[0] == "5 cautions"
    assert said[-1] == "and 2 more"
    assert "The range was trimmed to 0 to 25, 17 rows are left out." in said
    assert not any("--range" in line or "Name a block" in line for line in said)
    assert texts(pictures["plain"], "cautions") == []


@pytest.mark.parametrize(("count", "heading"), [(1, "1 caution"), (3, "3 cautions")])
def test_few_cautions_leave_no_rest(count, heading):
    cautions = tuple(Caution(str(n), f"Row {n} is 0.5 too high. Look.") for n in range(count))
    curve = replace(CASES["plain"](), cautions=cautions)
    assert words.cautions(curve) == (
        heading,
        [f"Row {n} is 0.5 too high." for n in range(count)],
        "",
    )


def test_endless_caution_is_cut_to_three_lines():
    curve = replace(CASES["plain"](), cautions=(Caution("long", "very " * 400 + "long."),))
    made = figure(curve)
    said = texts(made, "cautions")
    assert len([line for line in said if line.startswith("very")]) == 3
    assert said[-1].endswith("…")
    assert covered(made) == []


# -- files


@pytest.mark.parametrize("suffix", [".png", ".svg", ".pdf"])
def test_same_curve_gives_the_same_bytes_under_any_settings(tmp_path, suffix):
    curve = CASES["many_cautions"]()
    draw(curve, tmp_path / f"a{suffix}")
    strange = {
        "font.size": 30.0, "axes.facecolor": "black", "svg.hashsalt": "other", "lines.linewidth": 9,
        "savefig.bbox": "tight", "axes.spines.left": False, "xtick.bottom": False,
    }  # fmt: skip
    with mpl.rc_context(strange):
        draw(curve, tmp_path / f"b{suffix}")
        assert all(mpl.rcParams[name] == value for name, value in strange.items())
    content = (tmp_path / f"a{suffix}").read_bytes()
    assert content == (tmp_path / f"b{suffix}").read_bytes()
    assert b"CreationDate" not in content
    assert b"<dc:date>" not in content
    assert sorted(os.listdir(tmp_path)) == [f"a{suffix}", f"b{suffix}"]


def test_png_has_the_size_and_title_that_it_should(tmp_path):
    from PIL import Image

    CASES["plain"]().plot(tmp_path / "a.png")
    with Image.open(tmp_path / "a.png") as image:
        assert image.size[0] == 1350
        assert image.text["Title"] == "power_kw (kW) against wet_bulb_c (°C)"
        assert image.text["Description"].startswith("The line is the mean from 4,000 rows")
        assert "Software" not in image.text
        seen = {colour for _, colour in image.convert("RGB").getcolors(1 << 24)}
    for colour in (look.CURVE, look.PAPER, look.ROWS):
        assert tuple(round(255 * part) for part in to_rgb(colour)) in seen


def test_refused_paths_name_the_option(tmp_path):
    curve = CASES["plain"]()
    with pytest.raises(WriteError, match=r"^--plot must name a file that ends in \.png, \.svg or"):
        draw(curve, tmp_path / "a.jpg")
    with pytest.raises(WriteError, match=r"^--plot must lie in a folder that exists"):
        draw(curve, tmp_path / "none" / "a.png")
    assert os.listdir(tmp_path) == []


def test_failure_while_drawing_keeps_the_former_picture(tmp_path, monkeypatch):
    path = tmp_path / "a.png"
    path.write_bytes(b"old")

    def savefig(self, stream, **named):
        stream.write(b"half")
        raise KeyboardInterrupt

    monkeypatch.setattr(Figure, "savefig", savefig)
    with pytest.raises(KeyboardInterrupt):
        draw(CASES["plain"](), path)
    assert path.read_bytes() == b"old"
    assert os.listdir(tmp_path) == ["a.png"]


def test_writing_tables_loads_no_drawing_and_drawing_no_windows():
    script = (
        "import sys, fastsmooth.files_out; assert 'matplotlib' not in sys.modules\n"
        "import fastsmooth.report.picture; assert 'matplotlib.pyplot' not in sys.modules"
    )
    subprocess.run([sys.executable, "-c", script], check=True)


# -- colours


def lab(colour):
    """CIE L*a*b* (D65) of linear RGB."""
    to_xyz = np.array(
        [[0.4124, 0.3576, 0.1805], [0.2126, 0.7152, 0.0722], [0.0193, 0.1192, 0.9505]]
    )
    t = to_xyz @ colour / np.array([0.9505, 1.0, 1.089])
    f = np.where(t > 0.008856, np.cbrt(t), 7.787 * t + 16.0 / 116.0)
    return np.array([116.0 * f[1] - 16.0, 500.0 * (f[0] - f[1]), 200.0 * (f[1] - f[2])])


def linear(colour):
    part = np.array(to_rgb(colour))
    return np.where(part <= 0.04045, part / 12.92, ((part + 0.055) / 1.055) ** 2.4)


# Machado, Oliveira & Fernandes 2009, IEEE Trans. Vis. Comput. Graph. 15:1291, severity 1.
VISION = {
    "full": np.eye(3),
    "deuteranopia": np.array(
        [[0.367322, 0.860646, -0.227968], [0.280085, 0.672501, 0.047413],
         [-0.011820, 0.042940, 0.968881]]
    ),
    "protanopia": np.array(
        [[0.152286, 1.052583, -0.204868], [0.114503, 0.786281, 0.099216],
         [-0.003882, -0.048116, 1.051998]]
    ),
}  # fmt: skip


@pytest.mark.parametrize("vision", list(VISION))
def test_colours_stay_apart(vision):
    lines = [look.CURVE, look.OTHER, look.INK]
    darkest_cell = look.CELLS(1.0)[:3]
    pairs = [
        *itertools.combinations(lines, 2),
        (look.CURVE, darkest_cell), (look.CURVE, look.BAND), (look.BAND, darkest_cell),
        (look.CURVE, look.ROWS),
    ]  # fmt: skip
    for left, right in pairs:
        a, b = (lab(np.clip(VISION[vision] @ linear(one), 0.0, 1.0)) for one in (left, right))
        # A difference of 2.3 is just noticeable.
        assert np.linalg.norm(a - b) > 20.0, (left, right)


def test_small_text_has_contrast():
    def luminance(colour):
        return float(linear(colour) @ np.array([0.2126, 0.7152, 0.0722]))

    pairs = [
        (look.INK, look.PAPER), (look.MUTED, look.PAPER), (look.CURVE, look.PAPER),
        (look.INK, look.OTHER_PALE), (look.PAPER, look.CURVE), (look.OTHER, look.PAPER),
    ]  # fmt: skip
    for text, ground in pairs:
        low, high = sorted((luminance(text), luminance(ground)))
        # The Web Content Accessibility Guidelines 2.1 ask for 4.5 (1.4.3).
        assert (high + 0.05) / (low + 0.05) >= 4.5, (text, ground)


# -- scales


@settings(max_examples=200, deadline=None)
@given(st.floats(-1e15, 1e15), st.floats(-9.0, 15.0))
def test_number_ticks_tell_their_place(low, power):
    high = low + 10.0**power
    if not high - low > 1e-9 * max(abs(low), abs(high)):
        return
    ticks = number_ticks(low, high)
    assert len(ticks.places) == len(ticks.texts) == len(set(ticks.texts))
    assert 2 <= len(ticks.places) <= 8
    assert all(len(text) <= 11 for text in ticks.texts)
    step = ticks.places[1] - ticks.places[0]
    offset = re.search(r"above (\N{MINUS SIGN}?[0-9.,e+]+)", ticks.note)
    scale = re.search(r"in 10(\S+?)(,|$)", ticks.note)
    superscripts = str.maketrans("⁻⁰¹²³⁴⁵⁶⁷⁸⁹", "-0123456789")
    for place, text in zip(ticks.places, ticks.texts, strict=True):
        value = plain_float(text)
        if scale:
            value *= 10.0 ** int(scale[1].translate(superscripts))
        if offset:
            value += plain_float(offset[1])
        assert abs(value - place) < 0.02 * step + 1e-12 * abs(place)


def plain_float(text):
    return float(text.replace("\N{MINUS SIGN}", "-").replace(",", ""))


def test_number_ticks_by_example():
    assert number_ticks(0.0, 100.0).texts == ["0", "20", "40", "60", "80", "100"]
    assert number_ticks(-1.0, 1.0, 4).texts[0] == "\N{MINUS SIGN}1.0"
    ticks = number_ticks(1e9, 1e9 + 25.0)
    assert (ticks.texts[0], ticks.note) == ("0", "above 1,000,000,000")
    assert number_ticks(0.0, 2.5e7).note == "in 10⁶"
    assert number_ticks(0.0, 2.5e-7).note == "in 10⁻⁹"


@settings(max_examples=200, deadline=None)
@given(st.floats(-12.0, 12.0), st.floats(0.001, 20.0))
def test_log_ticks_fit_and_are_few(power, decades):
    low, high = 10.0**power, 10.0 ** (power + decades)

    def inches(value):
        return 8.0 * np.log10(value / low) / decades

    track = Track(inches, letters)
    ticks = log_ticks(low, high, track)
    assert len(ticks.places) >= 2
    ends = [(inches(p) - 0.04 * len(t), inches(p) + 0.04 * len(t))
            for p, t in zip(ticks.places, ticks.texts, strict=True)]  # fmt: skip
    assert all(a[1] < b[0] for a, b in itertools.pairwise(ends))
    for place, text in zip(ticks.places, ticks.texts, strict=True):
        assert low <= place * (1 + 1e-9)
        assert place <= high * (1 + 1e-9)
        assert plain_float(text) == pytest.approx(place, rel=6e-3)


def ruler_track(low, high):
    return Track(lambda v: 7.8 * np.log(v / low) / np.log(high / low), letters)


def test_width_ticks_speak_the_language_of_the_axis():
    ticks = width_ticks(1800.0, 864_000.0, TIMES, False, ruler_track(1800.0, 864_000.0))
    assert ticks.texts[0] == "30 min"
    assert "1 d" in ticks.texts
    assert ticks.texts[-1] == "10 d"
    low, high = np.log(1.02), np.log(50.0)
    ticks = width_ticks(low, high, NUMBER, True, ruler_track(low, high))
    np.testing.assert_allclose(np.exp(ticks.places), [float(text) for text in ticks.texts])
    ticks = width_ticks(0.1, 20.0, NUMBER, False, ruler_track(0.1, 20.0))
    assert "0.5" in ticks.texts


@settings(max_examples=100, deadline=None)
@given(st.floats(-9.0, 9.0), st.floats(0.1, 9.0), st.booleans())
def test_width_ticks_never_touch(power, decades, log):
    low, high = 10.0**power, 10.0 ** (power + decades)
    for axis in (TIMES, NUMBER):
        track = ruler_track(low, high)
        ticks = width_ticks(low, high, axis, log and axis is NUMBER, track)
        ends = [(track.inches(p) - track.measure(t) / 2, track.inches(p) + track.measure(t) / 2)
                for p, t in zip(ticks.places, ticks.texts, strict=True)]  # fmt: skip
        assert all(a[1] < b[0] for a, b in itertools.pairwise(ends))


@pytest.mark.parametrize(
    ("value", "text"),
    [(0.0, "0"), (-2.5, "~2.5"), (12_000.0, "12,000"), (123_456.0, "123,456"), (0.00012, "0.00012"),
     (3e8, "3e8"), (1.5e-7, "1.5e~7"), (1e6, "1e6"), (999_999.0, "999,999")],
)  # fmt: skip
def test_short_number(value, text):
    assert short_number(value) == text.replace("~", "\N{MINUS SIGN}")


@pytest.mark.parametrize(
    ("rows", "text"),
    [(0.0, "0"), (7.0, "7"), (999.0, "999"), (1000.0, "1 k"), (99_400.0, "99 k"),
     (99_600.0, "100 k"),     (1_234_567.0, "1.2 M"), (2.5e9, "2.5 G"), (0.25, "0.25")],
)  # fmt: skip
def test_short_count(rows, text):
    assert short_count(rows) == text


def test_ticks_of_small_differences_by_example():
    assert number_ticks(4.5971, 4.5975, 4).texts == [
        "4.5971",
        "4.5972",
        "4.5973",
        "4.5974",
        "4.5975",
    ]
    assert number_ticks(202_545.0, 202_549.0, 4).note == "above 202,540"


def shown(axis, low, high):
    return shown_axis(axis, "logged_at", "", (low, high), False, 7.8, letters)


@pytest.mark.parametrize("axis", [TIMES, DATES, Axis("timestamp", "timestamp[ns]", "ns", None, 5)])
def test_times_are_drawn_where_arrow_puts_them(axis):
    x = np.array([0.0, 86_400.0 * 20, 86_400.0 * 40])
    plotted = shown(axis, x[0], x[-1]).plotted(x)
    told = axis.to_arrow(x)
    moments = told.cast(pa.timestamp("us", axis.zone), safe=False)
    moments = moments.to_numpy(zero_copy_only=False).astype("datetime64[us]")
    np.testing.assert_allclose(plotted, date2num(moments), rtol=0.0, atol=1e-9)


def test_calendar_ticks_say_what_changes():
    day = 86_400.0
    made = shown(TIMES, 0.0, 40 * day)
    assert made.label == "logged_at (Europe/Madrid), 2026"
    assert "15 Jan" in made.ticks.texts
    made = shown(TIMES, 0.0, 3000 * day)
    assert made.label == "logged_at (Europe/Madrid)"
    assert "2030" in made.ticks.texts
    made = shown(TIMES, 0.0, 500 * day)
    assert "Jan 2027" in made.ticks.texts
    made = shown(TIMES, 6 * 3600.0, 9 * 3600.0)
    assert made.label == "logged_at (Europe/Madrid), 1 Jan 2026"
    assert made.ticks.texts[0] == "07:00"
    made = shown(TIMES, 12 * 3600.0, 60 * 3600.0)
    assert "2 Jan" in made.ticks.texts
    assert made.label.endswith(", 1 Jan 2026 to 3 Jan 2026")
    made = shown(TIMES, 0.0, 40.0)
    assert re.fullmatch(r"01:00:\d\d", made.ticks.texts[1])


def test_too_short_for_a_calendar_is_told_in_seconds():
    made = shown(TIMES, 100.0, 100.5)
    assert made.label == "logged_at, seconds after 2026-01-01 01:01:40"
    np.testing.assert_allclose(made.plotted(np.array([100.25])), [0.25])
    far = Axis("timestamp", "timestamp[s]", "s", None, 10**12)
    assert shown(far, 0.0, 1e6).label.startswith("logged_at, seconds after ")


@settings(max_examples=60, deadline=None)
@given(st.floats(0.0, 3e8), st.floats(1.1, 8.5))
def test_calendar_ticks_fit_and_lie_within(start, power):
    low, high = start, start + 10.0**power
    made = shown(TIMES, low, high)
    ends = made.plotted(np.array([low, high]))
    assert len(made.ticks.places) >= 2
    assert all(ends[0] <= place <= ends[1] for place in made.ticks.places)
    at = (np.array(made.ticks.places) - ends[0]) / (ends[1] - ends[0]) * 7.8
    half = 0.04 * np.array([len(text) for text in made.ticks.texts])
    assert (at[1:] - half[1:] > at[:-1] + half[:-1]).all()


@pytest.mark.parametrize("zone", ["Europe/Madrid", "+05:30", "-03:00"])
def test_ticks_are_whole_in_the_zone_of_the_column(zone):
    axis = Axis("timestamp", f"timestamp[us, tz={zone}]", "us", zone, START_US)
    made = shown(axis, 0.0, 86_400.0)
    local = axis.label((made.ticks.places[2] - made.plotted(np.zeros(1))[0]) * 86_400.0)
    assert made.ticks.texts[2] in (local.split(" ")[1], "2 Jan", "1 Jan")
    assert local.endswith(":00")


def test_summer_time_does_not_hide_the_days():
    start = datetime(2026, 3, 20, tzinfo=ZoneInfo("Europe/Madrid")).timestamp() - START_US / 1e6
    made = shown(TIMES, start, start + 12 * 86_400.0)
    assert all(re.fullmatch(r"\d+ (Mar|Apr)", text) for text in made.ticks.texts)
    local = [moment.hour for moment in num2date(made.ticks.places, tz=ZoneInfo("Europe/Madrid"))]
    assert set(local) == {0}


@pytest.mark.parametrize("moment", ["2026-03-29 00:20", "2026-10-25 00:20"])
def test_hour_of_a_change_of_the_clock(moment):
    start = TIMES.from_user(moment)
    made = shown(TIMES, start, start + 5838.0)
    assert made.ticks.places == sorted(set(made.ticks.places))
    assert all(re.fullmatch(r"\d\d:\d\d", text) for text in made.ticks.texts)


def test_durations_take_a_unit_that_suits():
    axis = Axis("duration", "duration[s]", "s", None, 0)
    for high, unit, size in ((9000.0, "h", 3600.0), (300.0, "min", 60.0), (2e-4, "us", 1e-6)):
        made = shown_axis(axis, "since", "", (0.0, high), False, 7.8, letters)
        assert made.label == f"since ({unit})"
        np.testing.assert_allclose(made.plotted(np.array([high])), [high / size])


# -- labels


@pytest.fixture(scope="module")
def ruler():
    made = Figure(dpi=150)
    with look.plain_style():
        return Ruler(made)


def test_wrapped_lines_fit_and_lose_nothing(ruler):
    text = "a long sentence with a_very_long_name_of_a_column_that_no_line_can_hold_at_all in it"
    lines = ruler.wrap(text, 1.2, 9.0)
    assert all(ruler.width(line, 9.0) <= 1.2 for line in lines)
    assert "".join("".join(lines).split()) == "".join(text.split())


@settings(max_examples=60, deadline=None)
@given(text=st.text("ab_ .-", max_size=60), width=st.floats(0.3, 3.0), most=st.integers(1, 4))
def test_wrapping_any_text(ruler, text, width, most):
    lines = ruler.wrap(text, width, 9.0, most=most)
    assert 1 <= len(lines) <= most
    assert all(ruler.width(line, 9.0) <= width for line in lines)


def test_shortened_text_keeps_as_much_as_fits(ruler):
    assert ruler.shorten("power_kw", 5.0, 9.0) == "power_kw"
    short = ruler.shorten("power_kw" * 20, 1.0, 9.0)
    assert short.endswith("…")
    assert 0.85 < ruler.width(short, 9.0) <= 1.0


def test_labels_are_placed_free_of_each_other_and_of_lines():
    room = Box(0.0, 0.0, 5.0, 2.0)
    spots = [Spot(1.0, 1.0, 0.0), Spot(1.1, 1.0, 0.1), Spot(3.0, 1.0, 0.2), Spot(4.8, 0.2, 0.3)]
    labels = [Label(1.0, 0.2, None, spots), Label(1.0, 0.2, None, spots)]
    first, second = place_labels(labels, room, [], [])
    assert {first.left, second.left} == {1.0, 3.0}
    line = dense(np.array([[1.5, 0.0], [1.5, 2.0]]))
    first, second = place_labels(labels, room, [Box(0.0, 0.1, 0.5, 0.3)], [line])
    assert {first.left, second.left} == {3.0, 4.0}  # the last spot was moved into the room


def test_tie_leads_from_a_far_label_only():
    label = Label(1.0, 0.2, (2.0, 1.0), [])
    assert label.tie(Spot(1.5, 1.05, 0.0)) is None
    np.testing.assert_allclose(label.tie(Spot(3.0, 1.5, 0.0)), [[3.15, 1.5], [2.0, 1.0]])


def test_dense_points_stay_on_the_line_and_break_at_gaps():
    points = np.array([[0.0, 0.0], [1.0, 1.0], [np.nan, np.nan], [3.0, 0.0], [3.0, 1.0]])
    made = dense(points, 0.1)
    assert np.isfinite(made).all()
    on_first = np.isclose(made[:, 0], made[:, 1]) & (made[:, 0] <= 1.0)
    on_second = made[:, 0] == 3.0
    assert (on_first | on_second).all()
    assert on_first.sum() > 10
    assert on_second.sum() > 8


def test_first_sentence_ends_at_a_full_stop_not_at_a_decimal():
    assert words.first_sentence("Width 1.35 is narrow. Widen it.") == "Width 1.35 is narrow."
    assert words.first_sentence("Is -9999 a code? Leave it out.") == "Is -9999 a code?"
    assert words.first_sentence("No stop") == "No stop"
    assert words.first_sentence("") == ""


def test_axes_without_a_figure_are_refused():
    with pytest.raises(TypeError):
        look.figure_of(SimpleNamespace(get_figure=lambda: None))


def test_weird_column_of_one_value_is_drawn():
    x = temperatures(500)
    curve = build(x, cooling(x), 3.0, points=[1e6])
    assert curve.status[0] == OUTSIDE
    assert covered(figure(curve)) == []


def test_names_with_line_breaks_are_drawn_with_spaces():
    """A missing glyph is a warning, and warnings are errors."""
    curve = CASES["plain"]()
    settings = {**curve.trace["settings"], "x": "wet\nbulb\x07", "y": "power\tkw"}
    caution = Caution("odd", "The column power\x07kw is odd. Rename it.")
    made = figure(replace(curve, trace={**curve.trace, "settings": settings}, cautions=(caution,)))
    made.canvas.draw()
    drawn = " ".join(text.get_text() for text in made.texts)
    assert "power kw" in drawn
    assert "wet bulb" in drawn
    assert drawn.isprintable()


@pytest.mark.parametrize("width", [1e300, 1e-290])
def test_a_given_width_beyond_all_searched_ones_is_told_but_not_drawn(width):
    given = CASES["given"]()
    settings = {**given.trace["settings"], "bandwidth": width}
    far = figure(replace(given, bandwidth=width, trace={**given.trace, "settings": settings}))
    far.canvas.draw()
    assert len(find(figure(given), "given")) == 1
    assert find(far, "given") == []
    assert f"bandwidth {width:g}" in " ".join(texts(far))


def test_points_of_ones_own_are_not_joined():
    curve = CASES["plain"]()
    told = {**curve.trace["settings"], "at": ["1", "2"]}
    made = figure(replace(curve, trace={**curve.trace, "settings": told}))
    assert not find(made, "band")
    assert not find(made, "curve ok")
    assert find(made, "curve points")[0].get_xdata().size == np.isfinite(curve.estimate).sum()
    assert " ".join(texts(made, "subtitle")).startswith("The points are the mean from")
