from __future__ import annotations

import re
import xml.etree.ElementTree as ET
from dataclasses import replace

import numpy as np
import pandas as pd
import pytest
from contents import make_content

from bayes_sys.report import pictures
from bayes_sys.report.plots import matrix
from bayes_sys.report.plots.canvas import axes_at, picture
from bayes_sys.report.plots.matrix import matrix_picture
from bayes_sys.report.plots.series import positions, series_of

HOSTILE = ("<script>alert(1)</script>", "$x_1$ & co", "水道", "NA")


def shown(svg):
    return [element.text for element in ET.fromstring(svg).iter("{http://www.w3.org/2000/svg}text")]


@pytest.fixture(scope="module")
def content():
    return make_content(HOSTILE, n_draws=20)


def test_names_are_shown_in_pictures_exactly_as_they_are_written(content):
    for found in (pictures.correlation_picture(content), pictures.scale_picture(content)):
        texts = shown(found.svg)
        assert "$x_1$ & co" in texts and "水道" in texts and "NA" in texts
        assert "<script" not in found.svg


def test_the_same_numbers_give_the_same_bytes(content):
    one, other = pictures.scale_picture(content), pictures.scale_picture(content)
    assert one.svg == other.svg
    assert not re.search(r"<metadata|<dc:|20\d\d-\d\d-\d\dT", one.svg)


def test_text_that_looks_like_markup_of_a_picture_is_not_changed():
    name = "a d=\"1.23456\" font-family: 'DejaVu Sans' <!-- x --> $\\frac{1}{2}$"

    def draw(figure):
        axes_at(figure, 10, 10, 80, 80).text(0, 0, name)

    assert name in shown(picture(100, 100, draw, "").svg)


def test_pictures_have_no_script_and_load_nothing(content):
    everything = [p for _, p, _ in pictures.series_pictures(content)]
    everything += [p for _, p in pictures.coefficient_pictures(content)]
    for found in everything:
        assert "<script" not in found.svg.lower()
        assert not re.search(r'(href|src)="(?!#)', found.svg)
        assert not re.search(r"url\((?!#)", found.svg)


def test_words_beside_a_picture_carry_its_numbers(content):
    found = pictures.correlation_picture(content)
    row = content.tables["correlations"].iloc[0]
    assert f"{row['mean']:.2f} ({row['q5']:.2f} to {row['q95']:.2f})" in found.alt


def test_a_correlation_has_a_colour_only_where_its_interval_leaves_nought_out():
    table = pd.DataFrame(
        [("a", "b", 0.5, -0.1, 0.8)], columns=["equation_a", "equation_b", "mean", "q5", "q95"]
    )
    from bayes_sys.report.plots.matrix import matrix_picture

    assert "#d55e00" not in matrix_picture(("a", "b"), table).svg
    assert "#d55e00" in matrix_picture(("a", "b"), table.assign(q5=0.1)).svg
    assert "#0072b2" in matrix_picture(("a", "b"), table.assign(q5=-0.9, mean=-0.5, q95=-0.1)).svg


def test_periods_stand_where_their_calendar_puts_them():
    assert list(positions(["2004", "2005", "2007"])[0]) == [2004, 2005, 2007]
    assert list(np.diff(positions(["2023-Q4", "2024-Q1", "2024-Q3"])[0])) == [1, 2]
    assert list(np.diff(positions(["2023-12", "2024-01"])[0])) == [1]
    assert list(np.diff(positions(["2024-02-28", "2024-03-01"])[0])) == [2]
    assert list(positions(["first", "second"])[0]) == [0, 1]


def test_a_line_is_broken_by_a_year_that_is_missing():
    rows = pd.DataFrame({"period": ["2004", "2005", "2007", "2008"], "observed": 1.0, "mean": 1.0})
    content = make_content(("a",), n_periods=10, n_draws=4)
    table = content.tables["fitted"].head(4).assign(period=rows["period"].to_list())
    from bayes_sys.report.plots.series import series_picture

    def strokes(table):
        svg = series_picture("a", series_of(table, 100)).svg
        path = re.search(r'd="([^"]*)"[^>]*stroke: #0072b2', svg)[1]
        return path.count("M")

    assert strokes(table) == 2
    assert strokes(table.assign(period=["2004", "2005", "2006", "2007"])) == 1


def test_long_series_are_thinned_but_keep_the_points_furthest_outside():
    n = 5000
    rows = pd.DataFrame(
        {"period": np.arange(n).astype(str), "observed": 0.0, "mean": 0.0, "q5": -1.0, "q95": 1.0}
    )
    rows.loc[1234, "observed"] = 9.0
    series = series_of(rows, 100)
    assert len(series.labels) == 101 and series.n_periods == n
    assert series.labels[0] == "0" and series.labels[-1] == "4999"
    assert "1234" in series.labels and series.outside.sum() == 1


@pytest.mark.parametrize("n_equations", [2, 7, 13, 20])
def test_the_matrix_keeps_inside_its_picture_at_every_size(n_equations):
    content = make_content(tuple(f"unit {i}" for i in range(n_equations)), n_draws=4, n_periods=40)
    found = pictures.correlation_picture(content)
    assert found.width < 1000
    root = ET.fromstring(found.svg)
    for text in root.iter("{http://www.w3.org/2000/svg}text"):
        assert -2 <= float(text.get("x", 0)) <= found.width + 2


def test_a_classical_estimate_far_away_does_not_squeeze_the_posterior():
    content = make_content(("a", "b"), n_draws=20)
    table = content.tables["coefficients"].copy()
    table.loc[0, "ols"] = 1e6
    far = type(content)(**{**content.__dict__, "tables": {**content.tables, "coefficients": table}})
    (_, panel) = pictures.coefficient_pictures(far)[-1]
    ticks = [t for t in shown(panel.svg) if t and re.fullmatch(r"[−\d.]+", t)]
    assert all(abs(float(t.replace("−", "-"))) < 100 for t in ticks)


@pytest.mark.parametrize("n_equations", [3, 10, 16])
def test_every_classical_correlation_has_a_mark_at_its_value(n_equations):
    content = make_content(tuple(f"u{i}" for i in range(n_equations)), n_draws=5, n_periods=40)
    table = content.tables["correlations"]
    names = pictures.equation_names(content)

    def squares(fgls):
        svg = matrix_picture(names, table.assign(fgls=fgls)).svg
        return [float(x) for x in re.findall(r'<use xlink:href="#[^"]*" x="([^"]*)"', svg)]

    # a mark at 1 stands 0.92 of a cell to the right of one at -1
    right, left, none = squares(1.0), squares(-1.0), squares(np.nan)
    assert len(right) == len(left) == len(none) + len(table)
    moved = np.sort(right).sum() - np.sort(left).sum()
    assert moved == pytest.approx(0.92 * matrix.cell_size(n_equations)[0] * len(table), rel=0.01)


def test_the_power_of_ten_of_an_axis_stands_inside_the_picture():
    content = make_content(("a", "b"), n_draws=10)
    numbers = ["mean", "q5", "q95"]
    fitted, table = content.tables["fitted"].copy(), content.tables["coefficients"].copy()
    fitted[["observed", *numbers]] *= 1e101
    table[[*numbers, "fgls", "fgls_se", "ols", "prior_mean", "prior_sd"]] *= 1e101
    content = replace(content, tables={"fitted": fitted, "coefficients": table})
    found = [p for _, p, _ in pictures.series_pictures(content)]
    found += [p for _, p in pictures.coefficient_pictures(content)]
    for one in found:
        (place,) = re.findall(
            r'<text [^>]*?(?:y="([\d.]+)"|translate\([\d.]+ ([\d.]+)\))[^>]*>×1e10', one.svg
        )
        # the foot of digits that are 7 pixels high
        assert 7 <= float(place[0] or place[1]) < one.height
