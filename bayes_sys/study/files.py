"""Read a data file into a frame: csv, parquet, xlsx; names checked, cells left as they are."""

from __future__ import annotations

import csv
import re
import warnings
from dataclasses import dataclass, field, replace
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import NDArray

from bayes_sys.errors import TableError, nearest
from bayes_sys.study.pandas_periods import with_written_periods
from bayes_sys.study.spec_data import CsvOptions

if TYPE_CHECKING:
    import pandas as pd

LARGEST_FILE = 2_000_000_000
_NUMBER = re.compile(r"[+-]?\d+([.,]\d+)?")
_SEPARATORS = {";": ";", "\t": "\\t", "|": "|", ",": ",", " ": " "}


@dataclass(frozen=True)
class RawTable:
    """A table as it was found.

    Parameters
    ----------
    frame : DataFrame, shape (n_rows, n_columns)
        Text columns as text (csv: every column), numbers as numbers; the index counts rows from 0.
    name : str
        File name or "table given in Python", for messages.
    options : CsvOptions
        Decimal sign and marks of missing cells, for text cells.
    path : Path or None
        The file; None for a table given in Python.
    """

    frame: pd.DataFrame
    name: str
    options: CsvOptions = field(default_factory=CsvOptions)
    path: Path | None = None
    kept: NDArray[np.int64] | None = None
    """Row numbers in the file, where rows were taken out."""
    lines: tuple[int, ...] = ()
    """Line of each row of a sheet."""
    sheets: tuple[str, ...] = ()
    """Names of the sheets of the file."""

    def only(self, rows: NDArray[np.int64]) -> RawTable:
        """Return the table with some of its rows."""
        if len(rows) == len(self.frame):
            return self
        return replace(self, frame=self.frame.iloc[rows], kept=rows)

    def about_header(self) -> str:
        """Return what may be wrong with the header, for messages about a column that is not there."""
        if self.sheets:
            names = ", ".join(f"“{n}”" for n in self.sheets)
            return (
                f"The names of the columns must stand in the first row of the sheet; the file holds {names}."
            )
        return about_names([str(c) for c in self.frame.columns]) if self.path is not None else ""

    def row(self, index: int) -> str:
        """Return how to find a row: the number of the data row and the line of the file."""
        index = index if self.kept is None else int(self.kept[index])
        line = _line_of(self, index)
        return f"data row {index + 1}" + (f" (line {line} of the file)" if line else "")


def load_table(path: Path, options: CsvOptions, sheet: str | None) -> RawTable:
    """Read a csv, parquet or xlsx file.

    Raises
    ------
    TableError
        If the file is missing, of another kind, too large, damaged, empty, or its header is unusable.
    """
    try:
        _check_file(path)
        return _load(path, options, sheet)
    except OSError as error:
        reason = error.strerror or "unknown reason"
        raise TableError(f"the file cannot be read ({reason}).", where=str(path)[:200]) from None


def _load(path: Path, options: CsvOptions, sheet: str | None) -> RawTable:
    suffix = path.suffix.lower()
    lines: tuple[int, ...] = ()
    sheets: tuple[str, ...] = ()
    if sheet is not None and suffix != ".xlsx":
        raise TableError("“sheet” is for xlsx files only.", where=path.name, mend="Take it out.")
    if suffix == ".csv":
        frame = _read_csv(path, options)
    elif suffix == ".parquet":
        frame = _read_parquet(path)
    elif suffix == ".xlsx":
        frame, lines, sheets = _read_xlsx(path, sheet)
    else:
        raise TableError(
            f"files ending in “{path.suffix}” are not read.",
            where=path.name,
            mend="Save it as .csv, .parquet or .xlsx.",
        )
    return check_table(RawTable(frame, path.name, options, path, lines=lines, sheets=sheets))


def given_table(table: pd.DataFrame, options: CsvOptions) -> RawTable:
    """Take a table given in Python; named index levels become columns."""
    import pandas as pd

    name = "table given in Python"
    if not isinstance(table, pd.DataFrame):
        raise TableError(f"found {type(table).__name__}, expected a pandas.DataFrame.", where=name)
    named = [n for n in table.index.names if n is not None and n not in table.columns]
    frame = table.reset_index(level=named) if named else table
    frame = frame.reset_index(drop=True)
    _check_header([str(c) for c in frame.columns], name)
    frame.columns = pd.Index([str(c) for c in frame.columns])
    return check_table(RawTable(with_written_periods(frame), name, options))


def check_table(table: RawTable) -> RawTable:
    """Refuse a table without rows; return it otherwise."""
    if table.frame.empty:
        raise _no_rows(table.name)
    return table


def _no_rows(name: str) -> TableError:
    return TableError("the table has a header but no rows.", where=name, mend="Is this the right file?")


def _check_file(path: Path) -> None:
    if path.is_dir():
        raise TableError("this is a folder, not a data file.", where=str(path))
    if not path.exists():
        folder = path.parent
        known = [p.name for p in sorted(folder.iterdir())] if folder.is_dir() else []
        known = [n for n in known if n.lower().endswith((".csv", ".parquet", ".xlsx"))]
        mend = nearest(path.name, known) or "The path is relative to the study file."
        if (folder / "manifest.json").is_file():
            mend = (
                "This is the folder of a run, and its study a copy: name the study that lies beside the data."
            )
        raise TableError("there is no such file.", where=str(path), mend=mend)
    size = path.stat().st_size
    if size == 0:
        raise TableError("the file is empty.", where=path.name, mend="Is this the right file?")
    if size > LARGEST_FILE:
        raise TableError(
            f"the file has {size / 1e9:.1f} GB; at most {LARGEST_FILE / 1e9:.0f} GB are read.",
            where=path.name,
            mend="Keep only the columns and periods the study needs.",
        )


def about_names(names: list[str]) -> str:
    """Return a hint that the header seems to be missing, empty if it does not."""
    for name in names:
        if _NUMBER.fullmatch(name.strip()):
            return f"The first line must hold the names of the columns; “{name}” looks like a value."
    return ""


def _check_header(names: list[str], where: str) -> None:
    seen: set[str] = set()
    for i, name in enumerate(names):
        if name in seen:
            raise TableError(
                f"two columns are called “{name}” (columns {names.index(name) + 1} and {i + 1}).",
                where=where,
                mend=f"Rename one. {about_names(names)}".strip(),
            )
        seen.add(name)


def _read_csv(path: Path, options: CsvOptions) -> pd.DataFrame:
    import pyarrow as pa
    from pyarrow import csv as arrow_csv

    names, n_blank = _csv_header(path, options)
    try:
        table = arrow_csv.read_csv(
            path,
            read_options=arrow_csv.ReadOptions(
                column_names=names, skip_rows=n_blank, skip_rows_after_names=1
            ),
            parse_options=arrow_csv.ParseOptions(
                delimiter=options.separator, newlines_in_values=_quotes_a_newline(path)
            ),
            convert_options=arrow_csv.ConvertOptions(
                column_types={n: pa.string() for n in names}, strings_can_be_null=False
            ),
        )
    except pa.ArrowInvalid as error:
        raise _csv_fault(path, options, len(names), error) from None
    frame: pd.DataFrame = table.to_pandas()
    return frame


def _csv_header(path: Path, options: CsvOptions) -> tuple[list[str], int]:
    """Return the names in the header, and the number of blank lines above it."""
    _refuse_binary(path)
    n_blank, names = 0, list[str]()
    try:
        with path.open(encoding="utf-8-sig", newline="") as stream:
            for names in csv.reader(stream, delimiter=options.separator):
                if names:
                    break
                n_blank += 1
    except UnicodeDecodeError:
        raise _not_utf8(path) from None
    except csv.Error as error:
        raise TableError(f"the header cannot be read ({error}).", where=f"{path.name}, line 1") from None
    names = [n.strip() for n in names]
    if len(names) <= 1:
        _refuse_one_column("".join(names), path, options)
    if not any(names):
        raise TableError("the header line is empty.", where=f"{path.name}, line 1")
    names = [n or f"column {i + 1}" for i, n in enumerate(names)]
    _check_header(names, path.name)
    return names, n_blank


def _refuse_binary(path: Path) -> None:
    with path.open("rb") as stream:
        start = stream.read(4096)
    if start.startswith(b"PK\x03\x04"):
        raise TableError(
            "this is no csv file but looks like xlsx.", where=path.name, mend="Rename it, or save it as csv."
        )
    if start.startswith((b"\xff\xfe", b"\xfe\xff")):
        raise _not_utf8(path)
    if b"\0" in start:
        raise TableError("this is no text file.", where=path.name, mend="Save the table as csv in UTF-8.")


def _refuse_one_column(header: str, path: Path, options: CsvOptions) -> None:
    for separator, written in _SEPARATORS.items():
        if separator != options.separator and separator in header:
            decimal = ', decimal = ","' if separator == ";" else ""
            raise TableError(
                f"found a single column “{header[:60]}” with the separator “{options.separator}”; "
                f"the cells seem to be separated by “{written}”.",
                where=f"{path.name}, line 1",
                mend=f'Add csv = {{ separator = "{written}"{decimal} }} under [data]'
                + (" (decimal only if numbers are written 1,5)." if decimal else "."),
            )


def _quotes_a_newline(path: Path) -> bool:
    # Reading in parallel is only safe when no quoted cell runs over a line; few files have quotes at all.
    with path.open("rb") as stream:
        while block := stream.read(1 << 24):
            if b'"' in block:
                return True
    return False


def _csv_fault(path: Path, options: CsvOptions, n_names: int, error: Exception) -> TableError:
    if not _is_utf8(path):
        return _not_utf8(path)
    n_rows = 0
    with path.open(encoding="utf-8-sig", newline="") as stream:
        reader = csv.reader(stream, delimiter=options.separator)
        for cells in reader:
            n_rows += bool(cells)
            if cells and len(cells) != n_names:
                found = "1 cell" if len(cells) == 1 else f"{len(cells)} cells"
                return TableError(
                    f"found {found}, expected {n_names} as in the header.",
                    where=f"{path.name}, line {reader.line_num}",
                    mend="Put cells that hold the separator in double quotes, or mend the line.",
                )
    if n_rows <= 1:
        return _no_rows(path.name)
    return TableError(f"the file cannot be read as csv ({error}).", where=path.name)


def _is_utf8(path: Path) -> bool:
    try:
        with path.open(encoding="utf-8") as stream:
            for _ in stream:
                pass
    except UnicodeDecodeError:
        return False
    return True


def _not_utf8(path: Path) -> TableError:
    line = 0
    with path.open("rb") as stream:
        for raw in stream:
            line += 1
            try:
                raw.decode("utf-8")
            except UnicodeDecodeError:
                break
    return TableError(
        "the file is not UTF-8 text.",
        where=f"{path.name}, line {line}",
        mend="Save it as csv in UTF-8: other encodings are not read.",
    )


def _read_parquet(path: Path) -> pd.DataFrame:
    import pyarrow as pa
    from pyarrow import parquet

    try:
        table = parquet.ParquetFile(path).read()
    except (pa.ArrowInvalid, pa.ArrowNotImplementedError, OSError) as error:
        reason = str(error).splitlines()[0]
        raise TableError(
            f"the file cannot be read as parquet ({reason}).",
            where=path.name,
            mend="Write it again with another program or version, or save the table as csv in UTF-8.",
        ) from None
    _check_header(list(table.column_names), path.name)
    frame: pd.DataFrame = table.to_pandas(ignore_metadata=True)
    return with_written_periods(frame, table.schema)


def _read_xlsx(path: Path, sheet: str | None) -> tuple[pd.DataFrame, tuple[int, ...], tuple[str, ...]]:
    import pandas as pd

    try:
        with warnings.catch_warnings():
            warnings.simplefilter("ignore")
            book: Any = pd.ExcelFile(path, engine="openpyxl")
    except Exception as error:
        # openpyxl lets through whatever its zip and XML layers raise; to the user it is one fault.
        raise TableError(
            f"the file cannot be read as xlsx ({error}).",
            where=path.name,
            mend="Save it again as an .xlsx workbook without a password, or as csv in UTF-8.",
        ) from None
    with book:
        sheets = tuple(str(name) for name in book.sheet_names)
        if sheet is not None and sheet not in book.sheet_names:
            raise TableError(
                f"there is no sheet “{sheet}”.", where=path.name, mend=nearest(sheet, book.sheet_names)
            )
        cells = pd.read_excel(
            book,
            sheet_name=sheet if sheet is not None else 0,
            header=None,
            dtype=object,
            keep_default_na=False,
        )
    cells = cells.astype(object).where(~cells.isin([""]), None)
    if cells.empty:
        known = ", ".join(f"“{n}”" for n in sheets)
        raise TableError(
            "the sheet is empty.", where=path.name, mend=f"Name one of {known} with sheet = “…” under [data]."
        )
    names = [_header_text(v, i) for i, v in enumerate(cells.iloc[0])]
    _check_header(names, path.name)
    body = cells.iloc[1:]
    body = body[body.notna().any(axis=1)]
    frame = pd.DataFrame({n: body.iloc[:, i].to_numpy(dtype=object) for i, n in enumerate(names)})
    return frame, tuple(int(i) + 1 for i in body.index), sheets


def _header_text(value: object, position: int) -> str:
    text = "" if value is None or value != value else str(value).strip()
    return text or f"column {position + 1}"


def _line_of(table: RawTable, index: int) -> int | None:
    if table.lines:
        return table.lines[index]
    if table.path is None or table.path.suffix.lower() != ".csv":
        return None
    if table.path.stat().st_size > 200_000_000:
        return index + 2
    # Blank lines and quoted line breaks shift lines against rows, so count as the csv reader does.
    with table.path.open(encoding="utf-8-sig", newline="") as stream:
        reader = csv.reader(stream, delimiter=table.options.separator)
        rows = (reader.line_num for cells in reader if cells)
        for count, line in enumerate(rows):
            if count == index + 1:
                return line
    return index + 2
