"""The command line: parse, call the job, print. It alone talks to the terminal and knows exit codes.

Exit codes: 0 done; 2 the input is wrong; 3 the posterior did not pass the gate; 1 anything else.
"""

from __future__ import annotations

import io
import json
import os
import shlex
import sys
import traceback
import warnings
from collections.abc import Callable, Mapping, Sequence
from contextlib import redirect_stdout
from dataclasses import dataclass, field
from pathlib import Path
from typing import Annotated, Any, Literal, TextIO

import typer

from bayes_sys.errors import BayesSysError, InputError
from bayes_sys.sampling.progress import Progress, Watcher

PROGRAM = "bayes-sys"
DEMO_CASE, DEMO_PLACE = "district_water", Path("bayes-sys-demo")
DEBUG = "BAYES_SYS_DEBUG"
DONE, FAULT, WRONG_INPUT, GATE_FAILED = 0, 1, 2, 3
INTERRUPTED = (
    "Interrupted. A run that had begun stays marked as incomplete; the same command starts it again."
)

app = typer.Typer(
    help="Joint Bayesian regressions for several units with short series and shared shocks.",
    epilog="Exit codes: 0 done; 2 the input is wrong; 3 the gate was not passed; 1 anything else.",
    rich_markup_mode=None,
    pretty_exceptions_enable=False,
    context_settings={"help_option_names": ["--help", "-h"]},
)

EngineName = Literal["auto", "direct", "pymc"]
StudyFile = Annotated[
    Path, typer.Argument(metavar="STUDY", help="The study: a TOML file.", show_default=False)
]
Out = Annotated[Path | None, typer.Option("--out", metavar="DIR", help="Where to write.", show_default=False)]
DemoOut = Annotated[Path, typer.Option("--out", metavar="DIR", help="Where to write.")]
Overwrite = Annotated[bool, typer.Option("--overwrite", help="Replace what an earlier one has left there.")]
Quiet = Annotated[
    bool, typer.Option("--quiet", help="No progress, no summary: only the path of what was made.")
]
Json = Annotated[bool, typer.Option("--json", help="One JSON object on standard output, nothing else.")]
Seed = Annotated[int | None, typer.Option(help="Seed, instead of the study's.", show_default=False)]
Chains = Annotated[int | None, typer.Option(help="Chains, instead of the study's.", show_default=False)]
Draws = Annotated[int | None, typer.Option(help="Per chain, instead of the study's.", show_default=False)]
Warmup = Annotated[int | None, typer.Option(help="Per chain, instead of the study's.", show_default=False)]
Engine = Annotated[
    EngineName, typer.Option(help="direct: the compiled density; pymc: the PyMC model itself.")
]
RunPath = Annotated[Path, typer.Argument(metavar="RUN", help="The folder of a run.", show_default=False)]
CardName = Annotated[
    str | None, typer.Argument(metavar="[NAME]", help="A card's name, or a path.", show_default=False)
]


@dataclass(frozen=True)
class Answer:
    """What a command has to say, for people (`text`) and for programs (everything else)."""

    status: str
    out: Path | None = None
    gate: Mapping[str, Any] | None = None
    messages: Sequence[str] = ()
    text: str = ""
    more: Mapping[str, Any] = field(default_factory=dict)
    exit_code: int = DONE


@dataclass(frozen=True)
class Session:
    """What surrounds a command: who watches it, and how it was called."""

    watch: Watcher
    command: str


@dataclass(frozen=True)
class Task:
    """A parsed command, to be carried out after the parser is done."""

    work: Callable[[Session], Answer]
    quiet: bool


@app.command()
def examine(
    study: StudyFile,
    out: Out = None,
    overwrite: Overwrite = False,
    quiet: Quiet = False,
    as_json: Json = False,
) -> Task:
    """Check data and design without sampling.

    Computes the classical estimates too. Writes nothing, unless --out names a folder for examination.json
    and benchmark.csv.
    """

    def work(session: Session) -> Answer:
        session.watch(Progress("reading"))
        from bayes_sys import display, job

        found = job.examine(study, out=out, overwrite=overwrite, progress=session.watch)
        more = {"checks": found.rows, "benchmark": found.benchmark.to_dict("records")}
        said = [*found.prepared.system.notes, *found.prepared.warnings]
        return Answer("complete", found.place, None, said, display.examination_text(found), more)

    return Task(work, quiet)


@app.command()
def run(
    study: StudyFile,
    out: Out = None,
    overwrite: Overwrite = False,
    seed: Seed = None,
    chains: Chains = None,
    draws: Draws = None,
    warmup: Warmup = None,
    engine: Engine = "auto",
    quiet: Quiet = False,
    as_json: Json = False,
) -> Task:
    """Do the whole job, from study to page.

    Examines data and design, samples, holds the draws against the gate, writes tables and page. Writes the
    folder runs/<name of the study file>, unless --out names another place.
    """
    return _run_task(study, out, overwrite, (chains, warmup, draws, seed, engine), quiet)


@app.command()
def demo(
    out: DemoOut = DEMO_PLACE,
    overwrite: Overwrite = False,
    seed: Seed = None,
    chains: Chains = None,
    draws: Draws = None,
    warmup: Warmup = None,
    engine: Engine = "auto",
    quiet: Quiet = False,
    as_json: Json = False,
) -> Task:
    """Run the case study that comes along.

    It is about water demand in five invented districts; nothing in it is real.
    """
    from bayes_sys.shipped import case_study

    study = case_study(DEMO_CASE) / "study.toml"
    return _run_task(study, out, overwrite, (chains, warmup, draws, seed, engine), quiet)


@app.command()
def report(run_folder: RunPath, quiet: Quiet = False, as_json: Json = False) -> Task:
    """Make the page of a finished run again."""

    def work(session: Session) -> Answer:
        session.watch(Progress("page"))
        from bayes_sys import job

        page = job.report(run_folder)
        return _of_run(page.manifest, page.path)

    return Task(work, quiet)


@app.command()
def cards(name: CardName = None, quiet: Quiet = False, as_json: Json = False) -> Task:
    """List the prior cards, or explain one."""

    def work(session: Session) -> Answer:
        from bayes_sys import display, job

        if name is None:
            found = job.cards()
            return Answer("complete", text=display.cards_text(found), more={"cards": found})
        card = job.explain_card(name)
        return Answer("complete", text=display.card_text(card), more={"card": card})

    return Task(work, quiet)


def _run_task(
    study: Path,
    out: Path | None,
    overwrite: bool,
    settings: tuple[int | None, int | None, int | None, int | None, EngineName],
    quiet: bool,
) -> Task:
    """Return the task that `run` and `demo` share; settings are chains, warmup, draws, seed, engine."""

    def work(session: Session) -> Answer:
        session.watch(Progress("reading"))
        from bayes_sys import display, job

        done = job.run(
            study,
            out=out,
            overwrite=overwrite,
            overrides=job.Overrides(*settings),
            command=session.command,
            progress=session.watch,
        )
        return _of_run(done.manifest, done.folder.path, display.run_text(done))

    return Task(work, quiet)


def _of_run(manifest: Mapping[str, Any], out: Path, text: str = "") -> Answer:
    """Return the answer that speaks of a finished run."""
    gate = manifest["gate"]
    said = [*gate["failures"], *gate["advice"], *manifest["messages"]]
    code = DONE if gate["passed"] else GATE_FAILED
    return Answer(manifest["status"], out, gate, said, text, exit_code=code)


def main() -> None:
    """Run the command line and leave with its exit code."""
    prepare_process()
    sys.exit(execute(sys.argv[1:]))


def prepare_process() -> None:
    """Set what must be set before numerical libraries are imported; a user's own settings are kept."""
    # Chains already fill the cores: more threads inside the linear algebra cost up to a factor of 17.
    for name in ("OPENBLAS_NUM_THREADS", "OMP_NUM_THREADS", "MKL_NUM_THREADS"):
        os.environ.setdefault(name, "1")
    # Without this PyTensor searches for a BLAS that pip installations do not have, and warns.
    os.environ.setdefault("PYTENSOR_FLAGS", "blas__ldflags=")
    os.environ.setdefault("MPLBACKEND", "Agg")
    if not os.environ.get(DEBUG):
        # Warnings of libraries are for developers; what a user must know is said in messages of our own.
        warnings.simplefilter("ignore")
    for stream in (sys.stdout, sys.stderr):
        if isinstance(stream, io.TextIOWrapper):
            stream.reconfigure(errors="replace")


def execute(arguments: Sequence[str]) -> int:
    """Carry out one command line and return its exit code.

    Parameters
    ----------
    arguments : sequence of str
        Without the program's name.
    """
    # Looked for here as well as by the parser, because a line that does not parse must answer in kind.
    as_json, quiet = "--json" in arguments, "--quiet" in arguments
    stray = io.StringIO()
    if as_json:
        # Nothing but the object may reach standard output, whoever prints.
        with redirect_stdout(stray):
            answer = _answer(arguments)
    else:
        answer = _answer(arguments)
    if answer is None:
        answer = Answer("complete", messages=[stray.getvalue().strip()])
    try:
        _print_json(answer) if as_json else _print_text(answer, quiet=quiet)
    except BrokenPipeError:
        # The reader has seen enough; nor must Python complain when it flushes at the end.
        os.dup2(os.open(os.devnull, os.O_WRONLY), sys.stdout.fileno())
    return answer.exit_code


def _answer(arguments: Sequence[str]) -> Answer | None:
    """Parse and work; every failure becomes an answer. None: help was asked for and has been printed."""
    try:
        task = app(args=list(arguments) or ["--help"], prog_name=PROGRAM, standalone_mode=False)
        if not isinstance(task, Task):
            return None
        from bayes_sys import display

        with display.watching(quiet=task.quiet) as watch:
            return task.work(Session(watch, shlex.join([PROGRAM, *arguments])))
    except BayesSysError as error:
        status = "input-error" if isinstance(error, InputError) else "error"
        return Answer(status, messages=[str(error)], exit_code=error.exit_code)
    except typer.TyperException as error:
        return Answer("input-error", messages=[_usage_message(error)], exit_code=WRONG_INPUT)
    except KeyboardInterrupt:
        return Answer("interrupted", messages=[INTERRUPTED], exit_code=FAULT)
    except Exception as error:
        return _unexpected(error)


def _usage_message(error: typer.TyperException) -> str:
    """Return what the parser says of a wrong command line, ending in a mend."""
    said = error.format_message().replace("Value error, ", "")
    return f"{said}{'' if said.endswith(('.', '?')) else '.'} “{PROGRAM} --help” shows what there is."


def _unexpected(error: Exception) -> Answer:
    """Return the one line that an error nobody foresaw comes to."""
    if os.environ.get(DEBUG):
        traceback.print_exc(file=sys.stderr)
    first = (str(error).strip().splitlines() or ["no message"])[0]
    message = (
        f"Unexpected {type(error).__name__}: {first}. Please report this with the study; {DEBUG}=1 before "
        "the command shows where it happened."
    )
    return Answer("error", messages=[message], exit_code=FAULT)


def _print_json(answer: Answer) -> None:
    from bayes_sys.runs import plain

    always = {"status": answer.status, "out": answer.out, "gate": answer.gate, "messages": answer.messages}
    _line(json.dumps(plain({**answer.more, **always}), ensure_ascii=False, allow_nan=False), sys.stdout)


def _print_text(answer: Answer, *, quiet: bool) -> None:
    if answer.exit_code in (FAULT, WRONG_INPUT):
        for message in answer.messages:
            _line(message if answer.status == "interrupted" else f"Error: {message}", sys.stderr)
        return
    if answer.text and not quiet:
        _line(answer.text, sys.stdout)
    if answer.out is not None:
        _line(str(answer.out), sys.stdout)


def _line(text: str, stream: TextIO) -> None:
    stream.write(text + "\n")
    stream.flush()
