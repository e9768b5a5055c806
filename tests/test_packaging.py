"""What is built: the cards and the case studies travel, nothing lands beside the package, the demo runs."""

from __future__ import annotations

import json
import os
import subprocess
import sys
import tarfile
import zipfile
from collections.abc import Mapping
from pathlib import Path

import pytest

ROOT = Path(__file__).parents[1]


@pytest.fixture(scope="module")
def built(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """The source archive, and the wheel made from that archive."""
    place = tmp_path_factory.mktemp("dist")
    command = [sys.executable, "-m", "build", "--no-isolation", "--outdir", str(place), str(ROOT)]
    done = subprocess.run(command, capture_output=True, text=True, cwd=place)
    assert done.returncode == 0, done.stdout + done.stderr
    return place


@pytest.fixture(scope="module")
def wheel(built: Path) -> Path:
    (path,) = built.glob("*.whl")
    return path


@pytest.fixture(scope="module")
def installed(wheel: Path, tmp_path_factory: pytest.TempPathFactory) -> Path:
    """The wheel, unpacked as an installation would, away from the checkout."""
    place = tmp_path_factory.mktemp("site")
    with zipfile.ZipFile(wheel) as archive:
        archive.extractall(place)
    return place


def run_there(installed: Path, folder: Path, *arguments: str) -> subprocess.CompletedProcess[str]:
    environment: Mapping[str, str] = {**os.environ, "PYTHONPATH": str(installed)}
    return subprocess.run(
        [sys.executable, *arguments], capture_output=True, text=True, cwd=folder, env=environment
    )


def tracked(folder: str) -> set[str]:
    """Return the files of a folder of the checkout, caches left out."""
    paths = (p for p in (ROOT / folder).rglob("*") if p.is_file() and "__pycache__" not in p.parts)
    return {str(p.relative_to(ROOT)) for p in paths}


def test_the_wheel_holds_every_card_and_case_study(wheel: Path) -> None:
    names = set(zipfile.ZipFile(wheel).namelist())
    wanted = tracked("priors") | tracked("case_studies")
    assert len(wanted) > 10
    assert {f"bayes_sys/shipped_data/{name}" for name in wanted} <= names


def test_the_wheel_installs_the_package_and_nothing_beside_it(wheel: Path) -> None:
    tops = {name.split("/")[0] for name in zipfile.ZipFile(wheel).namelist()}
    assert {top for top in tops if not top.endswith(".dist-info")} == {"bayes_sys"}


def test_the_wheel_holds_every_module_and_template(wheel: Path) -> None:
    assert tracked("bayes_sys") <= set(zipfile.ZipFile(wheel).namelist())


def test_the_wheel_says_licence_python_and_command(wheel: Path) -> None:
    archive = zipfile.ZipFile(wheel)
    (entry,) = (name for name in archive.namelist() if name.endswith("entry_points.txt"))
    (about,) = (name for name in archive.namelist() if name.endswith(".dist-info/METADATA"))
    assert "bayes-sys = bayes_sys.cli:main" in archive.read(entry).decode()
    metadata = archive.read(about).decode()
    assert "License-Expression: MIT" in metadata
    assert "Requires-Python: >=3.12" in metadata


def test_the_source_archive_holds_what_a_build_and_the_tests_need(built: Path) -> None:
    (path,) = built.glob("*.tar.gz")
    with tarfile.open(path) as archive:
        names = {name.split("/", 1)[1] for name in archive.getnames() if "/" in name}
    wanted = tracked("priors") | tracked("case_studies") | {"pyproject.toml", "README.md", "LICENSE"}
    assert wanted | {"tests/test_packaging.py"} <= names


def test_the_built_package_finds_its_own_cards_and_cases(installed: Path, tmp_path: Path) -> None:
    code = (
        "import bayes_sys, json\n"
        "case = str(bayes_sys.case_study('credit_segments'))\n"
        "print(json.dumps([bayes_sys.__file__, bayes_sys.card_names(), case]))"
    )
    done = run_there(installed, tmp_path, "-c", code)
    assert done.returncode == 0, done.stderr
    home, cards, case = json.loads(done.stdout)
    assert Path(home).is_relative_to(installed) and Path(case).is_relative_to(installed)
    assert set(cards) == {path.stem for path in (ROOT / "priors").glob("*.toml")}


def test_the_demo_runs_from_the_built_package_anywhere(installed: Path, tmp_path: Path) -> None:
    done = run_there(installed, tmp_path, "-m", "bayes_sys", "demo", "--quiet")
    assert (done.returncode, done.stdout, done.stderr) == (0, "bayes-sys-demo\n", "")
    assert json.loads((tmp_path / "bayes-sys-demo" / "manifest.json").read_text())["status"] == "complete"
    assert (tmp_path / "bayes-sys-demo" / "report.html").stat().st_size > 10_000
