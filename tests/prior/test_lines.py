"""The most particular line wins, key by key, and a line that speaks of nothing is refused."""

from __future__ import annotations

import tomllib

import numpy as np
import pytest
from helpers import make_system

from bayes_sys.errors import CardError
from bayes_sys.prior.cards import PriorCard, build_card
from bayes_sys.prior.lines import Statement, coefficient_statements, scale_statements
from bayes_sys.system.system import System

REGRESSORS = [["intercept", "log_tariff", "heat"], ["intercept", "log_tariff"], ["log_tariff"]]


@pytest.fixture
def system() -> System:
    rng = np.random.default_rng(3)
    designs = [np.column_stack([np.ones(12), rng.standard_normal((12, 2))])]
    designs += [designs[0][:, :2], designs[0][:, 1:2]]
    return make_system(designs, rng.standard_normal((12, 3)), ["alder", "St. John", "birch"], REGRESSORS)


def card(coefficients: str, scales: str = 'family = "half_normal"\nscale = 1.0', more: str = "") -> PriorCard:
    text = f'name = "own"\n[coefficients]\n{coefficients}\n[scales]\n{scales}\n'
    text += "[correlation]\nconcentration = 2\n"
    return build_card(tomllib.loads(text + more))


def said(prior: PriorCard, system: System) -> dict[str, Statement]:
    return dict(zip(system.coefficient_labels, coefficient_statements(prior, system), strict=True))


NORMAL = 'family = "normal"\nscale = 10.0\n'
POOLED = 'family = "pooled"\nmean_scale = 1.0\nspread_scale = 0.5\n'


def test_the_example_of_the_reference_resolves_as_it_reads(system: System) -> None:
    more = (
        "[coefficients.of.intercept]\nscale = 20.0\n[coefficients.in.alder]\nscale = 5.0\n"
        '[coefficients.of."alder.log_tariff"]\nmean = -0.4\nscale = 0.2\n[scales.in.alder]\nscale = 2.0'
    )
    prior = card(NORMAL, 'family = "half_normal"\nscale = 5.0', more)
    found = said(prior, system)
    assert found["alder.log_tariff"] == Statement("normal", {"mean": -0.4, "scale": 0.2})
    assert found["alder.heat"] == Statement("normal", {"mean": 0.0, "scale": 5.0})
    assert found["alder.intercept"].values["scale"] == 5.0, "in.EQUATION wins over of.REGRESSOR"
    assert found["St. John.intercept"].values["scale"] == 20.0
    assert found["St. John.log_tariff"].values["scale"] == found["birch.log_tariff"].values["scale"] == 10.0
    assert [s.values["scale"] for s in scale_statements(prior, system)] == [2.0, 5.0, 5.0]


def test_keys_come_from_different_lines(system: System) -> None:
    more = (
        "[coefficients.of.log_tariff]\nmean = -1.0\n[coefficients.in.alder]\nscale = 3.0\n"
        '[coefficients.of."alder.log_tariff"]\nmean = -2.0'
    )
    found = said(card(NORMAL, more=more), system)
    assert found["alder.log_tariff"].values == {"mean": -2.0, "scale": 3.0}
    assert found["birch.log_tariff"].values == {"mean": -1.0, "scale": 10.0}


def test_an_equation_with_a_dot_in_its_name_has_a_line(system: System) -> None:
    found = said(card(NORMAL, more='[coefficients.of."St. John.log_tariff"]\nscale = 0.1'), system)
    assert found["St. John.log_tariff"].values["scale"] == 0.1


def test_a_change_of_family_drops_the_keys_that_the_new_one_does_not_know(system: System) -> None:
    more = (
        '[coefficients.of.log_tariff]\nfamily = "pooled"\nmean_scale = 2.0\nspread_scale = 1.0\n'
        '[coefficients.of."birch.log_tariff"]\nfamily = "normal"\nscale = 0.3'
    )
    found = said(card(NORMAL + "mean = 0.7", more=more), system)
    assert found["alder.log_tariff"] == Statement(
        "pooled", {"mean": 0.7, "unit": 1.0, "mean_scale": 2.0, "spread_scale": 1.0}
    )
    assert found["birch.log_tariff"] == Statement("normal", {"mean": 0.7, "scale": 0.3})


def test_a_scale_family_can_differ_from_equation_to_equation(system: System) -> None:
    more = '[scales.in.birch]\nfamily = "lognormal"\nmedian = 0.2\nspread = 0.5'
    found = scale_statements(card(NORMAL, more=more), system)
    assert [s.family for s in found] == ["half_normal", "half_normal", "lognormal"]
    assert found[2].values == {"median": 0.2, "spread": 0.5}


def test_a_general_pooled_line_leaves_the_intercepts_to_their_own(system: System) -> None:
    found = said(card(POOLED, more='[coefficients.of.intercept]\nfamily = "normal"\nscale = 3.0'), system)
    assert found["alder.intercept"] == Statement("normal", {"mean": 0.0, "scale": 3.0})
    assert found["alder.heat"].family == "pooled"


def test_a_pooled_line_of_one_equation_leaves_its_intercept_alone(system: System) -> None:
    more = f"[coefficients.in.alder]\n{POOLED}unit = 2.0"
    found = said(card(NORMAL, more=more), system)
    assert found["alder.intercept"] == Statement("normal", {"mean": 0.0, "scale": 10.0})
    assert found["alder.heat"].values["unit"] == 2.0
    assert found["birch.log_tariff"].family == "normal"


def test_a_unit_for_one_equation_is_for_its_pooled_slopes(system: System) -> None:
    more = '[coefficients.of.intercept]\nfamily = "normal"\nscale = 3.0\n[coefficients.in.alder]\nunit = 2.0'
    found = said(card(POOLED, more=more), system)
    assert found["alder.heat"].values["unit"] == 2.0
    assert found["alder.intercept"] == Statement("normal", {"mean": 0.0, "scale": 3.0})


def test_intercepts_are_pooled_when_their_own_line_says_so(system: System) -> None:
    found = said(
        card(POOLED, more='[coefficients.of.intercept]\nfamily = "pooled"\nmean_scale = 9\nspread_scale = 4'),
        system,
    )
    assert found["alder.intercept"].values == {
        "mean": 0.0,
        "unit": 1.0,
        "mean_scale": 9.0,
        "spread_scale": 4.0,
    }


def test_an_intercept_that_asks_to_be_pooled_takes_up_the_general_line(system: System) -> None:
    found = said(card(POOLED, more='[coefficients.of.intercept]\nfamily = "pooled"\nmean_scale = 9'), system)
    assert found["alder.intercept"].values == {
        "mean": 0.0,
        "unit": 1.0,
        "mean_scale": 9.0,
        "spread_scale": 0.5,
    }
    assert found["alder.heat"].values["mean_scale"] == 1.0


def test_the_point_of_an_intercept_keeps_to_the_regressors_its_equation_has(system: System) -> None:
    more = "[coefficients.of.intercept]\nat = { log_tariff = 2.0, heat = 30.0 }"
    found = said(card(NORMAL, more=more), system)
    assert found["alder.intercept"].at == {"log_tariff": 2.0, "heat": 30.0}
    assert found["St. John.intercept"].at == {"log_tariff": 2.0}


def test_a_line_that_names_no_point_leaves_the_point_alone(system: System) -> None:
    more = "[coefficients.of.intercept]\nat = { heat = 30.0 }\n[coefficients.in.alder]\nscale = 2.0"
    found = said(card(NORMAL, more=more), system)
    assert found["alder.intercept"] == Statement("normal", {"mean": 0.0, "scale": 2.0}, {"heat": 30.0})


def test_the_point_of_one_intercept_replaces_the_general_one_as_a_whole(system: System) -> None:
    more = (
        "[coefficients.of.intercept]\nat = { log_tariff = 2.0, heat = 30.0 }\n"
        '[coefficients.of."alder.intercept"]\nat = { log_tariff = 5.0 }'
    )
    found = said(card(NORMAL, more=more), system)
    assert found["alder.intercept"].at == {"log_tariff": 5.0}


@pytest.mark.parametrize(
    ("coefficients", "scales", "more", "expected"),
    [
        (NORMAL, "", "", ["No line gives the error scale of “alder” a family", "“half_normal”"]),
        (
            NORMAL,
            'family = "half_student_t"\nscale = 1',
            "",
            ["a “df”, which the family “half_student_t” needs"],
        ),
        ("", None, "", ["No line gives alder.intercept a family", "[coefficients]", "“normal”"]),
        ('family = "normal"', None, "", ["No line gives alder.intercept a “scale”", "Add “scale”"]),
        (POOLED, None, "", ["“alder.intercept”", "speaks of slopes only", "Add [coefficients.of.intercept]"]),
        (
            NORMAL,
            None,
            "[coefficients.in.alder]\ndf = 3",
            ["[coefficients.in.alder]", "“df” is not a key of the family “normal”"],
        ),
        (
            NORMAL,
            None,
            "[scales.in.alder]\ndf = 3",
            ["[scales.in.alder]", "“df” is not a key of the family “half_normal”"],
        ),
        (
            "df = 3.0",
            None,
            '[coefficients.of.intercept]\nfamily = "normal"\nscale = 1',
            ["No line gives alder.log_tariff a family"],
        ),
        (
            NORMAL,
            None,
            "[coefficients.in.aldr]\nscale = 1",
            ["[coefficients.in.aldr]", "no equation “aldr”", "“alder”?"],
        ),
        (
            NORMAL,
            None,
            "[scales.in.brich]\nscale = 1",
            ["[scales.in.brich]", "no equation “brich”", "“birch”?"],
        ),
        (
            NORMAL,
            None,
            "[coefficients.of.log_tarif]\nscale = 1",
            ["no regressor “log_tarif”", "“log_tariff”?"],
        ),
        (
            NORMAL,
            None,
            "[coefficients.of.birch]\nscale = 1",
            ["no regressor “birch”", "write [coefficients.in.birch]"],
        ),
        (
            NORMAL,
            None,
            '[coefficients.of."alder.heta"]\nscale = 1',
            ["no coefficient “alder.heta”", "“alder.heat”?"],
        ),
        (
            NORMAL,
            None,
            '[coefficients.of."birch.intercept"]\nscale = 1',
            ["no coefficient “birch.intercept”"],
        ),
        (
            NORMAL,
            None,
            '[coefficients.of."oak.log_tariff"]\nscale = 1',
            ["no equation “oak”", "Known: “alder”, “St. John”, “birch”"],
        ),
        (
            NORMAL,
            None,
            '[coefficients.of."aldr.log_tariff"]\nscale = 1',
            ["no equation “aldr”", "“alder”?"],
        ),
        ('family = "student_t"\nscale = 1.0\n', None, "", ["“df”", "not built yet for coefficients"]),
        (
            NORMAL,
            None,
            "[coefficients.of.intercept]\nat = { haet = 1 }",
            ["[coefficients.of.intercept.at]", "“heat”?"],
        ),
        (
            NORMAL,
            None,
            '[coefficients.of."St. John.intercept"]\nat = { heat = 1 }',
            ['[coefficients.of."St. John.intercept".at]', "no regressor “heat”"],
        ),
        (
            NORMAL,
            None,
            f'[coefficients.of.log_tariff]\n{POOLED}[coefficients.of."birch.log_tariff"]\nspread_scale = 0.7',
            [
                "“log_tariff” must agree in “spread_scale”: “alder” has 0.5, “birch” 0.7",
                "[coefficients.of.log_tariff]",
            ],
        ),
    ],
)
def test_a_card_that_does_not_fit_the_system_is_refused(
    system: System, coefficients: str, scales: str | None, more: str, expected: list[str]
) -> None:
    prior = card(coefficients, more=more) if scales is None else card(coefficients, scales, more)
    with pytest.raises(CardError) as caught:
        scale_statements(prior, system)
        coefficient_statements(prior, system)
    for part in ["prior card “own”", *expected]:
        assert part in str(caught.value)


def test_a_line_of_the_intercept_is_fine_where_no_equation_has_one(system: System) -> None:
    slopes_only = make_system([np.arange(5.0)[:, None] ** 2], np.ones((5, 1)), ["a"], [["x"]])
    assert (
        said(card(NORMAL, more="[coefficients.of.intercept]\nscale = 1"), slopes_only)["a.x"].values["scale"]
        == 10
    )
