"""The public face: the names there are, how light they are to import, and the order of the rooms."""

from __future__ import annotations

import importlib
import os
import subprocess
import sys
from pathlib import Path

import pytest

import bayes_sys

ROOT = Path(__file__).parents[1]
HEAVY = set("numpy pandas scipy xarray pydantic pymc pytensor nutpie numba arviz matplotlib".split())
SLOW = {"pymc", "pytensor", "nutpie", "numba", "arviz", "matplotlib", "statsmodels", "jinja2"}


def loaded_after(code: str) -> set[str]:
    """Return the top-level modules that a fresh process has loaded after some code."""
    done = subprocess.run(
        [sys.executable, "-c", f"import sys\n{code}\nprint('|', *sys.modules)"],
        capture_output=True,
        text=True,
        check=True,
        env={**os.environ, "PYTHONPATH": str(ROOT)},
    )
    return {name.split(".")[0] for name in done.stdout.rsplit("|", 1)[1].split()}


def test_every_public_name_is_importable_and_every_importable_name_is_public() -> None:
    for name in bayes_sys.__all__:
        assert getattr(bayes_sys, name) is not None
    assert sorted(set(bayes_sys.__all__)) == list(bayes_sys.__all__)
    assert {name for names in bayes_sys._HOMES.values() for name in names} == set(bayes_sys.__all__)


def test_public_names_are_the_objects_of_the_rooms() -> None:
    for home, names in bayes_sys._HOMES.items():
        for name in names:
            assert getattr(bayes_sys, name) is getattr(importlib.import_module(home), name)


@pytest.mark.parametrize(
    "name",
    ["read_study", "build_system", "study_card", "read_card", "build_model", "sample", "coefficient_table"],
)
def test_the_names_users_were_promised_are_there(name: str) -> None:
    assert callable(getattr(bayes_sys, name))


def test_public_names_are_documented() -> None:
    undocumented = [
        name for name in bayes_sys.__all__ if not (getattr(bayes_sys, name).__doc__ or "").strip()
    ]
    assert undocumented == []


def test_an_unknown_name_is_an_ordinary_attribute_error() -> None:
    with pytest.raises(AttributeError, match="no_such_thing"):
        _ = bayes_sys.no_such_thing


def test_importing_the_package_loads_nothing_heavy() -> None:
    assert loaded_after("import bayes_sys") & HEAVY == set()


def test_help_loads_nothing_heavy() -> None:
    code = "from bayes_sys.cli import execute as do\nassert do(['--help']) == do(['run', '--help']) == 0"
    assert loaded_after(code) & HEAVY == set()


def test_an_examination_loads_no_sampler_and_no_plotting(tmp_path: Path) -> None:
    code = (
        "from bayes_sys import job, case_study\n"
        "assert job.examine(case_study('district_water') / 'study.toml').rows"
    )
    assert loaded_after(code) & SLOW == set()


def test_imports_only_go_down() -> None:
    pytest.importorskip("importlinter")
    done = subprocess.run(
        [sys.executable, "-c", "from importlinter.cli import lint_imports_command as c; c()", "--no-cache"],
        capture_output=True,
        text=True,
        cwd=ROOT,
        env={**os.environ, "PYTHONPATH": str(ROOT)},
    )
    assert done.returncode == 0, done.stdout
    assert "1 kept, 0 broken" in done.stdout
