"""Derived columns: every step does what it says, by period within each equation, and leaves its trace."""

from __future__ import annotations

import tomllib
from typing import Any

import numpy as np
import pandas as pd
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from bayes_sys.errors import InputError, StudyError, TableError
from bayes_sys.study.derive import derive_columns, full_lineage
from bayes_sys.study.panel import AppliedStep, Panel
from bayes_sys.study.periods import find_periods
from bayes_sys.study.read import make_study
from bayes_sys.study.spec_data import ALSO_CALLED, STEPS
from bayes_sys.study.store import Cells, Store
from bayes_sys.study.table import read_panel

RNG = np.random.default_rng(20)
YEARS = np.arange(2001, 2013)

# Invented: two mills.
MILLS = pd.DataFrame(
    {
        "year": np.tile(YEARS, 2),
        "mill": np.repeat(["upper", "lower"], 12),
        "flour": RNG.uniform(0.1, 0.9, 24),
        "water": RNG.uniform(1.0, 5.0, 24),
    }
)


def panel_of(derive: dict[str, Any], table: pd.DataFrame = MILLS, **data: Any) -> Panel:
    study = make_study(
        {
            "data": {"period": "year", "unit": "mill", **data},
            "derive": derive,
            "every_equation": {"response": "flour"},
        }
    )
    return read_panel(study, table)


def made(steps: list[Any], table: pd.DataFrame = MILLS, source: str = "flour", **data: Any) -> pd.DataFrame:
    """Return the derived column of each mill, one column a mill."""
    panel = panel_of({"new": {"from": source, "steps": steps}}, table, **data)
    return pd.DataFrame({e: panel.frames[e]["new"] for e in panel.equations})


def raw(column: str = "flour") -> pd.DataFrame:
    by_mill = MILLS.pivot(index="year", columns="mill", values=column)
    return by_mill[["upper", "lower"]]


def close(found: pd.DataFrame, expected: pd.DataFrame) -> None:
    np.testing.assert_allclose(found.to_numpy(), expected.to_numpy(), rtol=1e-13, atol=1e-13)


@pytest.mark.parametrize(
    ("steps", "expected"),
    [
        (["log"], lambda x: np.log(x)),
        (["exp"], lambda x: np.exp(x)),
        (["logit"], lambda x: np.log(x / (1 - x))),
        (["diff"], lambda x: x.diff()),
        ([{"lag": 3}], lambda x: x.shift(3)),
        ([{"lag": 12}], lambda x: x.shift(12)),
        ([{"lag": 99}], lambda x: x.shift(99)),
        ([{"scale": -100}], lambda x: -100 * x),
        ([{"center": 0.25}], lambda x: x - 0.25),
        ([{"power": -0.5}], lambda x: x**-0.5),
        ([{"rolling_mean": 3}], lambda x: x.rolling(3).mean()),
        ([{"rolling_mean": 40}], lambda x: x.rolling(40).mean()),
        ([{"times": "water"}], lambda x: x * raw("water")),
        ([{"over": "water"}], lambda x: x / raw("water")),
        ([{"plus": "water"}], lambda x: x + raw("water")),
        ([{"minus": "water"}], lambda x: x - raw("water")),
        (["standardise"], lambda x: (x - x.mean()) / x.std(ddof=1)),
        (["log", "diff", {"lag": 1}, {"scale": 100}], lambda x: 100 * np.log(x).diff().shift(1)),
        ([{"lag": 1}, "standardise"], lambda x: (x.shift(1) - x.shift(1).mean()) / x.shift(1).std()),
    ],
)
def test_each_step_equals_pandas(steps: list[Any], expected: Any) -> None:
    close(made(steps), expected(raw()))


@settings(max_examples=25, deadline=None)
@given(st.permutations(range(24)), st.integers(1, 14))
def test_a_lag_by_period_is_a_shift_on_a_complete_grid_whatever_the_order_of_rows(
    order: list[int], lag: int
) -> None:
    found = made([{"lag": lag}], MILLS.iloc[order])
    np.testing.assert_array_equal(found[["upper", "lower"]], raw().shift(lag))


def test_lags_differences_and_means_go_by_period_across_a_gap_and_not_by_row() -> None:
    table = MILLS[~((MILLS.mill == "upper") & (MILLS.year == 2004))]
    holed = raw().copy()
    holed.loc[2004, "upper"] = np.nan
    close(made([{"lag": 1}], table), holed.shift(1))
    close(made(["diff"], table), holed.diff())
    close(made([{"rolling_mean": 2}], table), holed.rolling(2).mean())


def test_lags_reach_before_the_window() -> None:
    found = made([{"lag": 2}], **{"from": 2003})
    np.testing.assert_array_equal(found.to_numpy()[2], raw().to_numpy()[0])


def test_a_lag_counts_steps_where_periods_are_five_years_apart() -> None:
    table = MILLS.assign(year=5 * MILLS.year)
    np.testing.assert_array_equal(made([{"lag": 1}], table), raw().shift(1))


def test_standardise_takes_the_moments_of_the_sample_in_use_and_keeps_them() -> None:
    panel = panel_of({"z": {"from": "flour", "steps": ["standardise"]}}, **{"from": 2003, "exclude": [2005]})
    inside = raw().loc[[y for y in YEARS if y >= 2003 and y != 2005]]
    for mill in ("upper", "lower"):
        fitted = panel.lineage[mill, "z"].steps[0].fitted
        assert fitted["mean"] == pytest.approx(inside[mill].mean(), rel=1e-14)
        assert fitted["sd"] == pytest.approx(inside[mill].std(ddof=1), rel=1e-14)
        z = panel.frames[mill]["z"]
        assert z[panel.in_sample].mean() == pytest.approx(0, abs=1e-14)
        # Periods outside the sample are on the same scale.
        assert z.iloc[0] == pytest.approx((raw()[mill].iloc[0] - fitted["mean"]) / fitted["sd"], rel=1e-13)


def test_recorded_moments_are_kept_in_a_later_pass() -> None:
    derive = {"z": {"from": "flour", "steps": [{"scale": 2.0}, "standardise"]}}
    study = make_study({"data": {"period": "year"}, "derive": derive})
    periods, _ = find_periods([1, 2, 3, 4])

    def run(values: list[float], recorded: Any = None) -> tuple[Store, Any]:
        store = Store(study, "x", ("a",), 1, 4, columns={"flour": Cells(np.array(values)[:, None])})
        return store, derive_columns(store, periods, np.ones(4, dtype=bool), recorded=recorded)

    _, lineage = run([1.0, 2.0, 3.0, 4.0])
    store, again = run([5.0, 5.0, 5.0, 5.0], lineage)
    assert again == lineage
    np.testing.assert_allclose(store.columns["z"].values[:, 0], (10.0 - 5.0) / np.std([2, 4, 6, 8], ddof=1))


def test_columns_of_their_own() -> None:
    panel = panel_of(
        {
            "drift": {"trend": True},
            "flood": {"pulse": 2004},
            "reform": {"step_from": "2010"},
            "phase": {"season": 3},
        },
        **{"from": 2003, "exclude": [2003]},
    )
    frame = panel.frames["lower"]
    # The first period of the sample is 2004: 2003 is left out.
    assert frame["drift"].tolist() == [float(y - 2004) for y in YEARS]
    assert frame["flood"].tolist() == [float(y == 2004) for y in YEARS]
    assert frame["reform"].tolist() == [float(y >= 2010) for y in YEARS]
    assert frame["phase_2"].tolist() == [float((y - 2004) % 3 == 1) for y in YEARS]
    assert frame["phase_3"].tolist() == [float((y - 2004) % 3 == 2) for y in YEARS]
    assert "phase_1" not in frame and "phase" not in frame
    assert panel.lineage["upper", "flood"].steps == (AppliedStep("pulse", 2004),)
    assert panel.lineage["upper", "phase_2"].source is None


def test_seasons_of_quarters_are_those_of_the_year() -> None:
    quarters = [f"{y}-Q{q}" for y in (2020, 2021, 2022) for q in (1, 2, 3, 4)]
    panel = panel_of({"q": {"season": 4}}, MILLS.assign(year=quarters * 2), **{"from": "2020-Q3"})
    assert panel.frames["upper"]["q_2"].tolist() == [float(q.endswith("2")) for q in quarters]


def test_a_column_of_another_unit_is_seen_by_all_even_if_that_unit_is_not_selected() -> None:
    derive = {"upstream": {"from": "water", "of_unit": "upper", "steps": [{"lag": 1}]}}
    panel = panel_of(derive, units=["lower"])
    assert panel.equations == ("lower",)
    np.testing.assert_array_equal(panel.frames["lower"]["upstream"], raw("water")["upper"].shift(1))
    assert panel.lineage["lower", "upstream"].steps[0] == AppliedStep("of_unit", "upper")
    assert set(panel.lineage) == {("lower", "upstream")}


def test_a_column_of_another_unit_in_wide_layout() -> None:
    table = pd.DataFrame({"year": YEARS, "upper_flour": 1.0, "lower_flour": 2.0})
    content = {
        "data": {"period": "year", "units": ["lower"]},
        "derive": {"upstream": {"from": "{equation}_flour", "of_unit": "upper"}},
        "every_equation": {"response": "{equation}_flour", "regressors": ["upstream"]},
    }
    panel = read_panel(make_study(content), table)
    assert panel.frames["lower"]["upstream"].tolist() == [1.0] * 12
    assert panel.lineage["lower", "upstream"].source == "upper_flour"


def test_derived_names_with_a_placeholder_are_made_for_each_equation_and_can_be_borrowed() -> None:
    table = pd.DataFrame({"year": YEARS, "upper_flour": 1.0 + YEARS, "lower_flour": 2.0 + YEARS})
    content = {
        "data": {"period": "year", "units": ["upper", "lower"]},
        "derive": {
            "{equation}_log": {"from": "{equation}_flour", "steps": ["log"]},
            "log_1": {"from": "{equation}_log", "steps": [{"lag": 1}]},
        },
        "every_equation": {"response": "{equation}_log", "regressors": ["log_1"]},
        "equation": {"lower": {"regressors": ["log_1", "upper_log"]}},
    }
    panel = read_panel(make_study(content), table)
    np.testing.assert_allclose(panel.frames["lower"]["upper_log"], np.log(1.0 + YEARS), rtol=1e-15)
    np.testing.assert_allclose(panel.frames["lower"]["log_1"].iloc[1:], np.log(2.0 + YEARS[:-1]), rtol=1e-15)
    assert "lower_log" not in panel.frames["upper"]
    assert panel.lineage["lower", "lower_log"].source == "lower_flour"


def test_the_lineage_records_own_steps_and_can_be_followed_to_the_raw_column() -> None:
    panel = panel_of(
        {
            "log_flour": {"from": "flour", "steps": ["log"]},
            "growth": {"from": "log_flour", "steps": ["diff", {"minus": "water"}]},
        }
    )
    own = panel.lineage["upper", "growth"]
    assert own.source == "log_flour"
    assert own.steps == (AppliedStep("diff"), AppliedStep("minus", "water"))
    whole = full_lineage(panel.lineage, "upper", "growth")
    assert whole.source == "flour" and [s.name for s in whole.steps] == ["log", "diff", "minus"]
    assert full_lineage(panel.lineage, "upper", "flour").steps == ()


# Cells without an answer


def with_cell(column: str, mill: str, year: int, value: float) -> pd.DataFrame:
    table = MILLS.copy()
    table.loc[(table.mill == mill) & (table.year == year), column] = value
    return table


@pytest.mark.parametrize(
    ("step", "value", "said"),
    [
        ("log", 0.0, "no logarithm"),
        ("log", -2.0, "no logarithm"),
        ("logit", 1.0, "strictly between 0 and 1"),
        ("logit", 0.0, "strictly between 0 and 1"),
        ("logit", 1.5, "strictly between 0 and 1"),
        ("exp", 800.0, "too large"),
        ({"power": 0.5}, -1.0, "power"),
        ({"power": -1}, 0.0, "power"),
        ({"power": 9}, 1e200, "power"),
        ({"scale": 1e200}, 1e200, "too large"),
    ],
)
def test_a_cell_without_an_answer_is_named_with_unit_period_and_value(
    step: Any, value: float, said: str
) -> None:
    with pytest.raises(TableError) as caught:
        made([step], with_cell("flour", "lower", 2007, value))
    message = str(caught.value)
    for piece in (
        "“flour”",
        "lower",
        "2007",
        f"{value:.12g}",
        said,
        "derive.new.steps[0]",
        "table given in Python",
    ):
        assert piece in message, message


def test_division_by_zero_is_named() -> None:
    with pytest.raises(TableError, match=r"upper in 2003 .*divisor"):
        made([{"over": "water"}], with_cell("water", "upper", 2003, 0.0))


def test_a_square_of_a_negative_number_is_no_fault() -> None:
    found = made([{"power": 2}], with_cell("flour", "upper", 2003, -3.0))
    assert found["upper"].iloc[2] == 9.0


@pytest.mark.parametrize(
    "step", ["log", "exp", "logit", "diff", {"power": 0.5}, {"lag": 1}, {"over": "water"}]
)
def test_an_empty_cell_stays_empty_and_is_no_fault(step: Any) -> None:
    found = made([step], with_cell("flour", "upper", 2003, np.nan))
    assert np.isnan(found["upper"].iloc[3 if step == {"lag": 1} else 2])


def test_a_fault_outside_the_sample_matters_only_if_the_sample_reaches_it() -> None:
    table = with_cell("flour", "upper", 2003, 0.0)
    made(["log"], table, **{"from": 2004})
    made(["log"], table, exclude=[2003])
    for steps in (
        ["log", {"lag": 1}],
        ["log", "diff"],
        ["log", {"rolling_mean": 2}],
        ["log", {"lag": 1}, "exp"],
    ):
        with pytest.raises(TableError, match=r"upper in 2003 is 0"):
            made(steps, table, **{"from": 2004})
        made(steps, table, **{"from": 2005})


def test_a_fault_travels_through_a_column_made_from_another() -> None:
    derive = {
        "l": {"from": "flour", "steps": ["log"]},
        "sum": {"from": "water", "steps": [{"plus": "l"}]},
        "late": {"from": "sum", "steps": [{"lag": 1}]},
    }
    with pytest.raises(TableError, match=r"derive\.l\.steps\[0\].*“flour” of upper in 2003 is 0"):
        panel_of(derive, with_cell("flour", "upper", 2003, 0.0), **{"from": 2004})


def test_a_fault_of_a_unit_that_is_not_selected_is_no_fault() -> None:
    found = made(["log"], with_cell("flour", "upper", 2003, 0.0), units=["lower"])
    close(found, np.log(raw()[["lower"]]))


def test_a_constant_column_cannot_be_standardised() -> None:
    table = MILLS.assign(flour=np.where(MILLS.mill == "upper", 0.3, MILLS.flour))
    with pytest.raises(TableError, match=r"“new” of upper cannot be standardised"):
        made(["standardise"], table)


# Names


@pytest.mark.parametrize(
    ("derive", "key", "said"),
    [
        ({"flour": {"from": "water", "steps": ["log"]}}, "derive.flour", "already the name of a column"),
        ({"mill": {"trend": True}}, "derive.mill", "already the name of a column"),
        ({"a_2": {"trend": True}, "a": {"season": 2}}, "derive.a", "already the name of a derived column"),
        ({"a": {"from": "a", "steps": ["log"]}}, "derive.a.from", "made by [derive] itself"),
        (
            {"a": {"from": "b", "steps": ["log"]}, "b": {"from": "a", "steps": ["log"]}},
            "derive.a.from",
            "change the order",
        ),
        (
            {"a": {"from": "flour", "steps": [{"plus": "b"}]}, "b": {"trend": True}},
            "derive.a.steps[0].plus",
            "order",
        ),
        ({"a": {"from": "flouer", "steps": ["log"]}}, "derive.a.from", "“flour”"),
        ({"a": {"from": "flour", "steps": ["log", {"over": "wata"}]}}, "derive.a.steps[1].over", "“water”"),
        ({"a": {"from": "water", "of_unit": "uper"}}, "derive.a.of_unit", "“upper”"),
        ({"a": {"pulse": "spring"}}, "derive.a.pulse", "not a period"),
        ({"a": {"step_from": "2004-Q1"}}, "derive.a.step_from", None),
    ],
)
def test_names_that_cannot_be_are_refused_with_their_key(
    derive: dict[str, Any], key: str, said: str | None
) -> None:
    if said is None:
        # A quarter lies within a year of the data: the step begins with that year.
        assert panel_of(derive).frames["upper"]["a"].tolist() == [float(y >= 2004) for y in YEARS]
        return
    with pytest.raises(InputError) as caught:
        panel_of(derive)
    assert caught.value.where == f"study given in Python, {key}"
    assert said in str(caught.value)


def test_the_name_of_a_season_is_no_column_and_its_columns_are_named() -> None:
    study = make_study(
        {
            "data": {"period": "year", "unit": "mill"},
            "derive": {"phase": {"season": 3}},
            "every_equation": {"response": "flour", "regressors": ["phase"]},
        }
    )
    with pytest.raises(StudyError, match=r"“phase_2”, “phase_3”"):
        read_panel(study, MILLS)


@pytest.mark.parametrize(
    ("step", "said"),
    [
        ("ln", 'Write "log"'),
        ({"ln": 1}, 'Write "log"'),
        ("sqrt", "power = 0.5"),
        ("standardize", 'Write "standardise"'),
        ("difference", 'Write "diff"'),
        ("lgo", "“log”"),
        ("seasonally_adjusted", ", ".join(STEPS)),
    ],
)
def test_a_step_called_otherwise_is_answered_with_the_step_that_is_meant_or_with_all_of_them(
    step: Any, said: str
) -> None:
    with pytest.raises(StudyError) as caught:
        make_study({"data": {"period": "year"}, "derive": {"x": {"from": "y", "steps": [step]}}})
    assert said in caught.value.mend and "…" not in caught.value.mend


@pytest.mark.parametrize("written", ALSO_CALLED.values())
def test_every_step_that_is_offered_instead_can_be_written(written: str) -> None:
    step = tomllib.loads(f"step = {written}")["step"]
    make_study({"data": {"period": "year"}, "derive": {"x": {"from": "y", "steps": [step]}}})
