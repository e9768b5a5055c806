"""What the terminal shows: tables that stay readable, marks where they belong, bars that end."""

from __future__ import annotations

import io
from typing import Any

import numpy as np
import pandas as pd
import pytest
from helpers import make_system
from rich.console import Console
from rich.progress import Progress as Bars

from bayes_sys import display
from bayes_sys.classical.check import FINE, LABELS, NOTE, WARNING
from bayes_sys.classical.equation_checks import equation_checks
from bayes_sys.sampling.progress import Progress

GATE: dict[str, Any] = {
    "passed": True,
    "rhat_max": 1.0034,
    "ess_bulk_min": 2391.4,
    "ess_tail_min": 1733.0,
    "divergences": 0,
    "failures": [],
    "advice": [],
}


def check(
    name: str, equation: str, figure: float | None, verdict: str = FINE, sentence: str = ""
) -> dict[str, Any]:
    return {"name": name, "equation": equation, "figure": figure, "verdict": verdict, "sentence": sentence}


def coefficients(n: int) -> pd.DataFrame:
    columns = {"mean": 0.1, "q5": -1.0, "q95": 1.0, "fgls": np.nan}
    return pd.DataFrame({"equation": "a", "regressor": [f"x{k}" for k in range(n)], **columns})


def test_a_passed_gate_is_one_line_with_its_figures() -> None:
    (line,) = display.gate_lines(GATE)
    assert "passed the gate" in line
    assert all(figure in line for figure in ("1.003", "2,391", "1,733", "divergences 0"))


def test_a_failed_gate_says_what_failed_what_helps_and_not_to_read_on() -> None:
    failed = {**GATE, "passed": False, "rhat_max": None, "failures": ["It did not mix."], "advice": ["Wait."]}
    text = "\n".join(display.gate_lines(failed))
    assert "did NOT pass" in text and "no figure of it is a result" in text
    assert "- It did not mix." in text and "- Wait." in text
    assert "R-hat -;" in text


def test_every_check_of_one_equation_is_labelled_with_what_its_figure_is() -> None:
    rng = np.random.default_rng(1)
    design = np.column_stack([np.ones(20), rng.normal(size=(20, 2))])
    found = {check.name for check in equation_checks(make_system([design], rng.normal(size=(20, 1))), 0)}
    assert found == LABELS.keys()
    lines = display.equation_matrix([check("breusch_godfrey", "a", 0.5), check("periods", "a", 4.7)], ["a"])
    assert [line.strip() for line in lines[1:]] == [
        "Breusch-Godfrey (p-value)  0.5",
        "periods per coefficient    4.7",
    ]


def test_an_estimate_that_does_not_exist_is_a_dash() -> None:
    assert display.coefficient_lines(coefficients(1))[1].split() == ["a", "x0", "0.1", "-1", "1", "-"]


def test_many_coefficients_end_in_a_pointer_to_the_file() -> None:
    few, many = (
        display.coefficient_lines(coefficients(n)) for n in (display.MOST_ROWS, display.MOST_ROWS + 3)
    )
    assert len(few) == display.MOST_ROWS + 1
    assert many[-1] == "… and 3 more in coefficients.csv"


def test_columns_line_up() -> None:
    lines = display.aligned([["", "wide head"], ["name", "1"], ["n", "22"]], left=1)
    assert lines == ["        wide head", "  name          1", "  n            22"]


def test_checks_of_many_equations_stand_in_blocks_that_fit() -> None:
    names = [f"unit{k}" for k in range(display.MOST_COLUMNS + 2)]
    lines = display.equation_matrix([check("leverage", name, 0.5) for name in names], names)
    assert len(lines) == 4
    assert lines[0].split() == names[: display.MOST_COLUMNS]
    assert lines[2].split() == names[display.MOST_COLUMNS :]


def test_marks_follow_the_verdict() -> None:
    rows = [check("c", "a", 1.5), check("c", "b", 2.5, NOTE), check("c", "d", None, WARNING)]
    assert display.equation_matrix(rows, ["a", "b", "d"])[1].split() == ["c", "1.5", "2.5*", "-!"]


def test_a_sentence_that_several_equations_share_is_said_once() -> None:
    rows = [check("c", e, 1.0, NOTE, "Too short.") for e in ("a", "b")] + [
        check("c", "d", 1.0, WARNING, "Bad.")
    ]
    assert display.shared_sentences(rows) == ["* a, b: Too short.", "! d: Bad."]


def test_points_are_wrapped_and_a_mark_replaces_the_dash(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setenv("COLUMNS", "20")
    assert display.points(["one two three four five", "! mind"]) == [
        "- one two three four",
        "  five",
        "! mind",
    ]


def test_warmup_and_sampling_share_a_bar_and_a_second_attempt_has_its_own() -> None:
    bars = Bars(console=Console(file=io.StringIO()))
    watch = display._Bars(bars)
    for stage, done, attempt in (("warmup", 1, 1), ("sampling", 9, 1), ("warmup", 1, 2), ("sampling", 5, 2)):
        watch(Progress(stage, done, 10, divergences=done, attempt=attempt))
    first, second = bars.tasks
    assert first.finished and not second.finished
    assert (second.description, second.completed, second.total) == ("Sampling, second attempt", 5, 10)
    assert second.fields["detail"] == "5 of 10, 5 divergences"
    watch.finish()
    assert second.finished


@pytest.mark.parametrize(
    "stage",
    ["reading", "examining", "preparing", "compiling", "warmup", "sampling", "drawing", "tables", "page"],
)
def test_every_stage_is_told_in_words(stage: str) -> None:
    assert display.STAGES[stage][0].isupper()
