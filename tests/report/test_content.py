from __future__ import annotations

import json
import re

import pytest
from contents import EXAMINATION, MANIFEST, STUDY, make_content

from bayes_sys import runs
from bayes_sys.errors import RunFolderError
from bayes_sys.report.content import ALWAYS, TABLES, load_content
from bayes_sys.report.page import page


@pytest.fixture
def folder(tmp_path):
    content = make_content(("007", "NA", "1e5"), n_draws=10)
    run = runs.RunFolder(tmp_path)
    run.write_json(runs.MANIFEST, {**content.manifest, "prior_words": ["One.", "Two."]})
    run.write_text(runs.STUDY, STUDY)
    run.write_text(runs.PRIOR, content.card)
    run.write_json(runs.EXAMINATION, list(EXAMINATION))
    for name, table in content.tables.items():
        run.write_table(TABLES[name], table)
    return tmp_path, content


def test_a_run_folder_reads_back_what_was_written(folder):
    path, content = folder
    found = load_content(path)
    assert found.study == STUDY and found.prior_words == ("One.", "Two.")
    assert [c["verdict"] for c in found.examination] == [c["verdict"] for c in EXAMINATION]
    for name, table in content.tables.items():
        assert list(found.tables[name]) == list(table)
        numbers = table.select_dtypes("number").columns
        assert found.tables[name][numbers].astype(float).equals(table[numbers].astype(float)), name


def test_names_that_look_like_numbers_or_like_nothing_stay_names(folder):
    path, _ = folder
    assert list(load_content(path).tables["scales"]["equation"]) == ["007", "NA", "1e5"]


def test_the_page_made_from_the_folder_is_the_page_made_from_memory(folder):
    path, content = folder
    found = load_content(path, manifest=content.manifest)
    assert page(found).count("<figure>") == page(content).count("<figure>")
    assert ">007</h3>" in page(found) and ">NA</h3>" in page(found)


def test_a_run_that_has_not_closed_its_manifest_may_bring_it_along(folder):
    path, content = folder
    (path / runs.MANIFEST).write_text(json.dumps({**MANIFEST, "status": "incomplete"}))
    assert load_content(path).manifest["status"] == "incomplete"
    assert load_content(path, manifest=content.manifest).manifest["status"] == "complete"


@pytest.mark.parametrize("name", ALWAYS)
def test_a_file_that_every_run_writes_is_named_when_it_is_missing(folder, name):
    path, _ = folder
    (path / name).unlink()
    with pytest.raises(RunFolderError, match=f"missing: {re.escape(name)}.*--overwrite"):
        load_content(path)


def test_what_only_some_runs_write_is_missed_only_in_those(folder):
    path, content = folder
    assert "pooled" not in load_content(path).tables
    wrote = {**content.manifest, "files": [runs.POOLED, runs.POSTERIOR]}
    with pytest.raises(RunFolderError, match=r"missing: pooled\.csv\."):
        load_content(path, manifest=wrote)


def test_a_folder_that_is_no_run_is_refused(tmp_path):
    with pytest.raises(RunFolderError):
        load_content(tmp_path)


def test_a_table_that_cannot_be_read_is_named(folder):
    path, _ = folder
    (path / runs.SCALES).write_bytes(b"")
    with pytest.raises(RunFolderError, match=r"scales\.csv"):
        load_content(path)
