"""Columns of pandas periods, written out as a user would write them."""

from __future__ import annotations

import json
from collections.abc import Iterable
from typing import TYPE_CHECKING, Any

if TYPE_CHECKING:
    import pandas as pd


def with_written_periods(frame: pd.DataFrame, fields: Iterable[Any] = ()) -> pd.DataFrame:
    """Return the frame with its columns of pandas periods as text, such as 2018-02.

    Parameters
    ----------
    frame : DataFrame
    fields : iterable of pyarrow fields
        Of the file that the frame was read from. A file stores periods as plain numbers and marks the column;
        the mark becomes a type once some part of the program has registered it.
    """
    import pandas as pd

    stored = {field.name: freq for field in fields if (freq := _stored_frequency(field))}
    for name in frame.columns:
        column = frame[name]
        if isinstance(column.dtype, pd.PeriodDtype):
            periods = list(column)
        elif name in stored:
            freq = stored[name]
            periods = [None if pd.isna(v) else pd.Period(ordinal=int(v), freq=freq) for v in column]
        else:
            continue
        texts = [None if pd.isna(p) else str(p) for p in periods]
        frame = frame.assign(**{name: pd.Series(texts, index=frame.index, dtype=object)})
    return frame


def _stored_frequency(field: Any) -> str:
    metadata = field.metadata or {}
    if metadata.get(b"ARROW:extension:name") != b"pandas.period":
        return ""
    return str(json.loads(metadata[b"ARROW:extension:metadata"])["freq"])
