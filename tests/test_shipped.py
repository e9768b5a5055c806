"""Cards and case studies are found wherever the package was installed."""

from __future__ import annotations

from pathlib import Path

import pytest

from bayes_sys import shipped
from bayes_sys.errors import BayesSysError, InputError


@pytest.fixture
def site(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> Path:
    """Return an empty place where the package pretends to be installed."""
    (tmp_path / "bayes_sys").mkdir()
    monkeypatch.setattr(shipped, "_PACKAGE", tmp_path / "bayes_sys")
    return tmp_path


def put(folder: Path, *names: str) -> None:
    folder.mkdir(parents=True)
    for name in names:
        (folder / name).write_text("")


def test_a_checkout_has_its_cards() -> None:
    assert {"pooled", "vague", "weakly-informative"} <= set(shipped.card_names())
    assert (shipped.priors_folder() / "vague.toml").is_file()


def test_an_installed_package_looks_inside_itself_first(site: Path) -> None:
    put(site / "bayes_sys" / "shipped_data" / "priors", "a.toml", "b.toml", "README.md")
    put(site / "priors", "c.toml")
    (site / "pyproject.toml").write_text("")
    assert shipped.priors_folder() == site / "bayes_sys" / "shipped_data" / "priors"
    assert shipped.card_names() == ("a", "b")


def test_a_checkout_is_known_by_its_project_file(site: Path) -> None:
    put(site / "priors", "c.toml")
    with pytest.raises(BayesSysError, match=r"“priors” that comes with bayes-sys is missing.*install"):
        shipped.priors_folder()
    (site / "pyproject.toml").write_text("")
    assert shipped.card_names() == ("c",)


def test_a_case_study_is_a_folder_and_a_wrong_name_gets_the_nearest(site: Path) -> None:
    put(site / "bayes_sys" / "shipped_data" / "case_studies" / "district_water", "study.toml")
    assert (shipped.case_study("district_water") / "study.toml").is_file()
    with pytest.raises(InputError, match=r"no case study “district_watr”\. Did you mean “district_water”"):
        shipped.case_study("district_watr")


def test_missing_case_studies_are_said_to_be_missing(site: Path) -> None:
    with pytest.raises(BayesSysError, match="case_studies"):
        shipped.case_study("district_water")
