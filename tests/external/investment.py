"""The investment data of published tables, and the figures printed or recomputed from them."""

from __future__ import annotations

import json
from pathlib import Path
from typing import Any

import numpy as np
from helpers import make_system

from bayes_sys.system.system import System

HERE = Path(__file__).parent
COLUMNS = ("intercept", "value", "capital")


def read(name: str) -> dict[str, Any]:
    return json.loads((HERE / name).read_text())


def investment_system(firms: list[str] | None = None, *, textbook: bool = False) -> System:
    """Investment on a constant, value and capital; the textbook's three cells changed on request."""
    data = read("investment.json")
    firms = firms if firms is not None else list(data["firms"])
    columns = {f: {k: list(v) for k, v in data["firms"][f].items()} for f in firms}
    if textbook:
        for cell in data["textbook_cells"]:
            columns["US Steel"][cell["col"]][data["years"].index(cell["year"])] = cell["textbook"]
    ones = np.ones(len(data["years"]))
    designs = [np.column_stack([ones, columns[f]["value"], columns[f]["capital"]]) for f in firms]
    responses = np.column_stack([columns[f]["invest"] for f in firms])
    return make_system(designs, responses, firms, [COLUMNS] * len(firms))
