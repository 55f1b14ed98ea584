"""The page's text: what it says, that nothing in it can break out, that it needs nothing else."""

import base64
import hashlib
import json
import math
import os
import re
import time
import zlib
from dataclasses import replace
from datetime import UTC, date, datetime
from html.parser import HTMLParser
from pathlib import Path
from urllib.parse import unquote

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

import fastsmooth
from fastsmooth.cli import main
from fastsmooth.curve import STATUSES, Caution, Limits
from fastsmooth.errors import WriteError
from fastsmooth.fleet import Unit
from fastsmooth.report import look
from fastsmooth.report.page import key_text, page_text, write_page
from fastsmooth.report.panels import steps_of, unit_data
from fastsmooth.report.thumbnails import HIGH, WIDE, Ends, Thumbnail, common_ends, thumbnail
from fastsmooth.summary import PRUDENCE
from tests.curves import CASES
from tests.pages import many, readings, renamed, small_fleet

MADE_AT = datetime(2026, 3, 1, 6, 30, tzinfo=UTC)
REPORT = Path(fastsmooth.__file__).parent / "report"
NASTY = (
    "<script>alert(1)</script>",
    "</script><img src=x onerror=alert(1)>",
    "\"'&<>`",
    "a&b=c#d?e/f%20",
    "{{ 7 * 7 }} {% raw %}",
    "Zürich, 冷却 🥛",
    "tab\tline\nnull\x00turn\u202eed",
    "",
    "  ",
    "null",
    None,
    "--><!-- ]]>",
)


class Seen(HTMLParser):
    """Every element with its attributes, and the text of those that are asked about."""

    def __init__(self, text):
        super().__init__(convert_charrefs=True)
        self.elements, self.texts, self._open = [], [], []
        self.feed(text)
        self.close()

    def handle_starttag(self, tag, attrs):
        attrs = dict(attrs)
        self.elements.append((tag, attrs))
        if tag not in ("meta", "input", "path", "rect"):
            self._open.append((tag, attrs))

    def handle_startendtag(self, tag, attrs):
        self.elements.append((tag, dict(attrs)))

    def handle_endtag(self, tag):
        while self._open and self._open.pop()[0] != tag:
            pass

    def handle_data(self, data):
        if self._open:
            self.texts.append((*self._open[-1], data))

    def within(self, tag, kind=None):
        return [
            text for name, attrs, text in self.texts
            if name == tag and (kind is None or kind in (attrs.get("class") or "").split())
        ]  # fmt: skip


@pytest.fixture(scope="module")
def fleet():
    return small_fleet()


@pytest.fixture(scope="module")
def page(fleet):
    return page_text(fleet, MADE_AT)


def told(text):
    return json.loads(
        re.search(r'<script type="application/json" id="told">(.*?)</script>', text)[1]
    )


def unpacked(letters):
    return json.loads(zlib.decompress(base64.b64decode(letters)))


def summed(steps, decimals):
    """What the script does to steps, with exact numbers."""
    total, values = 0, []
    for step in steps:
        if step is not None:
            total += step
        values.append(None if step is None else total / 10**decimals)
    return values


def complete(curve, **settings):
    """A curve built for pictures, with the parts of its trace that the summary tells."""
    trace = {
        **curve.trace,
        "settings": {**curve.trace["settings"], "folds": 32, "weight": None, "at": None,
            "where": None, **settings,
        },
        "engine": {
            "name": "binned", "bins": 2048, "bins_per_bandwidth": 80.0, "passes": 1,
            "residual_sd": 3.0, "error_in_noise_sd": 1e-6, "reason": "",
        },
        "fit": {"r2_left_out": 0.9, "cv_rmse": 0.07, "nmbe": 0.0},
        "landmarks": [], "serial": None, "blocks": 0,
    }  # fmt: skip
    return replace(curve, trace=trace)


# -- what it says


def test_it_says_what_it_shows(page):
    seen = Seen(page)
    assert seen.within("h1") == ["power_kw against wet_bulb_c"]
    assert seen.within("footer") == [PRUDENCE]
    totals = " ".join(" ".join(text for *_, text in seen.texts).split())
    assert "5 units: 4 made , 1 x constant . 6,050 rows used of 6,050 read." in totals
    assert "Made 2026-03-01 06:30 UTC by fastsmooth" in totals
    assert (
        "local-linear, biweight kernel; bandwidth by leave-one-out; pointwise 95 % band." in totals
    )


def test_every_unit_has_a_row_with_its_figures(fleet, page):
    seen = Seen(page)
    assert seen.within("bdi") == ["Alpweg", "Birkenau", "Corso", "Dorf", "Ebnet"]
    assert seen.within("td", "rows") == ["1,500", "1,500", "1,500", "1,500", "50"]
    curves = [unit.curve for unit in fleet.units if unit.curve]
    assert seen.within("td", "width") == [curve.width_label(curve.bandwidth) for curve in curves]
    assert seen.within("td", "scatter")[:4] == [
        f"{curve.trace['engine']['residual_sd']:.4g}" for curve in curves
    ]
    assert seen.within("td", "fit")[:4] == [
        f"{curve.trace['fit']['r2_left_out']:.3f}" for curve in curves
    ]
    assert len([one for one in seen.elements if one[1].get("class") == "firm"]) == 4


def test_a_unit_without_a_curve_says_why(fleet, page):
    reason = fleet.units[-1].reason
    assert "50 rows" in reason
    assert reason in Seen(page).within("small")
    data = told(page)
    assert data["curves"][-1] is None
    assert data["units"][-1]["reason"] == f"x constant: {reason}"


def test_cautions_stand_where_they_belong(fleet):
    about_search = Caution("flat criterion", "Every bandwidth is as good.")
    about_rows = Caution("mostly thin", "Most points are thin.")
    curve = replace(fleet.units[0].curve, cautions=(about_rows, about_search))
    units = (Unit(("Alpweg",), "made", None, 1500, curve), *fleet.units[1:])
    general = Caution("many refused", "Half of the rows were refused.")
    made = page_text(replace(fleet, units=units, cautions=(general,)), MADE_AT)
    seen = Seen(made)
    assert seen.within("p", "caution") == [" Half of the rows were refused."]
    assert {"flat criterion ", "mostly thin "} <= set(seen.within("button", "find"))
    first = told(made)
    assert first["units"][0]["sort"][-1] == 2
    cautions = unpacked(first["curves"][0])["cautions"]
    assert cautions == {
        "curve": [{"code": "mostly thin", "text": "Most points are thin."}],
        "search": [{"code": "flat criterion", "text": "Every bandwidth is as good."}],
    }


def test_every_code_that_is_kept_for_the_search_is_one_of_the_cautions():
    from fastsmooth.report.panels import ABOUT_SEARCH

    source = (REPORT.parent / "cautions.py").read_text()
    assert set(re.findall(r'Caution\(\s*"([^"]+)"', source)) >= ABOUT_SEARCH


def test_a_single_curve_has_no_table(fleet):
    curve = fleet.units[0].curve
    made = page_text(curve, MADE_AT)
    names = {name for name, _ in Seen(made).elements}
    assert "table" not in names
    assert PRUDENCE in made
    data = told(made)
    assert data["single"] is True
    assert unpacked(data["curves"][0])["said"].startswith("The line is the mean from 1,500 rows")


def test_the_same_result_and_time_give_the_same_page(fleet, page):
    assert page_text(fleet, MADE_AT) == page


# -- the numbers


def test_the_script_is_told_the_values_of_the_table(fleet, page):
    for unit, letters in zip(fleet.units[:4], told(page)["curves"], strict=False):
        curve, data = unit.curve, unpacked(letters)["picture"]
        decimals = data["y"]["decimals"]
        low, high = data["y"]["ends"]
        assert 1e4 <= (high - low) * 10**decimals < 1e5
        for name in ("estimate", "lower", "upper"):
            for value, here in zip(getattr(curve, name), summed(data[name], decimals), strict=True):
                if math.isfinite(value):
                    assert here == pytest.approx(value, abs=0.5001 * 10.0**-decimals)
                else:
                    assert here is None
        for name, digits in (("effective_rows", 3), ("residual_sd", 4)):
            expected = [
                float(f"{value:.{digits}g}") if math.isfinite(value) else None
                for value in getattr(curve, name).tolist()
            ]
            assert data[name] == expected
        assert [STATUSES[int(code)] for code in data["status"]] == curve.statuses
        assert data["rows"]["counts"] == curve.density.rows.tolist()
        low, high = data["x"]["labels"]  # the ends, from which the script makes all
        places = [low + place * ((high - low) / 255) for place in range(255)] + [high]
        assert [f"{x:.6g}" for x in places] == [curve.axis.label(x) for x in curve.x.tolist()]


@pytest.mark.parametrize("case", list(CASES))
def test_every_kind_of_curve_can_be_told(case):
    curve = complete(CASES[case]())
    data = json.loads(json.dumps(unit_data(curve), allow_nan=False))
    picture = data["picture"]
    count = curve.x.size
    at = picture["x"]["at"]
    assert at == sorted(at)
    assert len(at) in (2, count)
    assert -1e-5 <= at[0] <= at[-1] <= 1.00001
    assert all(-1e-5 <= share <= 1.00001 for share, _ in picture["x"]["ticks"])
    edges = picture["rows"]["edges"]
    assert edges == sorted(edges)
    assert len(edges) == len(picture["rows"]["counts"]) + 1
    assert all(0.0 <= share <= 1.0 for share in picture["rows"]["heights"])
    low, high = picture["y"]["ends"]
    known = curve.estimate[np.isfinite(curve.estimate) & (curve.status == 0)]
    assert all(low <= value <= high for value in known.tolist())
    labels = picture["x"]["labels"]
    if isinstance(labels[0], str):
        assert labels == [curve.axis.label(x) for x in curve.x.tolist()]
    decimals = picture["y"]["decimals"]
    for value, here in zip(curve.estimate, summed(picture["estimate"], decimals), strict=True):
        assert (here is None) == (not math.isfinite(value))
        if here is not None:
            step = 0.5001 * 10.0**-decimals + 1e-15 * abs(value)
            assert here == pytest.approx(value, abs=step)
    for path in data["criteria"]["paths"]:
        assert len(path["at"]) == len(path["up"])
        assert 0.0 <= path["flat"][0] <= path["flat"][1] <= 1.0
    page_text(curve, MADE_AT)


def test_times_are_told_in_their_own_words():
    data = unit_data(complete(CASES["times"]()))["picture"]
    assert data["x"]["title"] == "logged_at (Europe/Madrid), 2026"
    assert data["x"]["labels"][0].startswith("2026-01-01 ")
    assert len(data["x"]["labels"]) == 256
    assert "Jan" in " ".join(text for _, text in data["x"]["ticks"])


def test_points_of_ones_own_are_not_joined():
    curve = complete(CASES["few_points"](), at=["2", "5", "8", "8.5", "19.5"])
    data = unit_data(curve)["picture"]
    assert data["own_points"] is True
    assert data["strokes"] == []
    small, _ = thumbnail(curve)
    assert small.firm.count("M") == small.firm.count("h0") == 5
    assert small.band == small.weak == ""


def test_limits_are_told(fleet):
    curve = fleet.units[0].curve
    values = np.stack((curve.estimate - 2.0, curve.estimate + 2.0))
    data = unit_data(replace(curve, limits=Limits((0.05, 0.999), values, (0.05, 0.999), 1500)))
    limits, decimals = data["picture"]["limits"], data["picture"]["y"]["decimals"]
    assert [one["name"] for one in limits] == ["5 %", "99.9 %"]
    for one, row in zip(limits, values, strict=True):
        known = np.isfinite(row)
        told_values = np.array(summed(one["values"], decimals), float)
        assert told_values[known] == pytest.approx(row[known], abs=0.5001 * 10.0**-decimals)
        assert np.isnan(told_values[~known]).all()


@given(
    st.lists(st.one_of(st.just(math.nan), st.floats(-1e6, 1e6)), max_size=40),
    st.integers(-4, 8),
)
def test_steps_add_up_to_the_values(values, decimals):
    steps = steps_of(np.array(values), decimals)
    total = 0
    for value, step in zip(values, steps, strict=True):
        if math.isnan(value):
            assert step is None
        else:
            total += step
            assert abs(total - value * 10.0**decimals) <= 0.5 + 1e-9 * abs(total)


def test_small_curves_fit_their_box_and_the_common_scale(fleet):
    drawn = [thumbnail(unit.curve) for unit in fleet.units[:4]]
    together = common_ends([ends for _, ends in drawn])
    for unit, (small, own) in zip(fleet.units, drawn, strict=False):
        # The first point of the firm line, walked through the transformation.
        left, down = map(int, re.match(r"M(-?\d+) (-?\d+)", small.firm).groups())
        a, b, c, d, e, f = map(
            float, re.fullmatch(r"matrix\((.*)\)", small.within(own, together).common)[1].split()
        )
        assert b == c == 0.0
        curve = unit.curve
        first = int(np.flatnonzero(curve.status == 0)[0])
        across = (curve.x[first] - together.left) / (together.right - together.left)
        up = (curve.estimate[first] - together.bottom) / (together.top - together.bottom)
        assert a * left + e == pytest.approx(WIDE * across, abs=8.0)
        assert d * down + f == pytest.approx(HIGH * (1.0 - up), abs=4.0)
    for small, _ in drawn:
        x, y, heights = 0, 0, []
        for letter, numbers in re.findall(r"([Mlh])([-\d ]*)", small.firm):
            pairs = list(map(int, numbers.split()))
            if letter == "M":
                x, y = pairs
            else:
                for right, down in zip(pairs[::2], pairs[1::2], strict=True):
                    x, y = x + right, y + down
                    assert -1 <= x <= WIDE + 1
                    heights.append(y)
        assert min(heights) >= -1
        assert max(heights) <= HIGH + 1


def test_a_flat_curve_and_no_curve_have_a_small_picture():
    small, ends = thumbnail(complete(CASES["constant"]()))
    assert "nan" not in small.firm.lower()
    assert small.within(ends, common_ends([ends])).common
    assert thumbnail(complete(CASES["no_curve"]())) == (
        Thumbnail("", "", ""), Ends(0.0, 0.0, 0.0, 0.0)
    )  # fmt: skip


# -- nothing breaks out, nothing comes in


def test_names_of_any_kind_stay_text(fleet):
    made = page_text(renamed(fleet, [(name,) for name in NASTY]), MADE_AT)
    seen = Seen(made)
    assert seen.within("bdi") == [key_text(name) for name in NASTY]
    assert [name for name, _ in seen.elements].count("script") == 3
    assert "img" not in {name for name, _ in seen.elements}
    for _, attributes in seen.elements:
        assert not [name for name in attributes if name.startswith("on") or name == "style"]
    data = told(made)
    assert [one["name"] for one in data["units"]] == [key_text(name) for name in NASTY]


def test_columns_and_cautions_of_any_kind_stay_text(fleet):
    bad = "</title><script>alert(1)</script>\u202e"
    curve = fleet.units[0].curve
    settings = {**fleet.trace["settings"], "x": bad, "y": bad, "x_unit": bad, "where": bad}
    trace = {**curve.trace, "settings": settings}
    curve = replace(curve, trace=trace, cautions=(Caution(bad, bad),))
    units = (Unit(("Alpweg",), "made", None, 5, curve), Unit(("B",), "data refused", bad, 0, None))
    made = replace(
        fleet, by=(bad,), units=units, cautions=(Caution(bad, bad),),
        trace={**fleet.trace, "settings": settings},
    )  # fmt: skip
    for result in (made, curve):
        text = page_text(result, MADE_AT)
        seen = Seen(text)
        assert [name for name, _ in seen.elements].count("script") == 3
        assert len(seen.within("title")) == 1
        assert "\u202e" not in text
        assert "\u202e" not in json.dumps(unpacked(told(text)["curves"][0]), ensure_ascii=False)
        assert "<" not in re.search(r'id="told">(.*?)</script>', text)[1]


def test_addresses_of_units_differ_and_can_be_read_back(fleet):
    keys = [("a&b", "c"), ("a", "b&c"), ("a=b", None), ("a", ""), ("", "a"), (None, "a")]
    data = told(page_text(renamed(fleet, keys, by=("plant", "line")), MADE_AT))
    links = [one["link"] for one in data["units"]]
    assert len(set(links)) == len(links)
    for key, link in zip(keys, links, strict=True):
        assert re.fullmatch(r"[\w.~%=&-]+", link)
        parts = [part.partition("=") for part in link.split("&")]
        assert [unquote(name) for name, _, _ in parts] == ["plant", "line"]
        read = tuple(unquote(value) if equals else None for _, equals, value in parts)
        assert read == tuple(None if value is None else str(value) for value in key)


def test_keys_sort_by_value_with_null_last(fleet):
    days = [date(2026, 2, 1), None, date(2025, 12, 1), date(2026, 2, 1)]
    sizes = [10.0, math.nan, 9.0, -1.0]
    made = renamed(fleet, list(zip(days, sizes, strict=True)), by=("month", "size"))
    sort = [one["sort"][:2] for one in told(page_text(made, MADE_AT))["units"]]
    assert [day for day, _ in sort] == [1, None, 0, 1]
    assert [size for _, size in sort] == [2, None, 1, 0]


def test_the_page_loads_nothing(page):
    seen = Seen(page)
    for name, attributes in seen.elements:
        assert name not in ("link", "img", "iframe", "object", "embed", "base", "form", "use")
        assert not {"src", "srcset", "action", "data", "xlink:href"} & attributes.keys()
        assert attributes.get("href", "#").startswith("#")
    style = "".join(seen.within("style"))
    assert "url(" not in style
    assert "@import" not in style
    own = (REPORT / "page.js").read_text()
    assert not re.search(r"fetch|XMLHttp|import\s*\(|WebSocket|sendBeacon|https?:|innerHTML", own)


def test_only_the_scripts_of_the_page_may_run(page):
    seen = Seen(page)
    (policy,) = [
        attributes["content"] for name, attributes in seen.elements
        if attributes.get("http-equiv") == "Content-Security-Policy"
    ]  # fmt: skip

    def digest(text):
        return f"'sha256-{base64.b64encode(hashlib.sha256(text.encode()).digest()).decode()}'"

    rules = dict(rule.split(" ", 1) for rule in policy.split("; "))
    scripts = re.findall(r"<script>(.*?)</script>", page, re.DOTALL)
    assert rules["default-src"] == "'none'"
    assert rules["script-src"].split() == [digest(text) for text in scripts]
    assert rules["style-src"].split() == [
        digest(text) for text in re.findall(r"<style>(.*?)</style>", page, re.DOTALL)
    ]


def test_the_library_is_as_published_and_brings_its_licence(page):
    table = re.findall(
        r"`(d3-\w+\.min\.js)` \| .*? \| `(\w{64})`", (REPORT / "vendored/README.md").read_text()
    )
    assert len(table) == 3
    for name, expected in table:
        content = (REPORT / "vendored" / name).read_bytes()
        assert hashlib.sha256(content).hexdigest() == expected
        assert content.decode() in page
    assert "Permission to use, copy, modify, and/or distribute this software" in page


@pytest.mark.parametrize("colour", [look.INK, look.MUTED, look.CURVE, look.OTHER])
def test_text_stands_out_from_the_paper(colour):
    """Contrast of at least 4.5: WCAG 2.2, success criterion 1.4.3; its relative luminance."""

    def luminance(text):
        parts = [int(text[start : start + 2], 16) / 255 for start in (1, 3, 5)]
        linear = [p / 12.92 if p <= 0.04045 else ((p + 0.055) / 1.055) ** 2.4 for p in parts]
        return 0.2126 * linear[0] + 0.7152 * linear[1] + 0.0722 * linear[2]

    assert (luminance(look.PAPER) + 0.05) / (luminance(colour) + 0.05) >= 4.5


# -- writing


def test_five_hundred_units_are_a_few_megabytes(fleet, tmp_path):
    begun = time.monotonic()
    write_page(many(fleet, 500), tmp_path / "fleet.html")
    assert time.monotonic() - begun < 60.0
    size = (tmp_path / "fleet.html").stat().st_size
    assert 1e6 < size < 7e6
    assert os.listdir(tmp_path) == ["fleet.html"]


def test_a_page_that_fails_leaves_the_former_one(fleet, tmp_path, monkeypatch):
    place = tmp_path / "fleet.html"
    place.write_text("former")

    def fail(source, target):
        raise OSError(28, "No space left on device")

    monkeypatch.setattr(os, "replace", fail)
    with pytest.raises(WriteError, match=r"--page must be written whole, but .* free some space"):
        write_page(fleet, place)
    assert place.read_text() == "former"
    assert os.listdir(tmp_path) == ["fleet.html"]


def test_refused_places_name_the_option(fleet, tmp_path):
    with pytest.raises(WriteError) as refusal:
        write_page(fleet, tmp_path / "fleet.pdf")
    assert str(refusal.value) == (
        f"--page must name a file that ends in .html, but '{tmp_path / 'fleet.pdf'}' ends in "
        "'.pdf'; choose one of these endings."
    )
    data = tmp_path / "readings.html"
    trace = {**fleet.trace, "files": [{"path": str(data)}]}
    data.write_text("readings")
    with pytest.raises(WriteError, match="--page must leave the data alone"):
        write_page(replace(fleet, trace=trace), data)
    assert data.read_text() == "readings"


def test_a_curve_writes_its_page(fleet, tmp_path):
    fleet.units[0].curve.page(tmp_path / "curve.html")
    assert (tmp_path / "curve.html").read_text(encoding="utf-8").startswith("<!DOCTYPE html>")


@pytest.mark.parametrize("by", [[], ["--by", "plant"]])
def test_the_command_writes_a_page(tmp_path, capsys, by):
    import pyarrow as pa
    import pyarrow.parquet as pq

    pq.write_table(pa.table(readings()), tmp_path / "readings.parquet")
    out = tmp_path / "curve.html"
    arguments = [
        "curve",
        str(tmp_path / "readings.parquet"),
        "--x",
        "wet_bulb_c",
        "--y",
        "power_kw",
    ]
    assert main([*arguments, *by, "--page", str(out), "--json"]) == 0
    assert json.loads(capsys.readouterr().out)["written"] == [str(out)]
    seen = Seen(out.read_text(encoding="utf-8"))
    assert ("table" in {name for name, _ in seen.elements}) == bool(by)
    assert main([*arguments, *by, "--page", str(tmp_path / "curve.htm")]) == 2
    assert "--page must name a file that ends in .html" in capsys.readouterr().err
