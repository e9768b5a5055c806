"""What the job hands on of an examination."""

from __future__ import annotations

from typing import Any

from bayes_sys.classical.check import FINE, NOTE, WARNING, Check
from bayes_sys.job import Prepared


def prepared(*checks: Check) -> Prepared:
    nothing: Any = None
    return Prepared(nothing, nothing, nothing, "", (), nothing, checks)


def test_a_warning_keeps_the_equations_it_speaks_of_wherever_it_is_passed_on() -> None:
    found = prepared(
        Check("a", "u1", 1.0, 2.0, WARNING, "Too small."),
        Check("a", "u2", 1.0, 2.0, WARNING, "Too small."),
        Check("b", "u2", 1.0, 2.0, NOTE, "By the way."),
        Check("c", "", 1.0, 2.0, WARNING, "Singular."),
        Check("d", "u1", 1.0, 2.0, FINE, "All is well."),
    )
    assert found.warnings == ("u1, u2: Too small.", "Singular.")
