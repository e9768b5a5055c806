"""The case studies are what their READMEs say: reproducible, complete, and ready to run."""

from __future__ import annotations

import json
import subprocess
import sys
from pathlib import Path
from typing import Any

import numpy as np
import pytest

from bayes_sys.study.read import read_study
from bayes_sys.system.align import build_system

CASES = Path(__file__).parents[1] / "case_studies"
MADE = {
    "district_water": ("demand.csv", "truth.json"),
    "credit_segments": ("losses.csv", "economy.csv", "truth.json"),
}


def truth_of(case: str) -> dict[str, Any]:
    content: dict[str, Any] = json.loads((CASES / case / "truth.json").read_text(encoding="utf-8"))
    return content


@pytest.mark.parametrize("case", MADE)
def test_the_script_makes_the_same_files_byte_for_byte(case: str, tmp_path: Path) -> None:
    script = CASES / case / "make_data.py"
    subprocess.run([sys.executable, str(script), str(tmp_path)], check=True, timeout=120)
    assert sorted(p.name for p in tmp_path.iterdir()) == sorted(MADE[case])
    for name in MADE[case]:
        assert (tmp_path / name).read_bytes() == (CASES / case / name).read_bytes(), name


@pytest.mark.parametrize("case", MADE)
def test_the_truth_is_a_valid_law_of_the_shocks(case: str) -> None:
    truth = truth_of(case)
    correlation = np.array(truth["correlation"])
    assert np.array_equal(correlation, correlation.T)
    assert np.all(np.diag(correlation) == 1.0)
    assert np.linalg.eigvalsh(correlation).min() > 0.05
    assert list(truth["scales"]) == truth["equations"]
    assert min(truth["scales"].values()) > 0


def test_district_water_is_five_districts_and_eighteen_years() -> None:
    system = build_system(read_study(CASES / "district_water" / "study.toml"))
    assert (system.n_periods, system.n_equations, system.n_coefficients) == (18, 5, 20)
    assert system.periods.labels[0] == "2004" and system.periods.labels[-1] == "2021"
    assert system.equations[0].regressors == ("intercept", "log_tariff", "heat", "log_connections")
    assert system.notes == ()


def test_credit_segments_is_six_segments_and_forty_quarters() -> None:
    system = build_system(read_study(CASES / "credit_segments" / "study.toml"))
    assert (system.n_periods, system.n_equations, system.n_coefficients) == (40, 6, 18)
    assert system.periods.labels[0] == "2014-Q1" and system.periods.labels[-1] == "2023-Q4"
    assert system.equations[0].regressors == ("intercept", "unemployment_change", "rate_spread")
    assert system.factor.n_distinct == 3, "the economy is held once for all segments"
    assert system.notes == ()


@pytest.mark.parametrize("case", MADE)
def test_the_truth_speaks_of_the_coefficients_of_the_study(case: str) -> None:
    system = build_system(read_study(CASES / case / "study.toml"))
    truth = truth_of(case)
    assert tuple(truth["coefficients"]) == system.coefficient_labels
    assert tuple(truth["equations"]) == system.names


@pytest.mark.parametrize("case", MADE)
def test_the_data_are_what_the_truth_makes(case: str) -> None:
    """Residuals at the true coefficients, in units of the true scales, have the true correlation.

    The generalised sum of squares is chi-square with T N degrees of freedom: within five standard deviations.
    """
    system = build_system(read_study(CASES / case / "study.toml"))
    truth = truth_of(case)
    residuals = system.factor.residuals(np.array(list(truth["coefficients"].values())))
    unit = residuals / np.array(list(truth["scales"].values()))
    n = system.n_periods * system.n_equations
    sum_of_squares = np.trace(np.linalg.solve(np.array(truth["correlation"]), unit.T @ unit))
    assert abs(sum_of_squares - n) < 5 * np.sqrt(2 * n)


@pytest.mark.parametrize("case", MADE)
def test_every_file_a_reader_needs_is_there_and_says_that_it_is_invented(case: str) -> None:
    readme = (CASES / case / "README.md").read_text(encoding="utf-8")
    assert "invented" in readme
    assert f"bayes-sys run case_studies/{case}/study.toml" in readme
    for name in MADE[case]:
        assert (CASES / case / name).exists() and name in readme
    assert case in (CASES / "README.md").read_text(encoding="utf-8")


def test_district_water_compares_the_three_cards() -> None:
    study = read_study(CASES / "district_water" / "study.toml")
    assert study.prior.card == "pooled"
    assert study.compare.cards == ("vague", "weakly-informative", "pooled")
