from __future__ import annotations

import re
from dataclasses import replace
from html.parser import HTMLParser

import numpy as np
import pandas as pd
import pytest
from contents import MANIFEST, failed, make_content

from bayes_sys.report.content import RunContent
from bayes_sys.report.page import page

HOSTILE = ("<script>alert(1)</script>", "$x_1$ & \"q'", "x" * 90, "St. John")
VOID = {"meta", "img", "br", "link", "input"}


class Reader(HTMLParser):
    """Collects tags, and fails on any that is not closed in order."""

    def __init__(self):
        super().__init__()
        self.open, self.tags, self.text, self.ids, self.links = [], [], [], set(), []

    def handle_starttag(self, tag, attributes):
        self.tags.append((tag, dict(attributes)))
        if dict(attributes).get("id"):
            self.ids.add(dict(attributes)["id"])
        if tag == "a":
            self.links.append(dict(attributes)["href"])
        if tag not in VOID:
            self.open.append(tag)

    def handle_endtag(self, tag):
        assert self.open.pop() == tag

    def handle_data(self, data):
        if not self.open or self.open[-1] != "style":
            self.text.append(data)


def read(html):
    reader = Reader()
    reader.feed(html)
    assert reader.open == []
    return reader


@pytest.fixture(scope="module")
def content():
    return make_content(n_draws=40)


@pytest.fixture(scope="module")
def html(content):
    return page(content)


def test_every_section_is_there_and_every_link_leads_somewhere(html):
    reader = read(html)
    wanted = "answer asked data coefficients correlations scales examination gate checks prior"
    assert set(wanted.split()) | {"cautions", "again", "tables"} <= reader.ids
    assert {link.lstrip("#") for link in reader.links} <= reader.ids


def test_the_page_loads_nothing_and_runs_nothing(html):
    policy = re.search(r'http-equiv="Content-Security-Policy" content="([^"]*)"', html)[1]
    assert policy.startswith("default-src 'none'; style-src 'unsafe-inline'; img-src data:")
    reader = read(html)
    assert not {tag for tag, _ in reader.tags} & {"script", "link", "iframe", "object", "form"}
    assert all(a["src"].startswith("data:image/svg+xml;base64,") for tag, a in reader.tags if tag == "img")
    assert not [a for _, a in reader.tags if any(name.startswith("on") for name in a)]
    assert "http://" not in html and "https://" not in html


def test_every_picture_has_words_and_every_table_headings(html):
    reader = read(html)
    pictures = [a for tag, a in reader.tags if tag == "img"]
    assert len(pictures) == 3 + 3 + 1 + 1 and all(len(a["alt"]) > 30 for a in pictures)
    assert all("scope" in a for tag, a in reader.tags if tag == "th")
    assert ("html", {"lang": "en"}) in reader.tags


def test_text_from_data_is_escaped_everywhere():
    hostile = '"><img src=x onerror=alert(1)>'
    content = make_content(HOSTILE, n_draws=10, regressors=("intercept", "<b>bold</b>", "{{ 7 * 7 }}"))
    content = replace(
        content,
        study=f"# {hostile}",
        card=f"# {hostile}",
        prior_words=(hostile,),
        examination=({"name": hostile, "equation": hostile, "verdict": hostile, "sentence": hostile},),
        manifest={
            **MANIFEST,
            "title": hostile,
            "command": hostile,
            "notes": [hostile],
            "reasons": {"fgls": hostile},
            "versions": {hostile: hostile},
            "data_sha256": {hostile: hostile},
            "card": {"name": hostile, "summary": hostile},
        },
    )
    html = page(content)
    reader = read(html)
    assert "script" not in {tag for tag, _ in reader.tags}
    assert not [a for tag, a in reader.tags if tag == "img" and not a["src"].startswith("data:image/svg+xml")]
    assert not [a for _, a in reader.tags if "onerror" in a]
    text = "".join(reader.text)
    assert "<script>alert(1)</script>" in text and "<b>bold</b>" in text and "{{ 7 * 7 }}" in text
    assert text.count(hostile) >= 12


def test_a_failed_gate_cannot_be_overlooked(content):
    html = page(failed(content))
    text = "".join(read(html).text)
    assert html.index('class="banner"') < html.index("<h1>")
    assert "Do not use the numbers on this page." in text
    assert "NOT TO BE USED" in re.search(r"<title>(.*?)</title>", html)[1]
    assert "R-hat is 1.310" in text and "Let the chains run longer." in text
    assert "There is no answer to give" in text and "strongest correlation" not in text
    assert 'body class="gate-failed"' in html


def test_a_gate_that_failed_wins_over_a_status_that_says_complete(content):
    manifest = {**failed(content).manifest, "status": "complete"}
    assert 'body class="gate-failed"' in page(replace(content, manifest=manifest))


def test_an_incomplete_run_is_marked(content):
    manifest = {"status": "incomplete", "title": "Half a run"}
    html = page(replace(content, manifest=manifest, tables={}))
    assert "This run is not complete." in html and "There is no answer to give" in html


def test_an_empty_run_still_gives_a_page():
    html = page(RunContent())
    assert read(html).ids >= {"answer", "cautions", "again"}
    assert "This run is not complete." in html


@pytest.mark.parametrize("key", sorted(MANIFEST))
def test_no_key_of_the_manifest_is_indispensable(content, key):
    manifest = {k: v for k, v in MANIFEST.items() if k != key}
    small = replace(content, manifest=manifest, tables={"scales": content.tables["scales"]})
    assert read(page(small)).ids >= {"answer", "scales"}


@pytest.mark.parametrize("key", ["rhat_max", "ess_bulk_min", "divergences", "bfmi_min", "limits"])
def test_a_figure_the_gate_lacks_is_not_called_passed(content, key):
    gate = {k: v for k, v in MANIFEST["gate"].items() if k != key}
    small = RunContent(manifest={**MANIFEST, "gate": gate})
    assert "not known" in page(small)


@pytest.mark.parametrize(
    "missing", ["coefficients", "scales", "correlations", "fitted", "equations", "benchmark", "checks"]
)
def test_no_table_is_indispensable(content, missing):
    tables = {k: v for k, v in content.tables.items() if k not in (missing, "fitted")}
    read(page(replace(content, tables=tables)))


def test_one_equation_has_no_matrix():
    html = page(make_content(("solo",), n_draws=10))
    assert 'id="correlations"' not in html and 'id="coefficients"' in html


def test_without_a_classical_joint_estimate_the_page_says_why():
    content = make_content(("a", "b", "c"), n_periods=3, prior_sd=1.0, n_draws=10)
    assert np.isnan(content.tables["coefficients"]["fgls"]).all()
    text = "".join(read(page(content)).text)
    assert "There is no classical joint estimate" in text and "FGLS, 90% interval" not in text


def test_verdicts_that_several_equations_share_are_said_once(html):
    text = re.sub(r"<[^>]+>", "", html)
    assert text.count("Move together.") == 1 and "north and south." in text
    assert html.index("Something is amiss.") < html.index("Move together.")


def test_surprising_checks_are_spelled_out(content):
    checks = content.tables["checks"].copy()
    checks.loc[1, ["verdict", "sentence"]] = ["surprising", "The largest residual is 7."]
    html = page(replace(content, tables={**content.tables, "checks": checks}))
    assert "The largest residual is 7." in html and "1 of 12 predictive checks came out surprising" in html


def test_long_tables_are_cut_and_say_where_the_rest_is(content):
    long = make_content(("a", "b"), n_periods=700, n_draws=4)
    html = page(replace(content, tables={"fitted": long.tables["fitted"]}))
    assert "800 more rows stand in <code>fitted.csv</code>" in html
    assert "points are drawn" in html


@pytest.mark.slow
def test_thirty_equations_of_ten_thousand_periods_stay_below_three_megabytes():
    names = tuple(f"unit {i:02d}" for i in range(30))
    assert len(page(make_content(names, n_periods=10_000, n_draws=4)).encode()) < 3e6


def test_what_pooled_coefficients_share_is_shown_only_where_something_is_pooled(content, html):
    assert "What pooled coefficients share" not in html
    table = pd.DataFrame(
        {
            "regressor": ["<b>x</b>"] * 2,
            "quantity": ["shared mean", "spread"],
            "mean": [-0.5512, 0.2],
            "q5": [-0.9, 0.01],
            "q95": [-0.1, 0.6],
        }
    )
    shown = page(replace(content, tables={**content.tables, "pooled": table}))
    assert "What pooled coefficients share" in shown
    assert "&lt;b&gt;x&lt;/b&gt;" in shown and "<b>x</b>" not in shown
    assert "−0.551 (−0.900 to −0.100)" in shown


def test_the_page_of_one_equation_says_nothing_of_other_equations():
    text = page(make_content(("only",), n_draws=10))
    assert "1 equation ·" in text and "1 equations" not in text
    assert "estimated together" not in text and "between equations" not in text
    assert "correlation of the shocks" not in text


def test_the_page_says_a_finding_once_that_two_checks_make(content):
    names = ("shared_shocks_lm", "shared_shocks_lm_simulated")
    rows = [
        {"name": n, "equation": "", "figure": 0.3, "verdict": "note", "sentence": f"From {n}."} for n in names
    ]
    text = page(replace(content, examination=tuple(rows)))
    assert "From shared_shocks_lm_simulated." in text and "From shared_shocks_lm." not in text


def test_the_classical_mark_is_explained_only_where_there_is_one(content, html):
    assert "classical (FGLS)" in html
    table = content.tables["correlations"].assign(fgls=np.nan)
    without = page(replace(content, tables={**content.tables, "correlations": table}))
    assert "classical (FGLS)" not in without
