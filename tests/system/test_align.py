"""A study and a table make the system they describe, and say what happened on the way."""

from __future__ import annotations

from pathlib import Path
from typing import Any

import numpy as np
import pandas as pd
import pytest

from bayes_sys.errors import DesignError, InputError, NotBuiltError
from bayes_sys.study.read import make_study, read_study
from bayes_sys.system.align import build_system
from bayes_sys.system.system import System

YEARS = range(2001, 2011)


def long_table(years: Any = YEARS, units: tuple[str, ...] = ("alder", "birch", "cedar")) -> pd.DataFrame:
    """One row per unit and year: positive demand and tariff, heat of either sign."""
    rng = np.random.default_rng(5)
    rows = [
        {
            "unit": unit,
            "year": year,
            "demand": float(np.exp(3 + 0.1 * rng.standard_normal())),
            "tariff": float(np.exp(0.2 * rng.standard_normal())),
            "heat": float(rng.standard_normal()),
        }
        for unit in units
        for year in years
    ]
    return pd.DataFrame(rows)


def wide_table(periods: Any = YEARS, units: tuple[str, ...] = ("alder", "birch")) -> pd.DataFrame:
    """One row per period, columns UNIT_demand and UNIT_tariff, and one rate for all."""
    rng = np.random.default_rng(6)
    columns: dict[str, Any] = {"year": list(periods)}
    for unit in units:
        columns[f"{unit}_demand"] = np.exp(3 + 0.1 * rng.standard_normal(len(columns["year"])))
        columns[f"{unit}_tariff"] = np.exp(0.2 * rng.standard_normal(len(columns["year"])))
    columns["rate"] = rng.standard_normal(len(columns["year"]))
    return pd.DataFrame(columns)


def long_study(**changes: Any) -> dict[str, Any]:
    content: dict[str, Any] = {
        "data": {"period": "year", "unit": "unit"},
        "derive": {
            "log_demand": {"from": "demand", "steps": ["log"]},
            "log_tariff": {"from": "tariff", "steps": ["log"]},
        },
        "every_equation": {"response": "log_demand", "regressors": ["log_tariff", "heat"]},
    }
    for key, value in changes.items():
        content[key] = {**content.get(key, {}), **value} if isinstance(value, dict) else value
    return content


def build(content: dict[str, Any], table: pd.DataFrame) -> System:
    return build_system(make_study(content), table)


def refusal(content: dict[str, Any], table: pd.DataFrame) -> str:
    with pytest.raises(InputError) as caught:
        build(content, table)
    assert caught.value.exit_code == 2 and caught.value.mend, "a refusal says how to mend it"
    return str(caught.value)


def column(table: pd.DataFrame, unit: str, name: str) -> Any:
    return table[table["unit"] == unit].sort_values("year")[name].to_numpy()


def test_a_long_table_becomes_periods_by_equations() -> None:
    table = long_table()
    system = build(long_study(), table.sample(frac=1, random_state=1))
    assert sorted(system.names) == ["alder", "birch", "cedar"]
    assert system.responses.shape == (10, 3)
    assert system.n_coefficients == 9
    assert system.periods.labels == tuple(str(y) for y in YEARS)
    for i, equation in enumerate(system.equations):
        assert equation.regressors == ("intercept", "log_tariff", "heat")
        assert equation.columns == ("", "log_tariff", "heat")
        np.testing.assert_array_equal(system.responses[:, i], np.log(column(table, equation.name, "demand")))
        expected = [np.ones(10), np.log(column(table, equation.name, "tariff"))]
        np.testing.assert_array_equal(
            equation.design, np.column_stack([*expected, column(table, equation.name, "heat")])
        )
    assert system.factor.n_distinct == 7, "the intercept is held once, every unit has its own two regressors"


def test_units_come_in_the_order_the_study_gives_and_only_those() -> None:
    system = build(long_study(data={"units": ["cedar", "alder"]}), long_table())
    assert system.names == ("cedar", "alder")
    assert system.coefficient_labels[0] == "cedar.intercept"


def test_without_a_list_units_come_as_they_first_appear() -> None:
    assert build(long_study(), long_table(units=("cedar", "alder"))).names == ("cedar", "alder")


def test_overrides_change_one_equation_and_leave_the_others() -> None:
    system = build(long_study(equation={"birch": {"regressors": ["heat"], "intercept": False}}), long_table())
    by_name = {e.name: e for e in system.equations}
    assert by_name["birch"].regressors == ("heat",) and not by_name["birch"].has_intercept
    assert by_name["alder"].regressors == ("intercept", "log_tariff", "heat")


def test_a_wide_table_with_placeholders_makes_like_named_regressors() -> None:
    table = wide_table()
    content = {
        "data": {"period": "year"},
        "every_equation": {
            "response": "{equation}_demand",
            "regressors": [{"name": "tariff", "column": "{equation}_tariff"}, "rate"],
        },
        "equation": {"alder": {}, "birch": {}},
    }
    system = build(content, table)
    assert system.names == ("alder", "birch")
    assert system.coefficients[1] == ("alder", "tariff") and system.coefficients[4] == ("birch", "tariff")
    assert system.equations[1].columns == ("", "birch_tariff", "rate")
    np.testing.assert_array_equal(system.responses[:, 1], table["birch_demand"])
    np.testing.assert_array_equal(system.equations[1].design[:, 1], table["birch_tariff"])
    assert system.factor.n_distinct == 4, "intercept and rate are held once for both"


def test_a_wide_table_with_every_equation_written_out() -> None:
    table = wide_table()
    content = {
        "data": {"period": "year"},
        "equation": {
            "east": {"response": "alder_demand", "regressors": ["rate"]},
            "west": {"response": "birch_demand", "regressors": ["birch_tariff"], "intercept": False},
        },
    }
    system = build(content, table)
    assert system.names == ("east", "west")
    assert system.coefficient_labels == ("east.intercept", "east.rate", "west.birch_tariff")


def test_derived_columns_may_use_the_placeholder_in_wide_layout() -> None:
    table = wide_table()
    content = {
        "data": {"period": "year"},
        "derive": {"log_demand": {"from": "{equation}_demand", "steps": ["log"]}},
        "every_equation": {"response": "log_demand", "regressors": ["rate"]},
        "equation": {"alder": {}, "birch": {}},
    }
    system = build(content, table)
    np.testing.assert_array_equal(system.responses[:, 1], np.log(table["birch_demand"]))
    lineage = system.equations[1].lineage
    assert lineage is not None and lineage.source == "birch_demand"
    assert [step.name for step in lineage.steps] == ["log"]


def test_a_file_and_the_same_table_in_python_make_the_same_system(tmp_path: Path) -> None:
    table = long_table()
    table.to_csv(tmp_path / "water.csv", index=False)
    (tmp_path / "study.toml").write_text(
        """
title = "Water"
[data]
file = "water.csv"
period = "year"
unit = "unit"
[derive]
log_demand = { from = "demand", steps = ["log"] }
[every_equation]
response = "log_demand"
regressors = ["heat"]
""",
        encoding="utf-8",
    )
    study = read_study(tmp_path / "study.toml")
    from_file, from_table = build_system(study), build_system(study, table=table)
    assert from_file.title == "Water"
    np.testing.assert_array_equal(from_file.responses, from_table.responses)
    np.testing.assert_array_equal(from_file.factor.triangle, from_table.factor.triangle)
    assert from_file.metadata["data"] == "water.csv"


def test_a_raw_response_has_no_lineage() -> None:
    system = build(long_study(every_equation={"response": "demand", "regressors": ["heat"]}), long_table())
    assert system.equations[0].lineage is None


def test_window_and_exclusions_leave_the_periods_that_remain() -> None:
    system = build(long_study(data={"from": 2003, "to": 2009, "exclude": [2005]}), long_table())
    assert system.periods.labels == ("2003", "2004", "2006", "2007", "2008", "2009")
    assert any("2005" in note and "as the study asks" in note for note in system.notes)
    assert np.diff(system.periods.ordinals).tolist() == [1, 2, 1, 1, 1]


def test_a_first_period_left_out_is_noted_too() -> None:
    system = build(long_study(data={"exclude": [2001]}), long_table())
    assert system.n_periods == 9
    assert system.notes == ("Left out as the study asks: 2001.",)


def test_periods_without_rows_are_noted_as_a_gap() -> None:
    system = build(long_study(), long_table(years=[2001, 2002, 2003, 2006, 2007, 2008, 2009]))
    assert system.n_periods == 7
    assert any("2004, 2005" in note and "gap" in note for note in system.notes)


def test_an_undisturbed_sample_has_nothing_to_note() -> None:
    assert build(long_study(), long_table()).notes == ()


def test_periods_several_years_apart_are_noted() -> None:
    system = build(long_study(), long_table(years=range(1960, 2010, 5)))
    assert system.n_periods == 10
    assert any("5 years apart" in note for note in system.notes)


LAGGED = {
    "log_tariff_2": {"from": "tariff", "steps": ["log", {"lag": 2}]},
    "growth": {"from": "tariff", "steps": ["log", "diff"]},
    "mean_heat": {"from": "heat", "steps": [{"rolling_mean": 3}]},
}


@pytest.mark.parametrize(
    ("regressor", "n_lost"), [("log_tariff_2", 2), ("growth", 1), ("mean_heat", 2), ("log_tariff", 0)]
)
def test_periods_that_lags_use_up_are_dropped_with_a_note(regressor: str, n_lost: int) -> None:
    system = build(long_study(derive=LAGGED, every_equation={"regressors": [regressor]}), long_table())
    assert system.n_periods == 10 - n_lost
    assert system.periods.labels[0] == str(2001 + n_lost)
    assert len(system.notes) == (n_lost > 0)
    if n_lost:
        assert "left out" in system.notes[0] and "2001" in system.notes[0]


def test_lags_reach_back_before_the_window() -> None:
    table = long_table()
    content = long_study(data={"from": 2004}, derive=LAGGED, every_equation={"regressors": ["log_tariff_2"]})
    system = build(content, table)
    assert system.periods.labels[0] == "2004" and system.notes == ()
    expected = np.log(column(table, system.names[0], "tariff"))[1:-2]
    np.testing.assert_array_equal(system.equations[0].design[:, 1], expected)


def test_a_lag_in_one_equation_alone_is_a_missing_cell_with_the_mend() -> None:
    text = refusal(
        long_study(derive=LAGGED, equation={"birch": {"regressors": ["log_tariff_2"]}}), long_table()
    )
    assert "2001, “birch”, column “log_tariff_2”" in text and "from = 2003" in text


def test_a_lag_into_a_gap_is_a_missing_cell() -> None:
    years = [y for y in YEARS if y != 2005]
    content = long_study(derive=LAGGED, every_equation={"regressors": ["growth"], "response": "log_tariff"})
    text = refusal(content, long_table(years=years))
    assert "2006" in text and "exclude = [2006]" in text


def test_lags_that_use_up_every_period_are_refused() -> None:
    content = long_study(
        derive={"far": {"from": "heat", "steps": [{"lag": 10}]}}, every_equation={"regressors": ["far"]}
    )
    assert "no period is left" in refusal(content, long_table())


def test_a_missing_cell_names_period_equation_and_column_and_the_mend() -> None:
    table = long_table()
    table.loc[(table["unit"] == "birch") & (table["year"] == 2005), "heat"] = np.nan
    text = refusal(long_study(data={"exclude": [2003]}), table)
    assert "1 cell is missing" in text
    assert "2005, “birch”, column “heat”" in text
    assert "exclude = [2003, 2005]" in text


def test_following_the_mend_for_missing_cells_works() -> None:
    table = long_table()
    table.loc[(table["unit"] == "birch") & (table["year"] == 2005), "demand"] = np.nan
    assert build(long_study(data={"exclude": [2005]}), table).n_periods == 9


def test_missing_cells_at_the_start_or_end_are_mended_by_the_window() -> None:
    table = long_table()
    early = table.copy()
    early.loc[(early["unit"] == "alder") & (early["year"] < 2003), "demand"] = np.nan
    assert "from = 2003" in refusal(long_study(), early)
    late = table.copy()
    late.loc[(late["unit"] == "alder") & (late["year"] > 2008), "demand"] = np.nan
    assert "to = 2008" in refusal(long_study(), late)


def test_a_unit_without_a_row_in_one_period_has_missing_cells_there() -> None:
    table = long_table()
    text = refusal(long_study(), table[~((table["unit"] == "cedar") & (table["year"] == 2006))])
    assert "2006, “cedar”, column “log_demand”" in text and "3 cells are missing" in text


def test_many_missing_cells_are_listed_up_to_twelve_and_then_counted() -> None:
    table = long_table(years=range(1980, 2010))
    table.loc[(table["unit"] == "alder") & (table["year"] % 2 == 0), "heat"] = np.nan
    text = refusal(long_study(), table)
    assert "15 cells are missing" in text and "and 3 more" in text
    assert text.count("column “heat”") == 12


def test_quarters_are_quoted_in_the_mend() -> None:
    quarters = [f"{y}-Q{q}" for y in range(2015, 2019) for q in range(1, 5)]
    table = wide_table(quarters)
    table.loc[5, "birch_demand"] = np.nan
    content = {
        "data": {"period": "year"},
        "every_equation": {"response": "{equation}_demand", "regressors": ["rate"]},
        "equation": {"alder": {}, "birch": {}},
    }
    assert 'exclude = ["2016-Q2"]' in refusal(content, table)


def test_a_source_that_begins_late_is_reported_not_dropped() -> None:
    table = long_table()
    table.loc[table["year"] < 2004, "tariff"] = np.nan
    text = refusal(long_study(derive=LAGGED, every_equation={"regressors": ["log_tariff_2"]}), table)
    assert "cells are missing" in text and "from = 2006" in text


def test_an_infinite_value_in_the_data_is_named() -> None:
    table = long_table()
    table.loc[4, "heat"] = np.inf
    text = refusal(long_study(), table)
    assert "heat" in text and "row 5" in text and "finite" in text


def test_a_derived_value_beyond_all_numbers_is_named() -> None:
    table = long_table()
    table.loc[(table["unit"] == "birch") & (table["year"] == 2005), "heat"] = 800.0
    content = long_study(
        derive={"hot": {"from": "heat", "steps": ["exp"]}}, every_equation={"regressors": ["hot"]}
    )
    text = refusal(content, table)
    assert "birch" in text and "2005" in text and "heat" in text


def test_a_regressor_that_does_not_exist_gets_the_nearest_name() -> None:
    text = refusal(long_study(every_equation={"regressors": ["log_tarif"]}), long_table())
    assert "“log_tarif”" in text and "Did you mean “log_tariff”?" in text
    assert "every_equation.regressors[0]" in text


def test_a_response_that_does_not_exist_says_which_equation_asks_for_it() -> None:
    text = refusal(long_study(equation={"birch": {"response": "log_demnad"}}), long_table())
    assert "equation.birch.response" in text and "“log_demand”" in text


def test_a_column_of_text_is_refused_by_name() -> None:
    table = long_table().astype({"heat": object})
    table.loc[3, "heat"] = "warm"
    assert "heat" in refusal(long_study(), table)


def test_an_override_for_a_unit_that_is_not_there_gets_the_nearest_name() -> None:
    text = refusal(long_study(equation={"brich": {"intercept": False}}), long_table())
    assert "brich" in text and "birch" in text


def test_a_study_without_a_response_is_refused() -> None:
    content = long_study()
    content["every_equation"] = {"regressors": ["heat"]}
    assert "response" in refusal(content, long_table())


def test_a_dot_that_comes_with_a_units_name_is_refused() -> None:
    table = wide_table(units=("St. John", "birch"))
    content = {
        "data": {"period": "year"},
        "every_equation": {"response": "{equation}_demand", "regressors": ["{equation}_tariff"]},
        "equation": {"St. John": {}, "birch": {}},
    }
    assert "dot" in refusal(content, table)
    content["every_equation"]["regressors"] = [{"name": "tariff", "column": "{equation}_tariff"}]
    assert build(content, table).coefficient_labels[1] == "St. John.tariff"


def test_names_that_clash_once_written_out_are_refused() -> None:
    content = long_study(every_equation={"regressors": ["heat", {"name": "heat", "column": "tariff"}]})
    with pytest.raises(InputError, match="“heat” is listed twice"):
        build(content, long_table())


def test_nothing_on_the_right_hand_side_is_refused_but_an_intercept_alone_is_enough() -> None:
    assert "alder" in refusal(long_study(every_equation={"regressors": [], "intercept": False}), long_table())
    assert build(long_study(every_equation={"regressors": []}), long_table()).n_coefficients == 3


def test_a_derived_response_is_traced_to_the_column_of_the_data() -> None:
    content = long_study(
        derive={"growth": {"from": "log_demand", "steps": ["diff"]}}, every_equation={"response": "growth"}
    )
    system = build(content, long_table())
    lineage = system.equations[0].lineage
    assert lineage is not None and lineage.source == "demand"
    assert [step.name for step in lineage.steps] == ["log", "diff"]
    assert system.n_periods == 9 and len(system.notes) == 1


def test_the_design_is_checked() -> None:
    table = long_table()
    table["warmth"] = 3.0 * table["heat"] + 1.0
    with pytest.raises(DesignError, match="“warmth” is an exact combination of “heat” and the intercept"):
        build(long_study(every_equation={"regressors": ["heat", "warmth"]}), table)


def test_a_response_reached_through_the_placeholder_is_found_among_its_regressors() -> None:
    content = {
        "data": {"period": "year"},
        "every_equation": {"response": "{equation}_demand", "regressors": ["alder_demand"]},
        "equation": {"alder": {}, "birch": {}},
    }
    assert "own regressors" in refusal(content, wide_table())


def test_fewer_periods_than_coefficients_build() -> None:
    system = build(long_study(), long_table(years=[2001, 2002]))
    assert system.n_periods == 2 and system.n_coefficients == 9


def test_one_equation_builds() -> None:
    assert build(long_study(), long_table(units=("alder",))).n_equations == 1


def test_what_is_not_built_yet_is_refused() -> None:
    with pytest.raises(NotBuiltError, match="student_t"):
        build(long_study(errors={"family": "student_t"}), long_table())


@pytest.mark.parametrize(
    ("name", "factor"), [("heat", 1e155), ("demand", 1e300), ("tariff", 1e-200), ("heat", 1e-120)]
)
def test_a_column_too_large_or_too_small_to_square_is_named_with_the_scale_that_mends_it(
    name: str, factor: float
) -> None:
    table = long_table()
    table[name] *= factor
    content = long_study(every_equation={"response": "demand", "regressors": ["tariff", "heat"]})
    text = refusal(content, table)
    assert f"the column “{name}”" in text
    scale = float(text.split("scale = ")[1].split(" ")[0])
    content["derive"]["mended"] = {"from": name, "steps": [{"scale": scale}]}
    every = content["every_equation"]
    every["response"] = "mended" if name == "demand" else "demand"
    every["regressors"] = ["mended" if r == name else r for r in every["regressors"]]
    system = build(content, table)
    used = np.hstack([system.responses, *(e.design for e in system.equations)])
    assert np.abs(used).max() < 1e3


def test_zeros_are_no_small_numbers() -> None:
    table = long_table()
    table["heat"] = np.where(table["year"] > 2005, 1.0, 0.0)
    assert build(long_study(), table).n_equations == 3


def test_columns_at_both_ends_of_the_range_are_still_built() -> None:
    table = long_table()
    table["demand"] *= 1e67
    table["heat"] *= 1e-69
    content = long_study(every_equation={"response": "demand", "regressors": ["tariff", "heat"]})
    assert np.isfinite(build(content, table).factor.triangle).all()


def test_a_window_beyond_the_data_is_noted_and_one_within_is_not() -> None:
    beyond = build(long_study(data={"from": 1900, "to": 2100}), long_table()).notes
    assert [("from = 1900" in n and "2001" in n) or ("to = 2100" in n and "2010" in n) for n in beyond] == [
        True
    ] * 2
    assert build(long_study(data={"from": 2001, "to": 2010}), long_table()).notes == ()
    (left_out,) = build(long_study(data={"from": 2001, "exclude": [2001]}), long_table()).notes
    assert "Left out as the study asks" in left_out


def test_units_that_differ_in_case_are_suspected_where_their_cells_are_missing() -> None:
    table = long_table(units=("North", "south"))
    table.loc[(table["unit"] == "North") & (table["year"] > 2005), "unit"] = "north"
    assert "“North” and “north” differ only in case" in refusal(long_study(), table)
    assert "differ only" not in refusal(long_study(), long_table().drop(index=3))


def with_national(tmp_path: Path, table: pd.DataFrame, years: Any) -> str:
    """Return the refusal of a study with a shared table of those years, used raw and in logarithms."""
    rate = np.exp(np.random.default_rng(2).standard_normal(len(years)))
    pd.DataFrame({"year": list(years), "rate": rate}).to_csv(tmp_path / "national.csv", index=False)
    content = long_study(
        data={"shared": [{"file": "national.csv", "period": "year"}]},
        derive={"log_rate": {"from": "rate", "steps": ["log"]}},
        every_equation={"regressors": ["heat", "log_rate"]},
    )
    with pytest.raises(DesignError) as caught:
        build_system(
            make_study(
                {**content, "derive": {**long_study()["derive"], **content["derive"]}}, folder=tmp_path
            ),
            table,
        )
    return str(caught.value)


def test_a_shared_table_that_ends_too_early_is_named_and_each_cell_counted_once(tmp_path: Path) -> None:
    text = with_national(tmp_path, long_table(), range(2001, 2009))
    assert text.startswith("national.csv: 2 cells are missing")
    assert "2009, all equations, column “log_rate”" in text and "to = 2008" in text


def test_empty_cells_of_a_sheet_hint_at_formulas_without_a_saved_value(tmp_path: Path) -> None:
    table = long_table().astype({"heat": object})
    table.loc[3, "heat"] = "=1+1"
    table.to_excel(tmp_path / "water.xlsx", index=False)
    study = make_study(long_study(data={"file": "water.xlsx"}), folder=tmp_path)
    with pytest.raises(DesignError, match=r"1 cell is missing.*formula whose value was never saved"):
        build_system(study)


@pytest.mark.parametrize("name", ["north\nwest", "north\twest", "\x1b[31mnorth"])
def test_names_that_would_break_a_table_are_refused(name: str) -> None:
    assert "cannot be shown" in refusal(long_study(), long_table(units=("alder", name)))
    regressors = [{"name": name, "column": "heat"}]
    assert "cannot be shown" in refusal(long_study(every_equation={"regressors": regressors}), long_table())
