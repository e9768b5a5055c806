"""The command line: every exit code, one object in JSON mode, nothing written on bad input."""

from __future__ import annotations

import csv
import hashlib
import json
import os
import shutil
import signal
import subprocess
import sys
import time
from collections.abc import Callable
from pathlib import Path
from typing import Any

import pytest

from bayes_sys import cli, display, job
from bayes_sys.errors import SamplingError
from bayes_sys.shipped import case_study

ROOT = Path(__file__).parents[1]
ALWAYS = {"status", "out", "gate", "messages"}
FAST = ["--chains", "2", "--warmup", "50", "--draws", "10"]
COMMANDS = ["examine", "run", "demo", "report", "cards"]

Execute = Callable[..., "Said"]


class Said:
    """What a command line left behind: exit code and the two streams."""

    def __init__(self, code: int, out: str, err: str) -> None:
        self.code, self.out, self.err = code, out, err

    @property
    def last(self) -> str:
        return self.out.splitlines()[-1]

    @property
    def json(self) -> dict[str, Any]:
        """The one object on standard output; fails on anything else, NaN included."""

        def refuse(constant: str) -> None:
            raise AssertionError(f"{constant} is not JSON")

        assert self.out.count("\n") == 1
        content = json.loads(self.out, parse_constant=refuse)
        assert content.keys() >= ALWAYS
        assert all(isinstance(message, str) for message in content["messages"])
        return dict(content)


@pytest.fixture
def call(tmp_path: Path, monkeypatch: pytest.MonkeyPatch, capsys: pytest.CaptureFixture[str]) -> Execute:
    """Carry out a command line in an empty working folder."""
    monkeypatch.chdir(tmp_path)
    monkeypatch.delenv(cli.DEBUG, raising=False)

    def execute(*arguments: object) -> Said:
        code = cli.execute([str(a) for a in arguments])
        said = capsys.readouterr()
        return Said(code, said.out, said.err)

    return execute


@pytest.fixture
def study(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """A copy of the demo case, in a folder that is not the working folder."""
    folder = tmp_path_factory.mktemp("case") / "water"
    shutil.copytree(case_study("district_water"), folder)
    return folder / "study.toml"


@pytest.fixture(scope="module")
def finished(tmp_path_factory: pytest.TempPathFactory) -> tuple[Path, Said]:
    """The demo, run once for all who only look at it."""
    place = tmp_path_factory.mktemp("finished") / "run"
    done = subprocess.run(
        [
            sys.executable,
            "-m",
            "bayes_sys",
            "run",
            str(case_study("district_water") / "study.toml"),
            "--out",
            place,
        ],
        capture_output=True,
        text=True,
        env={**os.environ, "PYTHONPATH": str(ROOT)},
    )
    return place, Said(done.returncode, done.stdout, done.stderr)


def edit(path: Path, old: str, new: str) -> None:
    text = path.read_text(encoding="utf-8")
    assert old in text
    path.write_text(text.replace(old, new), encoding="utf-8")


# A whole run


def test_a_run_ends_with_its_folder_and_says_nothing_on_standard_error(finished: tuple[Path, Said]) -> None:
    place, said = finished
    assert said.code == 0, said.err
    assert said.err == ""
    assert said.last == str(place)
    assert f"Page: {place / 'report.html'}" in said.out
    assert "passed the gate" in said.out and "NOT" not in said.out
    assert "Caution" in said.out


def test_a_run_folder_holds_every_file_of_the_contract(finished: tuple[Path, Said]) -> None:
    names = (
        "manifest.json study.toml prior.toml examination.json benchmark.csv coefficients.csv scales.csv "
        "correlations.csv fitted.csv equations.csv checks.csv pooled.csv posterior.nc report.html"
    )
    assert sorted(p.name for p in finished[0].iterdir()) == sorted(names.split())


@pytest.mark.parametrize(
    ("name", "columns"),
    [
        ("benchmark", "equation, regressor, ols, ols_se, fgls, fgls_se, iterated, iterated_se"),
        (
            "coefficients",
            "equation, regressor, n, mean, sd, q5, q50, q95, prob_positive, prior_mean, prior_sd, ols, fgls, "
            "fgls_se, shrinkage, moved_se, rhat, ess_bulk, ess_tail",
        ),
        ("scales", "equation, mean, sd, q5, q50, q95, fgls, rhat, ess_bulk, ess_tail"),
        (
            "correlations",
            "equation_a, equation_b, mean, sd, q5, q50, q95, prob_positive, fgls, rhat, ess_bulk, ess_tail",
        ),
        ("fitted", "period, equation, observed, mean, q5, q95, residual"),
        ("equations", "equation, n, r2_mean, r2_q5, r2_q95"),
    ],
)
def test_the_columns_are_those_of_the_contract(finished: tuple[Path, Said], name: str, columns: str) -> None:
    with (finished[0] / f"{name}.csv").open(encoding="utf-8", newline="") as file:
        assert next(csv.reader(file)) == columns.split(", ")


def test_the_manifest_says_what_a_repetition_needs(finished: tuple[Path, Said]) -> None:
    place = finished[0]
    manifest = json.loads((place / "manifest.json").read_text(encoding="utf-8"))
    source = case_study("district_water")
    assert manifest["status"] == "complete"
    assert (manifest["seed"], manifest["chains"], manifest["warmup"], manifest["draws"]) == (1, 4, 1000, 1000)
    assert manifest["engine"] == "direct" and manifest["attempts"] == 1
    assert manifest["command"].startswith("bayes-sys run ")
    assert manifest["study_sha256"] == hashlib.sha256((source / "study.toml").read_bytes()).hexdigest()
    assert manifest["data_sha256"] == {
        "demand.csv": hashlib.sha256((source / "demand.csv").read_bytes()).hexdigest()
    }
    assert (place / "study.toml").read_bytes() == (source / "study.toml").read_bytes()
    assert manifest["versions"].keys() >= {"python", "bayes_sys", "numpy", "pymc", "nutpie", "numba", "arviz"}
    assert manifest["timings"].keys() == {"read", "examine", "sample", "tables", "page", "total"}
    parts = [seconds for name, seconds in manifest["timings"].items() if name != "total"]
    assert sum(parts) == pytest.approx(manifest["timings"]["total"], abs=0.1)
    assert manifest["card"]["name"] == "pooled" and manifest["prior_words"]
    assert "iterated" in manifest["reasons"]


def test_the_manifest_holds_the_gate(finished: tuple[Path, Said]) -> None:
    gate = json.loads((finished[0] / "manifest.json").read_text(encoding="utf-8"))["gate"]
    assert gate["passed"] is True and gate["failures"] == [] and gate["advice"] == []
    assert gate["limits"] == {"rhat": 1.01, "ess": 1000, "divergences": 0}
    assert gate["rhat_max"] <= 1.01 and gate["divergences"] == 0
    assert min(gate["ess_bulk_min"], gate["ess_tail_min"]) >= 1000
    assert gate["bfmi_min"] > 0.3


def test_the_effective_card_reproduces_the_run(
    finished: tuple[Path, Said], call: Execute, study: Path
) -> None:
    shutil.copy(finished[0] / "prior.toml", study.parent / "prior.toml")
    edit(study, 'card = "pooled"', 'card = "prior.toml"')
    assert call("run", study, "--out", "again", "--quiet").code == 0

    def means(place: Path) -> list[float]:
        with (place / "coefficients.csv").open(encoding="utf-8", newline="") as file:
            return [float(row["mean"]) for row in csv.DictReader(file)]

    # The same draws up to the rounding of the card's way to the raw scale and back.
    assert means(Path("again")) == pytest.approx(means(finished[0]), rel=1e-6)


def test_a_page_is_not_made_of_a_run_that_lacks_a_table(finished: tuple[Path, Said], call: Execute) -> None:
    shutil.copytree(finished[0], "run")
    Path("run/pooled.csv").unlink()
    said = call("report", "run")
    assert said.code == 2 and "pooled.csv" in said.err and "bayes-sys run" in said.err


def test_the_page_is_made_again_and_nothing_else_is_touched(
    finished: tuple[Path, Said], call: Execute
) -> None:
    shutil.copytree(finished[0], "run")
    before = {p.name: p.read_bytes() for p in Path("run").iterdir()}
    Path("run/report.html").unlink()
    said = call("report", "run")
    assert said.code == 0
    assert said.last == str(Path("run/report.html"))
    assert {p.name: p.read_bytes() for p in Path("run").iterdir()} == before


def test_reporting_on_a_run_answers_in_json(finished: tuple[Path, Said], call: Execute) -> None:
    shutil.copytree(finished[0], "run")
    answer = call("report", "run", "--json").json
    assert answer["status"] == "complete" and answer["out"] == str(Path("run/report.html"))
    assert answer["gate"]["passed"] is True


# A gate that is not passed


def test_a_failed_gate_is_exit_3_with_everything_written_marked_and_explained(
    call: Execute, study: Path
) -> None:
    said = call("run", study, *FAST)
    place = Path("runs/study")
    assert said.code == 3
    assert "did NOT pass the gate" in said.out and "--draws" in said.out
    assert not any(head in said.out for head in ("FGLS", "Correlation of the errors", "Caution"))
    assert f"Marked as not to be used: {place}" in said.out
    assert said.last == str(place)
    mark = (place / "NOT-TO-BE-USED.txt").read_text()
    manifest = json.loads((place / "manifest.json").read_text())
    assert manifest["status"] == "gate-failed"
    assert manifest["attempts"] == 2 and manifest["draws"] > 10
    assert manifest["gate"]["failures"] and manifest["gate"]["advice"]
    assert all(text in mark for text in (*manifest["gate"]["failures"], *manifest["gate"]["advice"]))
    assert (place / "report.html").exists() and (place / "posterior.nc").exists()

    answer = call("run", study, *FAST, "--overwrite", "--json")
    assert answer.code == 3
    assert answer.json["status"] == "gate-failed" and answer.json["gate"]["passed"] is False
    assert answer.json["out"] == str(place) and answer.json["messages"]

    refused = call("run", study, *FAST)
    assert refused.code == 2 and "--overwrite" in refused.err
    again = call("report", place)
    assert again.code == 3 and again.err == display.gate_line(manifest["gate"]) + "\n"


def test_a_run_that_is_redone_and_passes_carries_no_mark_of_the_one_that_failed(
    call: Execute, study: Path
) -> None:
    assert call("run", study, *FAST).code == 3
    assert call("run", study, "--overwrite").code == 0
    assert not Path("runs/study/NOT-TO-BE-USED.txt").exists()


def test_settings_on_the_command_line_win_over_the_study(call: Execute, study: Path) -> None:
    call("run", study, *FAST, "--seed", 77, "--out", "here", "--quiet")
    manifest = json.loads(Path("here/manifest.json").read_text())
    assert (manifest["seed"], manifest["chains"]) == (77, 2)


def test_quiet_says_only_the_path_and_in_one_line_that_the_gate_was_not_passed(
    call: Execute, study: Path
) -> None:
    said = call("run", study, *FAST, "--quiet", "--out", "here")
    assert said.code == 3 and said.out == "here\n"
    assert said.err.startswith("The posterior did not pass the gate") and said.err.count("\n") == 1
    found = call("examine", study, "--quiet", "--out", "found")
    assert (found.out, found.err) == ("found\n", "")


def test_the_demo_goes_to_its_own_place_and_is_not_replaced_by_itself(call: Execute) -> None:
    assert call("demo", *FAST).last == "bayes-sys-demo"
    again = call("demo", *FAST)
    assert again.code == 2 and "--overwrite" in again.err
    assert call("demo", *FAST, "--overwrite").code == 3


# Wrong input


def no_such_regressor(study: Path) -> list[object]:
    edit(study, '"log_tariff", "heat"', '"log_tarif", "heat"')
    return ["run", study]


def no_such_key(study: Path) -> list[object]:
    edit(study, "chains = 4", "chain = 4")
    return ["run", study]


def no_such_card(study: Path) -> list[object]:
    edit(study, 'card = "pooled"', 'card = "pooledd"')
    return ["run", study]


def not_built(study: Path) -> list[object]:
    edit(study, 'autocorrelation = "none"', 'autocorrelation = "ar1"')
    return ["run", study]


def no_data(study: Path) -> list[object]:
    (study.parent / "demand.csv").unlink()
    return ["run", study]


def not_toml(study: Path) -> list[object]:
    study.write_text("title = water")
    return ["run", study]


def two_studies(study: Path) -> list[object]:
    return ["run", study, study]


def file_in_the_way(study: Path) -> list[object]:
    return ["run", study, "--out", study]


WRONG: list[tuple[str, Callable[[Path], list[object]], str]] = [
    ("no study", lambda s: ["run", s.parent / "nothing.toml"], "nothing.toml"),
    ("a folder", lambda s: ["run", s.parent], "folder"),
    ("not TOML", not_toml, "study.toml"),
    ("unknown key", no_such_key, "chains"),
    ("unknown regressor", no_such_regressor, "log_tariff"),
    ("unknown card", no_such_card, "pooled"),
    ("not built yet", not_built, "ar1"),
    ("no data", no_data, "demand.csv"),
    ("one chain", lambda s: ["run", s, "--chains", 1], "chains"),
    ("few draws", lambda s: ["run", s, "--draws", 2], "draws"),
    ("negative seed", lambda s: ["run", s, "--seed", -1], "seed"),
    ("seed of letters", lambda s: ["run", s, "--seed", "x"], "--seed"),
    ("unknown engine", lambda s: ["run", s, "--engine", "steam"], "direct"),
    ("unknown option", lambda s: ["run", s, "--chian", 4], "--chains"),
    ("two studies", two_studies, "one STUDY at a time"),
    ("overwrite what is not written", lambda s: ["examine", s, "--overwrite"], "--out"),
    ("a demo of something", lambda s: ["demo", s], "options only"),
    ("unknown command", lambda s: ["rnu", s], "run"),
    ("no study named", lambda s: ["run"], "STUDY"),
    ("a file in the way", file_in_the_way, "file"),
    ("examine no study", lambda s: ["examine", s.parent / "nothing.toml"], "nothing.toml"),
    ("report on nothing", lambda s: ["report", s.parent / "nothing"], "nothing"),
    ("report on another folder", lambda s: ["report", s.parent], "manifest.json"),
    ("no such card", lambda s: ["cards", "pooledd"], "pooled"),
]


@pytest.mark.parametrize(("make", "hint"), [w[1:] for w in WRONG], ids=[w[0] for w in WRONG])
@pytest.mark.parametrize("as_json", [False, True], ids=["text", "json"])
def test_wrong_input_is_exit_2_with_one_message_and_nothing_written(
    call: Execute, study: Path, make: Callable[[Path], list[object]], hint: str, as_json: bool, tmp_path: Path
) -> None:
    arguments = make(study)
    before = sorted(study.parent.iterdir())
    said = call(*arguments, *(["--json"] if as_json else []))
    assert said.code == 2
    if as_json:
        answer = said.json
        assert answer["status"] == "input-error" and answer["out"] is None and answer["gate"] is None
        (message,) = answer["messages"]
        assert said.err == ""
    else:
        assert said.out == "" and said.err.startswith("Error: ")
        message = said.err.strip()
    assert hint in message and "\n" not in message and "Traceback" not in message
    assert list(tmp_path.iterdir()) == []
    assert sorted(study.parent.iterdir()) == before


def test_a_finished_run_is_refused_before_anything_is_read(
    finished: tuple[Path, Said], call: Execute, study: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    shutil.copytree(finished[0], "run")
    before = {p.name: p.stat().st_mtime_ns for p in Path("run").iterdir()}
    monkeypatch.setattr(job, "read_study", lambda path: pytest.fail("the study must not be read"))
    said = call("run", study, "--out", "run", "--json")
    assert said.code == 2 and "--overwrite" in said.json["messages"][0]
    assert {p.name: p.stat().st_mtime_ns for p in Path("run").iterdir()} == before


# Anything else


@pytest.mark.parametrize("as_json", [False, True], ids=["text", "json"])
@pytest.mark.parametrize(
    ("fault", "status", "message"),
    [
        (SamplingError("The sampler could not start."), "error", "The sampler could not start."),
        (ValueError("array too odd\nmore"), "error", "Unexpected ValueError: array too odd."),
        (ZeroDivisionError(), "error", "Unexpected ZeroDivisionError: no message."),
        (KeyboardInterrupt(), "interrupted", "Interrupted."),
    ],
)
def test_a_fault_while_sampling_is_exit_1_and_leaves_a_marked_folder(
    call: Execute,
    study: Path,
    monkeypatch: pytest.MonkeyPatch,
    fault: BaseException,
    status: str,
    message: str,
    as_json: bool,
) -> None:
    def fail(*arguments: object) -> None:
        raise fault

    monkeypatch.setattr(job, "sample", fail)
    said = call("run", study, "--out", "run", *(["--json"] if as_json else []))
    assert said.code == 1
    if as_json:
        assert said.json["status"] == status and message in said.json["messages"][0]
        assert said.err == ""
    else:
        assert said.out == "" and message in said.err and said.err.count("\n") == 1
    assert sorted(p.name for p in Path("run").iterdir()) == sorted(
        ["manifest.json", "study.toml", "prior.toml", "examination.json", "benchmark.csv"]
    )
    assert json.loads(Path("run/manifest.json").read_text())["status"] == "incomplete"
    report = call("report", "run")
    assert report.code == 2 and "not finished" in report.err and "bayes-sys run" in report.err


def test_an_incomplete_run_is_redone_by_the_same_command(
    call: Execute, study: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    with monkeypatch.context() as patch:
        patch.setattr(job, "sample", lambda *a: (_ for _ in ()).throw(KeyboardInterrupt))
        assert call("run", study, *FAST).code == 1
    assert call("run", study, *FAST).code == 3
    assert json.loads(Path("runs/study/manifest.json").read_text())["status"] == "gate-failed"


def test_an_unexpected_fault_shows_where_only_when_asked(
    call: Execute, study: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    def fail(*arguments: object) -> None:
        raise ValueError("odd")

    monkeypatch.setattr(job, "build_system", fail)
    assert "Traceback" not in call("examine", study).err
    monkeypatch.setenv(cli.DEBUG, "1")
    assert "Traceback" in call("examine", study).err


def test_in_json_mode_what_a_library_prints_does_not_reach_standard_output(
    call: Execute, study: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    build = job.build_system

    def chatty(study: Any) -> Any:
        print("a library says hello")
        return build(study)

    monkeypatch.setattr(job, "build_system", chatty)
    assert call("examine", study, "--json").json["status"] == "complete"


@pytest.mark.skipif(sys.platform == "win32", reason="sends a POSIX signal")
def test_an_interrupt_while_sampling_is_one_line_and_leaves_a_marked_folder(
    study: Path, tmp_path: Path
) -> None:
    place = tmp_path / "run"
    arguments = ["run", str(study), "--out", str(place), "--draws", "2000000"]
    process = subprocess.Popen(
        [sys.executable, "-m", "bayes_sys", *arguments],
        stdout=subprocess.PIPE,
        stderr=subprocess.PIPE,
        text=True,
        env={**os.environ, "PYTHONPATH": str(ROOT)},
    )
    deadline = time.monotonic() + 120
    while not (place / "benchmark.csv").exists() and time.monotonic() < deadline and process.poll() is None:
        time.sleep(0.1)
    time.sleep(4)
    assert process.poll() is None
    process.send_signal(signal.SIGINT)
    out, err = process.communicate(timeout=60)
    assert process.returncode == 1
    assert out == "" and err == cli.INTERRUPTED + "\n"
    assert json.loads((place / "manifest.json").read_text())["status"] == "incomplete"
    assert not (place / "run.lock").exists()


@pytest.mark.skipif(not Path("/dev/full").exists(), reason="needs a device that is always full")
@pytest.mark.parametrize("more", [[], ["--json"], ["--help"]])
def test_output_that_cannot_be_written_is_one_line_and_exit_1(study: Path, more: list[str]) -> None:
    with Path("/dev/full").open("w") as full:
        done = subprocess.run(
            [sys.executable, "-m", "bayes_sys", "examine", str(study), *more],
            stdout=full,
            stderr=subprocess.PIPE,
            text=True,
            env={**os.environ, "PYTHONPATH": str(ROOT)},
        )
    assert done.returncode == 1
    assert done.stderr.startswith("Error: standard output cannot be written") and done.stderr.count("\n") == 1


# Examine, cards, help


def test_examine_writes_nothing_and_says_so(call: Execute, study: Path, tmp_path: Path) -> None:
    said = call("examine", study)
    assert said.code == 0 and said.err == ""
    assert "Nothing was written" in said.last
    assert "log_connections" in said.out and "The system as a whole" in said.out
    assert list(tmp_path.iterdir()) == []


def test_examine_keeps_its_findings_where_told(call: Execute, study: Path) -> None:
    assert call("examine", study, "--out", "found").last == "found"
    assert sorted(p.name for p in Path("found").iterdir()) == ["benchmark.csv", "examination.json"]
    rows = json.loads(Path("found/examination.json").read_text())
    assert rows and all(
        row.keys() == {"name", "equation", "figure", "threshold", "verdict", "sentence"} for row in rows
    )
    assert call("examine", study, "--out", "found").code == 2
    assert call("examine", study, "--out", "found", "--overwrite").code == 0


def test_examine_gives_checks_and_benchmark_in_json(call: Execute, study: Path) -> None:
    answer = call("examine", study, "--json").json
    assert answer["status"] == "complete" and answer["out"] is None and answer["gate"] is None
    assert {row["equation"] for row in answer["benchmark"]} == {
        row["equation"] for row in answer["checks"]
    } - {""}


def test_cards_are_listed_and_explained(call: Execute) -> None:
    listed = call("cards")
    assert listed.code == 0
    assert all(name in listed.out for name in ("vague", "weakly-informative", "pooled"))
    explained = call("cards", "pooled")
    assert "share" in explained.out and 'family = "pooled"' in explained.out
    answer = call("cards", "pooled", "--json").json
    assert answer["card"]["name"] == "pooled" and answer["card"]["words"]
    assert {card["name"] for card in call("cards", "--json").json["cards"]} >= {"vague", "pooled"}


def test_a_card_of_ones_own_is_explained_by_its_path(call: Execute, finished: tuple[Path, Said]) -> None:
    said = call("cards", finished[0] / "prior.toml")
    assert said.code == 0 and "scaled = false" in said.out


@pytest.mark.parametrize("command", COMMANDS)
def test_every_command_has_help(call: Execute, command: str) -> None:
    said = call(command, "--help")
    assert said.code == 0 and said.out.startswith("usage: bayes-sys") and said.err == ""
    assert call(command, "--help", "--quiet").out == said.out
    answer = call(command, "--help", "--json").json
    assert answer["status"] == "complete" and answer["messages"][0].startswith("usage: bayes-sys")


def test_without_a_command_the_help_is_shown_with_what_is_built_and_nothing_more(call: Execute) -> None:
    said = call()
    assert said.code == 0
    shown = said.out.split("COMMAND\n")[1].split("\n\n")[0]
    assert [line.split()[0] for line in shown.splitlines()] == COMMANDS
    assert call("--help").out == said.out


# Progress


@pytest.mark.skipif(sys.platform == "win32", reason="needs a pseudo-terminal")
@pytest.mark.parametrize("quiet", [False, True])
def test_progress_goes_to_a_terminal_on_standard_error_unless_quiet(study: Path, quiet: bool) -> None:
    import pty

    ours, theirs = pty.openpty()
    arguments = ["examine", str(study), *(["--quiet"] if quiet else [])]
    with subprocess.Popen(
        [sys.executable, "-m", "bayes_sys", *arguments],
        stdout=subprocess.PIPE,
        stderr=theirs,
        env={**os.environ, "PYTHONPATH": str(ROOT), "TERM": "xterm", "COLUMNS": "100"},
    ) as process:
        os.close(theirs)
        shown = b""
        while True:
            try:
                piece = os.read(ours, 10_000)
            except OSError:
                break
            if not piece:
                break
            shown += piece
        out = process.communicate()[0].decode()
    os.close(ours)
    assert process.returncode == 0
    assert ("Reading study and data" in shown.decode()) is not quiet
    assert "Reading study and data" not in out
