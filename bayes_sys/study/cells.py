"""From cells to numbers, unit names and periods, with the place of whatever does not fit."""

from __future__ import annotations

import datetime as dt
import re
from decimal import Decimal
from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import NDArray

from bayes_sys.errors import TableError
from bayes_sys.study.files import RawTable
from bayes_sys.study.spec_base import show

if TYPE_CHECKING:
    import pandas as pd

# Marks that tables commonly use for “not observed” (common practice).
_LIKE_MISSING = {
    "-",
    "--",
    "–",
    "—",
    ".",
    "..",
    "...",
    "…",
    ":",
    "*",
    "?",
    "x",
    "n/a",
    "na",
    "#n/a",
    "n.a.",
    "nan",
}
_LIKE_MISSING |= {"none", "null", "nil", "missing", "unknown", "c", "s"}
_NUMBER = re.compile(r"[+-]?(\d+(\.\d*)?|\.\d+)([eE][+-]?\d+)?")


def numbers(table: RawTable, column: str) -> NDArray[np.float64]:
    """Return a column as numbers, NaN where nothing was observed.

    Raises
    ------
    TableError
        If a cell holds text, or an infinite value; names column, row and cell.
    """
    import pandas as pd

    series = table.frame[column]
    dtype: Any = series.dtype
    if isinstance(dtype, pd.CategoricalDtype):
        series = series.astype(dtype.categories.dtype)
        dtype = series.dtype
    if pd.api.types.is_bool_dtype(dtype) or pd.api.types.is_numeric_dtype(dtype):
        if pd.api.types.is_complex_dtype(dtype):
            raise _cell_fault(table, column, 0, series.iloc[0])
        values = series.to_numpy(dtype=np.float64, na_value=np.nan)
    elif pd.api.types.is_datetime64_any_dtype(dtype):
        raise _cell_fault(table, column, 0, series.iloc[0])
    elif pd.api.types.is_object_dtype(dtype):
        values = _from_objects(table, column, series)
    else:
        values = _from_text(table, column, series)
    infinite = np.flatnonzero(np.isinf(values))
    if infinite.size:
        raise TableError(
            f"the value is {values[infinite[0]]}; values must be finite.",
            where=_place(table, column, int(infinite[0])),
            mend="Leave the cell empty if nothing was observed.",
        )
    return values


def _from_text(table: RawTable, column: str, series: pd.Series[Any]) -> NDArray[np.float64]:
    import pyarrow as pa
    import pyarrow.compute as pc

    options = table.options
    kind = pa.large_string()
    text: Any = pa.array(series, type=kind, from_pandas=True)
    text = text if isinstance(text, pa.ChunkedArray) else pa.chunked_array([text])
    text = pc.utf8_trim_whitespace(text)
    missing = pc.is_in(text, value_set=pa.array([m.strip() for m in options.missing], type=kind))
    text = pc.if_else(missing, pa.scalar(None, kind), text)
    if options.decimal == ",":
        # A point would be a thousands mark here: refuse it instead of reading 1.234 as 1.234.
        text = pc.replace_substring(pc.replace_substring(text, ".", "?"), ",", ".")
    try:
        values = pc.cast(text, pa.float64())
        return np.asarray(values.to_numpy(zero_copy_only=False), dtype=np.float64)
    except pa.ArrowInvalid:
        return _one_by_one(table, column, series, text.to_pylist())


def _one_by_one(
    table: RawTable, column: str, series: pd.Series[Any], texts: list[str | None]
) -> NDArray[np.float64]:
    values = np.full(len(texts), np.nan)
    for i, text in enumerate(texts):
        if text is None:
            continue
        if _NUMBER.fullmatch(text) or text.lower().lstrip("+-") in ("inf", "infinity"):
            values[i] = float(text)
        else:
            raise _cell_fault(table, column, i, series.iloc[i])
    return values


def _from_objects(table: RawTable, column: str, series: pd.Series[Any]) -> NDArray[np.float64]:
    import pandas as pd

    values = np.full(len(series), np.nan)
    for i, cell in enumerate(series.array):
        if isinstance(cell, str):
            if cell.strip() not in table.options.missing:
                values[i] = _number_in(table, column, i, cell.strip())
        elif isinstance(cell, (bool, int, float, Decimal, np.number, np.bool_)):
            values[i] = float(cell)
        elif not pd.isna(cell):
            raise _cell_fault(table, column, i, cell)
    return values


def _number_in(table: RawTable, column: str, row: int, text: str) -> float:
    plain = text
    if table.options.decimal == ",":
        plain = text.replace(".", "?").replace(",", ".")
    if not _NUMBER.fullmatch(plain):
        raise _cell_fault(table, column, row, text)
    return float(plain)


def _place(table: RawTable, column: str, row: int) -> str:
    return f"{table.name}, column “{column}”, {table.row(row)}"


def _cell_fault(table: RawTable, column: str, row: int, cell: object) -> TableError:
    mend = "Mend the cell, or leave it empty if nothing was observed."
    if isinstance(cell, str):
        text = cell.strip()
        if table.options.decimal == "." and re.fullmatch(r"[+-]?\d+,\d+", text):
            mend = 'If the comma is a decimal sign, add csv = { decimal = "," } under [data].'
            if re.fullmatch(r"[+-]?[1-9]\d{0,2},\d{3}", text):
                mend += f" If it marks thousands, write {text.replace(',', '')} instead."
        elif table.options.decimal == "," and re.fullmatch(r"[+-]?\d+\.\d+", text):
            mend = 'The study says decimal = ","; if the point is the decimal sign, take that out.'
            if re.fullmatch(r"[+-]?[1-9]\d{0,2}\.\d{3}", text):
                mend += f" If it marks thousands, write {text.replace('.', '')} instead."
        elif re.fullmatch(r"[+-]?\d{1,3}([ ,.'’]\d{3})+([.,]\d+)?", text):
            mend = "Write numbers without marks for thousands."
        elif text.lower() in _LIKE_MISSING:
            mend += f' If “{text}” means “not observed”, add it to csv = {{ missing = ["", "{text}"] }}.'
    elif isinstance(cell, (dt.date, np.datetime64)):
        mend = "A date cannot be a regressor or a response."
    return TableError(f"found {show(cell)}, expected a number.", where=_place(table, column, row), mend=mend)


def unit_names(table: RawTable, column: str) -> tuple[NDArray[np.int64], list[str]]:
    """Return the code of each row's unit, and the units' names in the order they first appear.

    Raises
    ------
    TableError
        If a row has no unit.
    """
    import pandas as pd

    codes, found = pd.factorize(table.frame[column])
    texts = [_tidy(v) for v in found]
    for row in np.flatnonzero(codes < 0)[:1]:
        raise TableError("this row has no unit.", where=_place(table, column, int(row)), mend="Fill it in.")
    for code in [i for i, t in enumerate(texts) if not t][:1]:
        row = int(np.flatnonzero(codes == code)[0])
        raise TableError("this row has no unit.", where=_place(table, column, row), mend="Fill it in.")
    # 1 and 1.0, “ alder” and “alder” are one unit.
    names = list(dict.fromkeys(texts))
    position = {n: i for i, n in enumerate(names)}
    lookup = np.array([position[t] for t in texts], dtype=np.int64)
    return lookup[codes], names


def _tidy(value: object) -> str:
    if isinstance(value, (float, np.floating)) and float(value).is_integer():
        return str(int(value))
    return str(value).strip()


def period_values(
    table: RawTable, column: str, rows: NDArray[np.int64]
) -> tuple[NDArray[np.int64], list[Any]]:
    """Return the code of the period of each of some rows, and the distinct periods as found.

    Raises
    ------
    TableError
        If a row has no period.
    """
    import pandas as pd

    codes, found = pd.factorize(table.frame[column].iloc[rows])
    values = [v.strip() if isinstance(v, str) else v for v in found]
    empty = {i for i, v in enumerate(values) if v == ""}
    bad = np.flatnonzero((codes < 0) | np.isin(codes, list(empty)))
    if bad.size:
        row = int(rows[bad[0]])
        raise TableError("this row has no period.", where=_place(table, column, row), mend="Fill it in.")
    return np.asarray(codes, dtype=np.int64), values
