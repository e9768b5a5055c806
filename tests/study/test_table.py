"""The table: whatever its layout and file, it becomes one panel on a complete period grid."""

from __future__ import annotations

import time
from pathlib import Path
from typing import Any

import numpy as np
import pandas as pd
import pyarrow as pa
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from pyarrow import csv as arrow_csv
from pyarrow import parquet

from bayes_sys.errors import InputError, StudyError, TableError
from bayes_sys.study import files
from bayes_sys.study.panel import Panel
from bayes_sys.study.read import make_study
from bayes_sys.study.table import read_panel

# Invented: loaves sold and flour price in three towns.
LONG = pd.DataFrame(
    {
        "year": [2001, 2002, 2003, 2004] * 3,
        "town": ["birch"] * 4 + ["alder"] * 4 + ["St. John"] * 4,
        "bread": [3.0, 4.0, 5.0, 4.5, 7.0, 7.5, 8.0, 8.25, 1.0, 1.5, 1.25, 2.0],
        "price": [1.0, 1.1, 1.2, 1.1, 1.0, 0.9, 1.0, 1.3, 2.0, 2.1, 2.2, 2.4],
        "note": ["fine"] * 12,
    }
)
EQUATIONS = {"response": "bread", "regressors": ["price"]}


def study_of(folder: Path | str = ".", **parts: Any) -> Any:
    data = {"period": "year", "unit": "town", **parts.pop("data", {})}
    data = {k: v for k, v in data.items() if v is not None}
    return make_study({"data": data, "every_equation": EQUATIONS, **parts}, folder=folder)


def panel_of(table: pd.DataFrame, **parts: Any) -> Panel:
    return read_panel(study_of(**parts), table)


def panel_from(tmp_path: Path, text: str | bytes, **parts: Any) -> Panel:
    path = tmp_path / "bread.csv"
    path.write_bytes(text if isinstance(text, bytes) else text.encode())
    parts["data"] = {"file": "bread.csv", **parts.get("data", {})}
    return read_panel(study_of(tmp_path, **parts))


def same(a: Panel, b: Panel, columns: tuple[str, ...] = ("bread", "price")) -> None:
    assert a.periods.labels == b.periods.labels and np.array_equal(a.in_sample, b.in_sample)
    assert set(a.equations) == set(b.equations)
    for name in a.equations:
        for column in columns:
            np.testing.assert_array_equal(a.frames[name][column], b.frames[name][column])


def wide_of(table: pd.DataFrame) -> pd.DataFrame:
    wide = table.pivot(index="year", columns="town", values=["bread", "price"])
    wide.columns = pd.Index([f"{town}_{column}" for column, town in wide.columns])
    return wide.reset_index()


def test_each_unit_becomes_a_frame_in_the_order_units_first_appear() -> None:
    panel = panel_of(LONG)
    assert panel.equations == ("birch", "alder", "St. John")
    assert panel.periods.labels == ("2001", "2002", "2003", "2004")
    assert panel.frames["alder"]["bread"].tolist() == [7.0, 7.5, 8.0, 8.25]
    assert panel.frames["alder"].index.tolist() == panel.periods.ordinals.tolist()
    assert panel.frames["alder"]["bread"].dtype == np.float64
    assert panel.in_sample.all() and panel.source == "table given in Python"


def test_units_select_and_order() -> None:
    panel = panel_of(LONG, data={"units": ["St. John", "birch"]})
    assert panel.equations == ("St. John", "birch")
    assert panel.frames["St. John"]["price"].tolist() == [2.0, 2.1, 2.2, 2.4]


@settings(max_examples=25, deadline=None)
@given(st.permutations(range(12)))
def test_rows_in_any_order_give_the_same_panel(order: list[int]) -> None:
    same(panel_of(LONG), panel_of(LONG.iloc[order]))


@pytest.mark.parametrize("suffix", ["csv", "parquet", "xlsx"])
def test_every_kind_of_file_gives_the_same_panel(tmp_path: Path, suffix: str) -> None:
    table = LONG.copy()
    table.loc[5, "bread"] = np.nan
    path = tmp_path / f"bread.{suffix}"
    if suffix == "csv":
        table.to_csv(path, index=False)
    elif suffix == "parquet":
        table.to_parquet(path)
    else:
        table.to_excel(path, index=False, sheet_name="loaves")
    sheet = {"sheet": "loaves"} if suffix == "xlsx" else {}
    same(panel_of(table), read_panel(study_of(tmp_path, data={"file": path.name, **sheet})))


def test_csv_numbers_are_read_to_the_last_digit(tmp_path: Path) -> None:
    rng = np.random.default_rng(1)
    values = rng.standard_normal(200) * 10.0 ** rng.integers(-300, 300, 200)
    text = "year,town,bread,price\n" + "".join(
        f"{1900 + i},a,{v!r},{i}\n" for i, v in enumerate(values.tolist())
    )
    assert panel_from(tmp_path, text).frames["a"]["bread"].tolist() == values.tolist()


@pytest.mark.parametrize("mark", ["", "\ufeff"])
@pytest.mark.parametrize("ending", ["\n", "\r\n"])
def test_separators_decimals_missing_marks_spaces_and_quotes_are_understood(
    tmp_path: Path, mark: str, ending: str
) -> None:
    text = mark + '\n"year";town ;bread;price;note\n2001;"NA";1,5; -2e1 ;x\n\n 2002; NA;n/a;+3;"a;""b"\n'
    panel = panel_from(
        tmp_path,
        text.replace("\n", ending),
        data={"csv": {"separator": ";", "decimal": ",", "missing": ["", "n/a"]}},
    )
    frame = panel.frames["NA"]
    np.testing.assert_array_equal(frame["bread"], [1.5, np.nan])
    np.testing.assert_array_equal(frame["price"], [-20.0, 3.0])


def test_a_quoted_line_break_is_part_of_a_cell(tmp_path: Path) -> None:
    text = 'year,town,bread,price,note\n2001,a,1,2,"two\nlines"\n2002,a,x,3,\n'
    with pytest.raises(TableError, match=r"data row 2 \(line 4 of the file\)"):
        panel_from(tmp_path, text)


def test_long_and_wide_layouts_of_one_data_set_give_the_same_panel() -> None:
    derive = {
        "lp": {"from": "price", "steps": ["log", {"lag": 1}]},
        "z": {"from": "bread", "steps": ["standardise"]},
    }
    long = panel_of(LONG, derive=derive)
    wide_derive = {
        "bread": {"from": "{equation}_bread", "steps": [{"scale": 1.0}]},
        "lp": {"from": "{equation}_price", "steps": ["log", {"lag": 1}]},
        "z": {"from": "{equation}_bread", "steps": ["standardise"]},
    }
    equations = {"response": "bread", "regressors": [{"name": "price", "column": "{equation}_price"}]}
    wide = panel_of(wide_of(LONG), data={"unit": None}, derive=wide_derive, every_equation=equations)
    same(long, wide, ("bread", "lp", "z"))
    assert long.lineage["alder", "z"].steps == wide.lineage["alder", "z"].steps
    assert wide.lineage["alder", "lp"].source == "alder_price"


def test_wide_equations_are_read_off_the_columns_of_the_response() -> None:
    equations = {"response": "{equation}_bread", "regressors": [{"name": "p", "column": "{equation}_price"}]}
    panel = panel_of(wide_of(LONG), data={"unit": None}, every_equation=equations)
    assert set(panel.equations) == {"alder", "birch", "St. John"}
    assert panel.frames["alder"]["birch_price"].tolist() == [1.0, 1.1, 1.2, 1.1]


def test_a_name_that_gets_a_dot_from_the_equation_is_refused_with_the_mend() -> None:
    equations = {"response": "{equation}_bread", "regressors": ["{equation}_price"]}
    with pytest.raises(StudyError, match=r"“St\. John_price” has a dot.*name = \"heat\""):
        panel_of(wide_of(LONG), data={"unit": None}, every_equation=equations)


def test_a_shared_regressor_that_looks_like_a_response_is_no_equation() -> None:
    wide = wide_of(LONG).assign(national_bread=[1.0, 2.0, 3.0, 4.0])
    equations = {"response": "{equation}_bread", "regressors": ["national_bread"]}
    panel = panel_of(wide, data={"unit": None}, every_equation=equations)
    assert "national" not in panel.equations


def test_wide_equations_stand_in_their_own_tables_or_in_units() -> None:
    tables = {n: {"response": f"{n}_bread", "regressors": [f"{n}_price"]} for n in ("birch", "alder")}
    panel = panel_of(wide_of(LONG), data={"unit": None}, every_equation={}, equation=tables)
    assert panel.equations == ("birch", "alder")
    named = {"response": "{equation}_bread", "regressors": ["{equation}_price"]}
    panel = panel_of(wide_of(LONG), data={"unit": None, "units": ["alder"]}, every_equation=named)
    assert panel.equations == ("alder",)


def test_one_table_of_its_own_leaves_the_other_wide_equations_in() -> None:
    equations = {"response": "{equation}_bread", "regressors": [{"name": "p", "column": "{equation}_price"}]}
    alone = {"birch": {"regressors": []}}
    panel = panel_of(wide_of(LONG), data={"unit": None}, every_equation=equations, equation=alone)
    assert set(panel.equations) == {"alder", "birch", "St. John"}


def test_a_wide_equation_outside_the_pattern_joins_by_a_response_of_its_own() -> None:
    wide = wide_of(LONG).assign(all_loaves=[1.0, 2.0, 3.0, 4.0])
    equations = {"response": "{equation}_bread", "regressors": [{"name": "p", "column": "{equation}_price"}]}
    whole = {"whole": {"response": "all_loaves", "regressors": ["alder_price"]}}
    panel = panel_of(wide, data={"unit": None}, every_equation=equations, equation=whole)
    assert panel.equations[-1] == "whole"
    assert len(panel.equations) == 4


def test_a_misspelt_wide_equation_is_named_with_the_nearest() -> None:
    equations = {"response": "{equation}_bread", "regressors": [{"name": "p", "column": "{equation}_price"}]}
    with pytest.raises(StudyError, match=r"“brich”.*“birch”"):
        panel_of(
            wide_of(LONG),
            data={"unit": None},
            every_equation=equations,
            equation={"brich": {"intercept": False}},
        )


def test_a_placeholder_works_in_the_long_layout_too() -> None:
    table = LONG.assign(**{"birch_heat": 1.0, "alder_heat": 2.0, "St. John_heat": 3.0})
    equations = {"response": "bread", "regressors": [{"name": "heat", "column": "h"}]}
    derive = {"h": {"from": "{equation}_heat", "steps": [{"plus": "{equation}_heat"}]}}
    panel = panel_of(table, derive=derive, every_equation=equations)
    assert [panel.frames[e]["h"].iloc[0] for e in panel.equations] == [2.0, 4.0, 6.0]


def test_gaps_and_unequal_spans_become_empty_periods_outside_the_sample() -> None:
    table = LONG[(LONG.year != 2003) & ~((LONG.town == "birch") & (LONG.year == 2001))]
    panel = panel_of(pd.concat([table, table[table.year == 2004].assign(year=2005)]))
    assert panel.periods.labels == ("2001", "2002", "2003", "2004", "2005")
    assert panel.in_sample.tolist() == [True, True, False, True, True]
    assert np.isnan(panel.frames["birch"]["bread"].iloc[0])
    assert panel.frames["alder"].loc[2003].isna().all()


def test_the_window_and_excluded_periods_leave_the_grid_whole() -> None:
    panel = panel_of(LONG, data={"from": 2002, "to": "2004", "exclude": [2003]})
    assert len(panel.periods) == 4
    assert panel.in_sample.tolist() == [False, True, False, True]


def test_named_index_levels_are_columns() -> None:
    same(panel_of(LONG), panel_of(LONG.set_index(["town", "year"])))


def test_numbered_units_are_named_by_their_numbers() -> None:
    table = LONG.assign(town=LONG.town.map({"birch": 7, "alder": 3, "St. John": 5}))
    panel = panel_of(table, data={"units": [3, 7]})
    assert panel.equations == ("3", "7")


def test_categories_booleans_decimals_and_nullable_numbers_are_numbers() -> None:
    table = LONG.assign(
        price=LONG.price.astype("Float64"),
        town=LONG.town.astype("category"),
        bread=(LONG.bread > 3),
        cat=LONG.year.astype("category"),
    )
    table.loc[0, "price"] = pd.NA
    equations = {"response": "bread", "regressors": ["price", "cat"]}
    panel = panel_of(table, every_equation=equations)
    assert np.isnan(panel.frames["birch"]["price"].iloc[0])
    assert panel.frames["birch"]["bread"].tolist() == [0.0, 1.0, 1.0, 1.0]
    assert panel.frames["birch"]["cat"].tolist() == [2001.0, 2002.0, 2003.0, 2004.0]


def test_the_given_table_is_left_alone() -> None:
    before = LONG.copy()
    panel = panel_of(LONG)
    panel.frames["alder"].loc[:, "bread"] = 0.0
    pd.testing.assert_frame_equal(LONG, before)


# Shared tables


def shared_panel(tmp_path: Path, text: str, **parts: Any) -> Panel:
    (tmp_path / "national.csv").write_text(text, encoding="utf-8")
    shared = [{"file": "national.csv", "period": "jahr"}]
    equations = {"response": "bread", "regressors": ["price", "index"]}
    parts = {"every_equation": equations, **parts}
    return read_panel(study_of(tmp_path, data={"shared": shared}, **parts), LONG)


def test_a_shared_table_gives_every_unit_the_same_column_by_period(tmp_path: Path) -> None:
    panel = shared_panel(tmp_path, "jahr,index\n2004,40\n2002,20\n2001,10\n2009,90\n")
    for name in panel.equations:
        np.testing.assert_array_equal(panel.frames[name]["index"], [10.0, 20.0, np.nan, 40.0])
    assert panel.in_sample.all()


def test_a_lag_reaches_back_into_a_shared_table_that_begins_earlier(tmp_path: Path) -> None:
    derive = {"index_1": {"from": "index", "steps": [{"lag": 1}]}}
    text = "jahr,index\n1998,0\n1999,1\n2000,5\n2001,10\n2002,20\n2003,30\n2004,40\n"
    panel = shared_panel(tmp_path, text, derive=derive)
    assert panel.periods.labels[0] == "2000" and panel.in_sample.tolist() == [False, True, True, True, True]
    assert panel.frames["alder"]["index_1"][panel.in_sample].tolist() == [5.0, 10.0, 20.0, 30.0]


@pytest.mark.parametrize(
    ("text", "said"),
    [
        ("jahr,index,price\n2001,1,2\n", "“price” of national.csv exists in another table"),
        ("jahr,index\n2001,1\n2001,2\n", "2001 stands twice: data row 1 (line 2 of the file) and data row 2"),
        ("year,index\n2001,1\n", "no column “jahr” in national.csv"),
        ("jahr,index\n1901,1\n", "none of its periods"),
        ("jahr,index\nx,1\n", "“x” is not a period"),
        ("jahr,index\n2001,one\n", "found “one”, expected a number"),
        ("jahr,index\n", "no rows"),
        ("jahr,idx\n2001,1\n", "no column “index”"),
    ],
)
def test_a_faulty_shared_table_is_refused(tmp_path: Path, text: str, said: str) -> None:
    with pytest.raises(InputError) as caught:
        shared_panel(tmp_path, text)
    assert said in str(caught.value)


# Bad input


@pytest.mark.parametrize(
    ("text", "parts", "said"),
    [
        ("", {}, ["bread.csv", "empty"]),
        ("year,town,bread,price\n", {}, ["no rows"]),
        ("year,town,bread,price", {}, ["no rows"]),
        (b"PK\x03\x04year,town", {}, ["looks like xlsx"]),
        (b"year,town\x00\x01", {}, ["no text file"]),
        ("year town bread price\n2001 a 1 2\n", {}, ['separator = " "']),
        ("year|town|bread|price\n2001|a|1|2\n", {}, ['separator = "|"']),
        ("year,town,bread,price\n2001,a,1,2\n2002\n", {}, ["line 3", "1 cell, expected 4"]),
        ("year;town;bread;price\n2001;a;1,5;2\n", {}, ["single column", 'separator = ";"']),
        ("year\ttown\tbread\n2001\ta\t1\n", {}, ['separator = "\\t"']),
        ("year,town,bread\n2001,a,1\n", {"data": {"csv": {"separator": ";"}}}, ['separator = ","']),
        ("year,town,bread,bread\n2001,a,1,2\n", {}, ["two columns are called “bread” (columns 3 and 4)"]),
        ("yaer,town,bread,price\n2001,a,1,2\n", {}, ["data.period", "no column “year”", "“yaer”"]),
        ("year,twon,bread,price\n2001,a,1,2\n", {}, ["data.unit", "no column “town”", "“twon”"]),
        ("year,town,bread,pricee\n2001,a,1,2\n", {}, ["every_equation.regressors[0]", "“price”", "“pricee”"]),
        ("year,town,braed,price\n2001,a,1,2\n", {}, ["every_equation.response", "“bread”", "“braed”"]),
        (
            "year,town,bread,price\n2001,a,1,2\n2002,a,one,2\n",
            {},
            ["bread.csv, column “bread”, data row 2 (line 3 of the file)", "“one”", "expected a number"],
        ),
        ("year,town,bread,price\n2001,a,-,2\n", {}, ["“-”", 'missing = ["", "-"]']),
        ('year,town,bread,price\n2001,a,"1,5",2\n', {}, ["“1,5”", 'decimal = ","']),
        ('year,town,bread,price\n2001,a,"1,234.5",2\n', {}, ["marks for thousands"]),
        (
            "year;town;bread;price\n2001;a;1.5;2\n",
            {"data": {"csv": {"separator": ";", "decimal": ","}}},
            ["“1.5”", "decimal"],
        ),
        ("year,town,bread,price\n2001,a,inf,2\n", {}, ["data row 1", "inf", "finite"]),
        ("year,town,bread,price\n2001,a,-Infinity,2\n", {}, ["data row 1", "-inf", "finite"]),
        ("year,town,bread,price\n2001,a,1e999,2\n", {}, ["data row 1", "finite"]),
        ("year,town,bread,price\n2001,a,0x10,2\n", {}, ["“0x10”"]),
        ("year,town,bread,price\n2001,a,1_000,2\n", {}, ["“1_000”"]),
        (
            "year,town,bread,price\n2001,a,1,2\n2001,b,1,2\n\n2001,a,3,2\n",
            {},
            ["a, 2001 stands twice", "data row 1 (line 2 of the file) and data row 3 (line 5 of the file)"],
        ),
        ("year,town,bread,price\n2001,a,1,2\n,a,1,2\n", {}, ["column “year”, data row 2", "no period"]),
        ("year,town,bread,price\n2001,a,1,2\n2002,,1,2\n", {}, ["column “town”, data row 2", "no unit"]),
        ("year,town,bread,price\n2001,a,1,2\n2002.5,a,1,2\n", {}, ["data row 2", "not a period"]),
        ("year,town,bread,price\n2001,a,1,2\nsoon,a,1,2\n", {}, ["data row 2", "“soon”"]),
        (
            "year,town,bread,price\n1,a,1,2\n50001,a,1,2\n99990,a,1,2\n",
            {},
            ["column “year”", "record numbers"],
        ),
        ("year,town,bread,price\n2001,a,1\n", {}, ["bread.csv, line 2", "3 cells, expected 4"]),
        (
            "year,town,bread,price\n2001,a,1,2\n2002,a,1,2,3\n",
            {},
            ["bread.csv, line 3", "5 cells, expected 4"],
        ),
        (b"year,town,bread,price\n2001,M\xfchlau,1,2\n", {}, ["bread.csv, line 2", "not UTF-8"]),
        (b"year,town,br\xf6t,price\n2001,a,1,2\n", {}, ["bread.csv, line 1", "not UTF-8"]),
        ("year,town,bread,price\n2001,a,1,2\n".encode("utf-16"), {}, ["line 1", "not UTF-8"]),
        (
            "year,town,bread,price\n2001,alder,1,2\n",
            {"data": {"units": ["aldr"]}},
            ["data.units[0]", "no unit “aldr”", "“alder”"],
        ),
        (
            "year,town,bread,price\n2001,alder,1,2\n",
            {"equation": {"aldr": {}}},
            ["equation.aldr", "no unit “aldr”", "“alder”"],
        ),
        ("year,town,bread,price\n2001,a,1,2\n", {"data": {"from": 2005}}, ["leave no period", "2001"]),
        ("year,town,bread,price\n2001,a,1,2\n", {"data": {"from": "soon"}}, ["data.from", "“soon”"]),
        ("year,town,bread,price\n2001,a,1,2\n", {"data": {"exclude": [1901]}}, ["data.exclude[0]", "1901"]),
        ("year,town,bread,price\n2001,a,1,2\n", {"data": {"sheet": "x"}}, ["“sheet” is for xlsx"]),
        (
            "year,town,bread,price\n2001,a,1,2\n",
            {"every_equation": {"response": "bread", "regressors": ["note"]}},
            ["no column “note”"],
        ),
        (
            "year,town,bread,price\n2001,a,1,2\n",
            {"every_equation": {"response": "bread", "regressors": ["{region}_x"]}},
            ["only placeholder is “{equation}”"],
        ),
        (
            "year,town,bread,price\n2001,a,1,2\n",
            {"every_equation": {"regressors": ["price"]}},
            ["no response"],
        ),
        (
            "year,town,bread,price\n2001,a,1,2\n",
            {"every_equation": {"response": "bread", "intercept": False}},
            ["neither regressors nor a constant"],
        ),
        (
            "year,town,bread,price\n2001,a,1,2\n",
            {"every_equation": {"regressors": ["price", "bread"]}, "equation": {"a": {"response": "bread"}}},
            ["every_equation.regressors[1]", "own regressors"],
        ),
    ],
)
def test_bad_input_is_one_message_with_its_place(
    tmp_path: Path, text: str | bytes, parts: dict[str, Any], said: list[str]
) -> None:
    with pytest.raises(InputError) as caught:
        panel_from(tmp_path, text, **parts)
    message = str(caught.value)
    for piece in said:
        assert piece in message, message
    assert "\n" not in message


def test_text_in_a_column_nobody_uses_is_no_fault(tmp_path: Path) -> None:
    panel = panel_from(tmp_path, "year,town,bread,price,note,odd\n2001,a,1,2,fine,inf\n2002,a,1,2,,3\n")
    assert "note" not in panel.frames["a"] and "odd" not in panel.frames["a"]


def test_rows_of_units_that_are_not_selected_are_not_read(tmp_path: Path) -> None:
    text = "year,town,bread,price\nsoon,b,bad,2\n2001,a,1,2\n2002,a,{},2\n"
    data = {"units": ["a"]}
    assert len(panel_from(tmp_path, text.format(3), data=data).periods) == 2
    with pytest.raises(TableError, match=r"data row 3 \(line 4"):
        panel_from(tmp_path, text.format("x"), data=data)


def test_missing_and_unknown_files_are_refused(tmp_path: Path) -> None:
    (tmp_path / "bread.csv").write_text("x", encoding="utf-8")
    (tmp_path / "bread.xls").write_text("x", encoding="utf-8")
    (tmp_path / "folder").mkdir()
    for name, said in (
        ("braed.csv", "bread.csv"),
        ("b" * 300 + ".csv", "cannot be read"),
        ("bread.xls", "ending in"),
        ("folder", "folder"),
    ):
        with pytest.raises(TableError, match=said):
            read_panel(study_of(tmp_path, data={"file": name}))
    with pytest.raises(StudyError, match="no data file"):
        read_panel(study_of(tmp_path))


@pytest.mark.parametrize("suffix", ["parquet", "xlsx"])
def test_damaged_files_are_refused(tmp_path: Path, suffix: str) -> None:
    (tmp_path / f"bread.{suffix}").write_bytes(b"no such thing")
    with pytest.raises(TableError, match=f"cannot be read as {suffix}.*csv in UTF-8"):
        read_panel(study_of(tmp_path, data={"file": f"bread.{suffix}"}))


def test_a_sheet_that_does_not_exist_and_a_bad_cell_of_a_sheet_are_named(tmp_path: Path) -> None:
    table = LONG.astype({"bread": object})
    table.loc[2, "bread"] = "many"
    table.to_excel(tmp_path / "bread.xlsx", index=False, sheet_name="loaves")
    with pytest.raises(TableError, match=r"no sheet “loafs”.*“loaves”"):
        read_panel(study_of(tmp_path, data={"file": "bread.xlsx", "sheet": "loafs"}))
    with pytest.raises(TableError, match=r"column “bread”, data row 3 \(line 4 of the file\).*“many”"):
        read_panel(study_of(tmp_path, data={"file": "bread.xlsx"}))


def test_dates_of_sheets_and_parquet_are_periods(tmp_path: Path) -> None:
    table = LONG.assign(year=pd.to_datetime(LONG.year.astype(str) + "-12-31"))
    table.to_parquet(tmp_path / "bread.parquet")
    table.to_excel(tmp_path / "bread.xlsx", index=False)
    for name in ("bread.parquet", "bread.xlsx"):
        panel = read_panel(study_of(tmp_path, data={"file": name}))
        assert (panel.periods.kind, panel.periods.labels[0]) == ("year", "2001")


def test_a_date_is_no_regressor() -> None:
    table = LONG.assign(price=pd.to_datetime("2024-01-01"))
    with pytest.raises(TableError, match=r"“price”.*A date cannot be"):
        panel_of(table)


def test_wide_layout_without_a_word_on_equations_is_refused() -> None:
    with pytest.raises(StudyError, match="nothing says which equations"):
        panel_of(wide_of(LONG), data={"unit": None})


def test_wide_layout_of_long_data_hints_at_the_unit_column() -> None:
    equations = {"a": {"response": "bread", "regressors": ["price"]}}
    with pytest.raises(TableError, match=r"2001 stands twice.*add unit ="):
        panel_of(LONG, data={"unit": None}, equation=equations)


def test_wide_responses_that_no_column_fits_are_refused() -> None:
    with pytest.raises(StudyError, match="no column fits"):
        panel_of(wide_of(LONG), data={"unit": None}, every_equation={"response": "{equation}_loaves"})


def test_something_that_is_no_frame_is_refused() -> None:
    with pytest.raises(TableError, match=r"expected a pandas\.DataFrame"):
        read_panel(study_of(), [1, 2])  # type: ignore[arg-type]


def test_too_large_a_file_and_too_many_units_are_refused(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.setattr(files, "LARGEST_FILE", 10)
    with pytest.raises(TableError, match="GB"):
        panel_from(tmp_path, "year,town,bread,price\n2001,a,1,2\n")
    table = pd.DataFrame({"year": 2001, "town": np.arange(100_001), "bread": 1.0, "price": 1.0})
    with pytest.raises(TableError, match="100,001 different units"):
        panel_of(table)


def test_a_million_rows_are_read_in_seconds(tmp_path: Path) -> None:
    n = 1_000_000
    rng = np.random.default_rng(1)
    table = pd.DataFrame(
        {"year": np.tile(np.arange(n // 10), 10), "town": np.repeat(list("abcdefghij"), n // 10)}
    )
    table["bread"], table["price"] = rng.random(n), rng.random(n)
    arrow_csv.write_csv(pa.Table.from_pandas(table), tmp_path / "bread.csv")
    start = time.process_time()
    panel = read_panel(study_of(tmp_path, data={"file": "bread.csv"}))
    # About 2 s of processor time where this was written; a reading row by row takes more than a minute.
    assert time.process_time() - start < 20
    np.testing.assert_array_equal(panel.frames["d"]["bread"], table["bread"][3 * n // 10 : 4 * n // 10])


@pytest.mark.parametrize("registered", [False, True])
@pytest.mark.parametrize(
    ("freq", "first", "kind"), [("M", "2018-02", "month"), ("Q", "2018-Q1", "quarter"), ("Y", "2018", "year")]
)
def test_pandas_periods_of_a_parquet_file_stay_periods(
    tmp_path: Path, registered: bool, freq: str, first: str, kind: str
) -> None:
    months = pd.period_range("2018-02", periods=4, freq=freq)
    table = LONG.assign(year=list(months) * 3)
    written = pa.Table.from_pandas(table)
    place = written.schema.get_field_index("year")
    if not registered:
        # As another process sees the file before pandas has registered its types.
        mark = {"ARROW:extension:name": "pandas.period", "ARROW:extension:metadata": f'{{"freq": "{freq}"}}'}
        plain = pa.field("year", pa.int64(), metadata=mark)
        written = pa.table(written.columns, names=written.column_names).set_column(
            place, plain, written.column(place).cast(pa.int64())
        )
    parquet.write_table(written, tmp_path / "bread.parquet")
    panel = read_panel(study_of(tmp_path, data={"file": "bread.parquet"}))
    assert (panel.periods.kind, panel.periods.labels[0], len(panel.periods)) == (kind, first, 4)
    same(panel, panel_of(table))


def test_pandas_periods_of_a_table_given_in_python_are_periods() -> None:
    months = pd.period_range("2018-02", periods=4, freq="M")
    panel = panel_of(LONG.assign(year=list(months) * 3))
    assert panel.periods.labels == ("2018-02", "2018-03", "2018-04", "2018-05")


@pytest.mark.parametrize(
    ("cell", "decimal", "plain"),
    [("50,970", ".", "50970"), ("-1,234", ".", "-1234"), ("50.970", ",", "50970")],
)
def test_a_mark_that_may_stand_for_thousands_is_not_taken_for_a_decimal_sign_only(
    tmp_path: Path, cell: str, decimal: str, plain: str
) -> None:
    text = f"year;town;bread;price\n2001;a;{cell};2\n"
    with pytest.raises(TableError, match=f"If it marks thousands, write {plain} instead"):
        panel_from(tmp_path, text, data={"csv": {"separator": ";", "decimal": decimal}})


@pytest.mark.parametrize("cell", ["0,970", "50,97", "50,9701"])
def test_a_comma_that_cannot_mark_thousands_is_a_decimal_sign(tmp_path: Path, cell: str) -> None:
    with pytest.raises(TableError) as caught:
        panel_from(tmp_path, f"year;town;bread;price\n2001;a;{cell};2\n", data={"csv": {"separator": ";"}})
    assert "decimal sign" in caught.value.mend and "thousands" not in caught.value.mend


def test_data_missing_beside_a_run_name_the_copy_and_no_table_of_the_run(tmp_path: Path) -> None:
    (tmp_path / "manifest.json").write_text("{}")
    (tmp_path / "scales.csv").write_text("a\n1\n")
    with pytest.raises(TableError) as caught:
        read_panel(study_of(tmp_path, data={"file": "sales.csv"}))
    assert "its study a copy" in caught.value.mend and "scales.csv" not in caught.value.mend


def test_a_title_above_the_header_of_a_sheet_is_explained_and_the_other_sheets_named(tmp_path: Path) -> None:
    with pd.ExcelWriter(tmp_path / "bread.xlsx") as book:
        LONG.to_excel(book, sheet_name="loaves", startrow=1, index=False)
        LONG.to_excel(book, sheet_name="rolls", index=False)
    with pytest.raises(StudyError, match=r"first row of the sheet.*“loaves”, “rolls”"):
        read_panel(study_of(tmp_path, data={"file": "bread.xlsx"}))


@pytest.mark.parametrize("text", ["2001,a,1,2\n2002,a,2,3\n", "2001,a,2,2\n2002,a,2,3\n"])
def test_a_csv_without_a_header_is_told_from_one_with_another_name(tmp_path: Path, text: str) -> None:
    with pytest.raises(InputError, match=r"first line must hold the names.*“2001” looks like a value"):
        panel_from(tmp_path, text)


def test_a_file_in_another_encoding_is_to_be_saved_as_utf_8(tmp_path: Path) -> None:
    with pytest.raises(TableError, match=r"line 2: .*Save it as csv in UTF-8"):
        panel_from(tmp_path, "year,town,bread,price\n2001,Å,1,2\n".encode("latin-1"))
