"""The run folder: whole files, marked states, nothing of others touched, one message for every trouble."""

from __future__ import annotations

import csv
import errno
import json
import math
import os
import subprocess
import sys
from pathlib import Path
from typing import Any

import numpy as np
import pandas as pd
import pytest
import xarray as xr

from bayes_sys import disk, runs
from bayes_sys.errors import RunFolderError
from bayes_sys.runs import RunFolder, begin_run, check_place, default_place, open_run

MANIFEST: dict[str, Any] = {"title": "A study", "versions": {"bayes_sys": "0"}}


def finish(place: Path, status: str = runs.COMPLETE, **more: object) -> RunFolder:
    """Write a small run that ended with this status."""
    with begin_run(place, manifest=MANIFEST, overwrite=True) as run:
        run.write_text(runs.STUDY, "title = 'A study'\n")
        run.write_json(runs.MANIFEST, {**MANIFEST, **more, "status": status})
    return run


def contents(place: Path) -> dict[str, bytes]:
    return {str(p.relative_to(place)): p.read_bytes() for p in place.rglob("*") if p.is_file()}


# Writing


def test_a_table_keeps_every_digit_and_leaves_missing_cells_empty(tmp_path: Path) -> None:
    values = [0.1 + 0.2, 1 / 3, 1e-300, -12345678.901234567, float("nan")]
    RunFolder(tmp_path).write_table("t.csv", pd.DataFrame({"unit": [*"abcd", "Zürich, Süd"], "x": values}))
    text = (tmp_path / "t.csv").read_bytes().decode("utf-8")
    assert text.splitlines()[1] == "a,0.30000000000000004"
    assert text.splitlines()[5] == '"Zürich, Süd",'
    with (tmp_path / "t.csv").open(encoding="utf-8", newline="") as file:
        back = [float(row["x"] or "nan") for row in csv.DictReader(file)]
    np.testing.assert_array_equal(back, values)


def test_json_is_sorted_and_never_holds_nan(tmp_path: Path) -> None:
    RunFolder(tmp_path).write_json(
        "a.json",
        {
            "b": np.float64("nan"),
            "a": [np.int64(3), np.inf, True, None],
            "c": np.array([1.5, np.nan]),
            "d": Path("x"),
        },
    )
    text = (tmp_path / "a.json").read_text()

    def refuse(constant: str) -> None:
        raise AssertionError(f"{constant} is not JSON")

    content = json.loads(text, parse_constant=refuse)
    assert content == {"a": [3, None, True, None], "b": None, "c": [1.5, None], "d": "x"}
    assert text.index('"a"') < text.index('"b"') < text.index('"c"')


def test_text_is_written_exactly_with_its_line_ends(tmp_path: Path) -> None:
    RunFolder(tmp_path).write_text("a.txt", "é\r\nb\n")
    assert (tmp_path / "a.txt").read_bytes() == b"\xc3\xa9\r\nb\n"


def test_the_draws_come_back_with_groups_and_attributes(tmp_path: Path) -> None:
    draws = xr.Dataset({"x": (("chain", "draw"), np.arange(6.0).reshape(2, 3))}, attrs={"seed": 7})
    RunFolder(tmp_path).write_posterior(xr.DataTree.from_dict({"posterior": draws}))
    with xr.open_datatree(tmp_path / runs.POSTERIOR, engine="h5netcdf") as back:
        np.testing.assert_array_equal(back["posterior"]["x"], draws["x"])
        assert back["posterior"].attrs["seed"] == 7
    assert sorted(contents(tmp_path)) == [runs.POSTERIOR]


def test_a_write_that_fails_leaves_the_old_file_whole_and_no_scratch(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    run = RunFolder(tmp_path)
    run.write_text("a.txt", "old")

    def full(descriptor: int) -> None:
        raise OSError(errno.ENOSPC, os.strerror(errno.ENOSPC))

    monkeypatch.setattr(disk.os, "fsync", full)
    with pytest.raises(RunFolderError, match="disk or the quota is full"):
        run.write_text("a.txt", "new")
    assert contents(tmp_path) == {"a.txt": b"old"}


@pytest.mark.skipif(sys.platform == "win32", reason="uses a limit of the POSIX kernel")
def test_a_limit_the_kernel_sets_gives_one_message_for_text_and_for_draws(tmp_path: Path) -> None:
    program = """
import resource, signal, sys
import numpy as np, xarray as xr
from bayes_sys.errors import RunFolderError
from bayes_sys.runs import RunFolder
from pathlib import Path
import h5netcdf
run = RunFolder(Path(sys.argv[1]))
draws = np.random.default_rng(1).random((4, 9000))
tree = xr.DataTree.from_dict({"posterior": xr.Dataset({"x": (("chain", "draw"), draws)})})
signal.signal(signal.SIGXFSZ, signal.SIG_IGN)
resource.setrlimit(resource.RLIMIT_FSIZE, (50_000, 50_000))
for write in (lambda: run.write_text("a.txt", "x" * 100_000), lambda: run.write_posterior(tree)):
    try:
        write()
        print("no error")
    except RunFolderError as error:
        print(error)
"""
    done = subprocess.run([sys.executable, "-c", program, str(tmp_path)], capture_output=True, text=True)
    lines = done.stdout.strip().splitlines()
    assert len(lines) == 2, done.stderr
    assert "disk or the quota is full" in lines[0]
    assert "posterior.nc" in lines[1] and "disk or the quota is full" in lines[1]
    assert done.stderr == ""
    assert contents(tmp_path) == {}


# States


def test_a_run_starts_marked_as_incomplete(tmp_path: Path) -> None:
    with begin_run(tmp_path / "run", manifest=MANIFEST) as run:
        assert open_run(tmp_path / "run").manifest()["status"] == runs.INCOMPLETE
        assert run.manifest()["title"] == "A study"


def test_a_run_that_breaks_off_stays_incomplete_and_is_redone_without_asking(tmp_path: Path) -> None:
    with pytest.raises(KeyboardInterrupt), begin_run(tmp_path / "run", manifest=MANIFEST) as run:
        run.write_text(runs.PRIOR, "half way")
        raise KeyboardInterrupt
    assert open_run(tmp_path / "run").manifest()["status"] == runs.INCOMPLETE
    assert not (tmp_path / "run" / disk.LOCK).exists()
    with begin_run(tmp_path / "run", manifest=MANIFEST):
        assert sorted(p.name for p in (tmp_path / "run").iterdir()) == sorted([runs.MANIFEST, disk.LOCK])


@pytest.mark.parametrize("status", [runs.COMPLETE, runs.GATE_FAILED])
def test_a_finished_run_is_refused_without_overwrite_and_not_touched(tmp_path: Path, status: str) -> None:
    finish(tmp_path / "run", status)
    before = contents(tmp_path / "run")
    with pytest.raises(RunFolderError, match="--overwrite"), begin_run(tmp_path / "run", manifest=MANIFEST):
        raise AssertionError("must not get here")
    assert contents(tmp_path / "run") == before


def test_overwriting_leaves_nothing_of_the_old_run_and_keeps_what_is_not_ours(tmp_path: Path) -> None:
    place = tmp_path / "run"
    finish(place)
    for name in (
        *runs.RESULT_FILES,
        "forecast/a.csv",
        "comparison/b.csv",
        ".writing-1-x.csv",
        "my notes.txt",
    ):
        (place / name).parent.mkdir(exist_ok=True)
        (place / name).write_text("old")
    with begin_run(place, manifest=MANIFEST, overwrite=True):
        assert sorted(contents(place)) == sorted([runs.MANIFEST, disk.LOCK, "my notes.txt"])


def test_no_sooner_is_the_old_run_cleared_than_it_stops_saying_complete(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    finish(tmp_path / "run")

    def crash(place: Path) -> None:
        raise KeyboardInterrupt

    monkeypatch.setattr(runs, "_clear", crash)
    with pytest.raises(KeyboardInterrupt), begin_run(tmp_path / "run", manifest=MANIFEST, overwrite=True):
        pass
    assert open_run(tmp_path / "run").manifest()["status"] == runs.INCOMPLETE


def test_an_interrupt_before_the_manifest_leaves_no_folder(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    def interrupt(*arguments: object) -> None:
        raise KeyboardInterrupt

    monkeypatch.setattr(RunFolder, "write_json", interrupt)
    with pytest.raises(KeyboardInterrupt), begin_run(tmp_path / "run", manifest=MANIFEST):
        pass
    assert list(tmp_path.iterdir()) == []


# Places


def test_the_default_place_is_named_after_the_study_file() -> None:
    assert default_place("some/where/water.toml") == Path("runs/water")


def test_checking_a_place_makes_nothing(tmp_path: Path) -> None:
    check_place(tmp_path / "a" / "b")
    assert list(tmp_path.iterdir()) == []


def test_an_empty_folder_and_a_new_one_are_both_fine(tmp_path: Path) -> None:
    (tmp_path / "empty").mkdir()
    for name in ("empty", "new/deeper"):
        with begin_run(tmp_path / name, manifest=MANIFEST):
            pass
        assert open_run(tmp_path / name)


@pytest.mark.parametrize("overwrite", [False, True])
def test_a_folder_of_somebody_else_is_refused_even_with_overwrite(tmp_path: Path, overwrite: bool) -> None:
    (tmp_path / "thesis.txt").write_text("years of work")
    with pytest.raises(RunFolderError, match=r"thesis\.txt.*not a run folder"):
        check_place(tmp_path, overwrite=overwrite)
    assert contents(tmp_path) == {"thesis.txt": b"years of work"}


@pytest.mark.parametrize("content", ["{}", "not json", '{"status": "complete"}', "[]"])
def test_a_manifest_of_another_program_does_not_make_a_run_folder(tmp_path: Path, content: str) -> None:
    (tmp_path / runs.MANIFEST).write_text(content)
    with pytest.raises(RunFolderError):
        check_place(tmp_path, overwrite=True)
    with pytest.raises(RunFolderError, match=r"manifest\.json"):
        open_run(tmp_path)


@pytest.mark.parametrize("place", ["file", "file/below"])
def test_a_file_in_the_way_is_named(tmp_path: Path, place: str) -> None:
    (tmp_path / "file").write_text("x")
    with pytest.raises(RunFolderError, match=r"a file stands where a folder is needed.*file.*Move"):
        check_place(tmp_path / place)


def test_a_place_without_permission_gives_one_message(tmp_path: Path) -> None:
    locked = tmp_path / "locked"
    locked.mkdir(mode=0o555)
    check_place(tmp_path / "warm")
    root = hasattr(os, "geteuid") and os.geteuid() == 0
    if root:
        # Root may write anywhere: be somebody else for the call. The way to the folder must be open to them.
        for folder in (tmp_path, *tmp_path.parents[:2]):
            folder.chmod(0o755)
        os.seteuid(65534)
    try:
        for place in (locked, locked / "run"):
            with pytest.raises(RunFolderError, match=r"no permission.*--out"):
                check_place(place)
            with pytest.raises(RunFolderError, match="no permission"), begin_run(place, manifest=MANIFEST):
                pass
    finally:
        if root:
            os.seteuid(0)
    assert list(locked.iterdir()) == []


# Opening


@pytest.mark.parametrize(
    ("make", "message"),
    [
        (lambda p: None, "no such folder"),
        (lambda p: p.write_text("x"), "this is a file"),
        (lambda p: p.mkdir(), r"not a run folder: it has no manifest\.json"),
    ],
)
def test_what_is_not_a_run_folder_is_said_clearly(tmp_path: Path, make: Any, message: str) -> None:
    make(tmp_path / "x")
    with pytest.raises(RunFolderError, match=message):
        open_run(tmp_path / "x")


def test_a_missing_file_of_a_run_is_named(tmp_path: Path) -> None:
    with pytest.raises(RunFolderError, match=r"examination\.json: there is no such file"):
        finish(tmp_path / "run").read_json(runs.EXAMINATION)


# Two at once


def test_a_second_run_at_the_same_time_is_refused_and_touches_nothing(tmp_path: Path) -> None:
    with begin_run(tmp_path / "run", manifest=MANIFEST) as run:
        run.write_text(runs.STUDY, "first")
        with (
            pytest.raises(RunFolderError, match="another run is writing here"),
            begin_run(tmp_path / "run", manifest=MANIFEST),
        ):
            pass
        assert (tmp_path / "run" / runs.STUDY).read_text() == "first"
        assert (tmp_path / "run" / disk.LOCK).exists()


def test_the_lock_of_a_process_that_is_gone_is_taken_over(tmp_path: Path) -> None:
    gone = subprocess.run(
        [
            sys.executable,
            "-c",
            "import os, socket, json; print(json.dumps({'pid': os.getpid(), 'host': socket.gethostname()}))",
        ],
        capture_output=True,
        text=True,
        check=True,
    )
    (tmp_path / disk.LOCK).write_text(gone.stdout)
    with begin_run(tmp_path, manifest=MANIFEST) as run:
        assert run.manifest()["status"] == runs.INCOMPLETE


@pytest.mark.parametrize("content", ["", '{"pid": 1, "host": "another machine"}'])
def test_a_lock_nobody_can_judge_is_left_to_the_user(tmp_path: Path, content: str) -> None:
    (tmp_path / disk.LOCK).write_text(content)
    with (
        pytest.raises(RunFolderError, match=r"delete run\.lock"),
        begin_run(tmp_path, manifest=MANIFEST),
    ):
        pass


# The examination alone


def test_an_examination_is_written_alone_and_replaced_only_when_told(tmp_path: Path) -> None:
    table = pd.DataFrame({"equation": ["a"], "ols": [math.pi]})
    runs.save_examination(tmp_path / "x", checks=[{"name": "c"}], benchmark=table)
    assert sorted(contents(tmp_path / "x")) == ["benchmark.csv", "examination.json"]
    with pytest.raises(RunFolderError, match="--overwrite"):
        runs.save_examination(tmp_path / "x", checks=[], benchmark=table)
    runs.save_examination(tmp_path / "x", checks=[], benchmark=table, overwrite=True)
    assert json.loads((tmp_path / "x" / "examination.json").read_text()) == []


def test_an_examination_never_goes_into_a_run(tmp_path: Path) -> None:
    finish(tmp_path / "run")
    before = contents(tmp_path / "run")
    with pytest.raises(RunFolderError, match="folder of a run"):
        runs.save_examination(tmp_path / "run", checks=[], benchmark=pd.DataFrame(), overwrite=True)
    assert contents(tmp_path / "run") == before


def test_hashes_are_the_standard_ones(tmp_path: Path) -> None:
    # FIPS 180-4 example "abc" (from memory; also printed by every sha256sum).
    known = "ba7816bf8f01cfea414140de5dae2223b00361a396177a9cb410ff61f20015ad"
    (tmp_path / "f").write_bytes(b"abc")
    assert runs.sha256(b"abc") == runs.sha256(tmp_path / "f") == known


@pytest.mark.skipif(not Path("/proc").is_dir(), reason="needs a file system that takes no folders")
def test_a_place_where_nothing_can_be_made_asks_for_another_place() -> None:
    with (
        pytest.raises(RunFolderError, match=r"/proc/nothing: .*Name (another|a) place"),
        begin_run("/proc/nothing", manifest=MANIFEST),
    ):
        pass
