"""The command line: parse, call the job, print. It alone talks to the terminal and knows exit codes.

Exit codes: 0 done; 2 the input is wrong; 3 the posterior did not pass the gate; 1 anything else.
"""

from __future__ import annotations

import _thread
import argparse
import io
import json
import os
import shlex
import signal
import sys
import threading
import warnings
from collections.abc import Mapping, Sequence
from contextlib import nullcontext, redirect_stdout, suppress
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any, NoReturn, TextIO

from bayes_sys.errors import BayesSysError, InputError, nearest
from bayes_sys.sampling.progress import Progress, Watcher

PROGRAM = "bayes-sys"
DEMO_CASE, DEMO_PLACE = "district_water", Path("bayes-sys-demo")
DEBUG = "BAYES_SYS_DEBUG"
DONE, FAULT, WRONG_INPUT, GATE_FAILED = 0, 1, 2, 3
INTERRUPTED = (
    "Interrupted. A run that had begun stays marked as incomplete; the same command starts it again."
)
CODES = "Exit codes: 0 done; 2 the input is wrong; 3 the posterior did not pass the gate; 1 anything else."
_INTERRUPTED = threading.Event()


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


def examine(given: argparse.Namespace, watch: Watcher) -> Answer:
    """Check data and design without sampling."""
    watch(Progress("reading"))
    from bayes_sys import display, job

    if given.overwrite and given.out is None:
        raise InputError(
            "--overwrite says what may be replaced, but without --out nothing is written.",
            where=f"{PROGRAM} examine",
            mend="Name the folder with --out, or leave --overwrite out.",
        )
    found = job.examine(given.study, out=given.out, overwrite=given.overwrite, progress=watch)
    more = {"checks": found.rows, "benchmark": found.benchmark.to_dict("records")}
    said = [*found.prepared.system.notes, *found.prepared.warnings]
    return Answer("complete", found.place, None, said, display.examination_text(found), more)


def run(given: argparse.Namespace, watch: Watcher) -> Answer:
    """Do the whole job, from study to page."""
    watch(Progress("reading"))
    from bayes_sys import display, job

    done = job.run(
        given.study,
        out=given.out,
        overwrite=given.overwrite,
        overrides=job.Overrides(given.chains, given.warmup, given.draws, given.seed, given.engine),
        command=given.command_line,
        progress=watch,
    )
    return _of_run(done.manifest, done.folder.path, display.run_text(done))


def demo(given: argparse.Namespace, watch: Watcher) -> Answer:
    """Run the case study that comes along."""
    from bayes_sys.shipped import case_study

    given.study = case_study(DEMO_CASE) / "study.toml"
    return run(given, watch)


def report(given: argparse.Namespace, watch: Watcher) -> Answer:
    """Make the page of a finished run again."""
    watch(Progress("page"))
    from bayes_sys import job

    page = job.report(given.run)
    return _of_run(page.manifest, page.path)


def cards(given: argparse.Namespace, watch: Watcher) -> Answer:
    """List the prior cards, or explain one."""
    from bayes_sys import display, job

    if given.name is None:
        found = job.cards()
        return Answer("complete", text=display.cards_text(found), more={"cards": found})
    card = job.explain_card(given.name)
    return Answer("complete", text=display.card_text(card), more={"card": card})


def _of_run(manifest: Mapping[str, Any], out: Path, text: str = "") -> Answer:
    """Return the answer that speaks of a finished run."""
    gate = manifest["gate"]
    said = [*gate["failures"], *gate["advice"], *manifest["messages"]]
    code = DONE if gate["passed"] else GATE_FAILED
    return Answer(manifest["status"], out, gate, said, text, exit_code=code)


class HelpAsked(Exception):
    """Help was asked for, and this is its text; argparse itself would keep silent where it cannot be printed."""


class Parser(argparse.ArgumentParser):
    """A parser whose complaints are errors of ours, and which knows the nearest option."""

    def error(self, message: str) -> NoReturn:
        """Raise what is wrong with the command line."""
        raise InputError(f"{message}.", where=self.prog, mend=f"“{self.prog} --help” shows what there is.")

    def print_help(self, file: object = None) -> NoReturn:
        """Hand the help over instead of printing it."""
        raise HelpAsked(self.format_help().strip())

    def refuse(self, unknown: Sequence[str]) -> NoReturn:
        """Raise for arguments that this command does not know."""
        if unknown[0].startswith("-"):
            options = [name for name in self._option_string_actions if name.startswith("--")]
            mend = nearest(unknown[0], options)
            raise InputError(f"there is no option “{unknown[0]}”.", where=self.prog, mend=mend)
        takes = [str(action.metavar) for action in self._actions if not action.option_strings]
        room = f"one {takes[0]} at a time" if takes else "options only"
        raise InputError(
            f"this takes {room}; “{unknown[0]}” is one too many.",
            where=self.prog,
            mend=f"“{self.prog} --help” shows more.",
        )

    def _check_value(self, action: argparse.Action, value: Any) -> None:
        """Refuse a value that is not among the choices, naming the nearest."""
        if action.choices is not None and value not in action.choices:
            what = "command" if action.dest == "command_name" else f"--{action.dest}"
            raise InputError(
                f"there is no {what} “{value}”.", where=self.prog, mend=nearest(value, action.choices)
            )


def build_parser() -> tuple[Parser, dict[str, Parser]]:
    """Return the parser of the whole command line, and that of every command."""
    parser = Parser(
        prog=PROGRAM,
        description="Joint Bayesian regressions for several units with short series and shared shocks.",
        epilog=CODES,
        allow_abbrev=False,
    )
    places = parser.add_subparsers(title="commands", metavar="COMMAND", dest="command_name", required=True)
    parsers = {}
    for work, more, options in (
        (
            examine,
            "Computes the classical estimates too. Writes nothing, unless --out names a folder for "
            "examination.json and benchmark.csv.",
            (_study, _place),
        ),
        (
            run,
            "Examines data and design, samples, holds the draws against the gate, writes tables and page. "
            "Writes the folder runs/<name of the study file>, unless --out names another place.",
            (_study, _place, _sampling),
        ),
        (
            demo,
            "It is about water demand in five invented districts; nothing in it is real. Writes the folder "
            f"{DEMO_PLACE}, unless --out names another place.",
            (_place, _sampling),
        ),
        (report, "Nothing is sampled; everything else in the folder stays as it is.", (_run,)),
        (cards, "A card says what is held plausible before the data are seen.", (_card,)),
    ):
        name, about = work.__name__, str(work.__doc__)
        command = places.add_parser(
            name, help=about, description=f"{about} {more}", epilog=CODES, allow_abbrev=False
        )
        for add in (*options, _voice):
            add(command)
        command.set_defaults(work=work)
        parsers[name] = command
    parsers["demo"].set_defaults(out=DEMO_PLACE)
    return parser, parsers


def _study(parser: Parser) -> None:
    parser.add_argument("study", metavar="STUDY", type=Path, help="the study: a TOML file")


def _run(parser: Parser) -> None:
    parser.add_argument("run", metavar="RUN", type=Path, help="the folder of a run")


def _card(parser: Parser) -> None:
    parser.add_argument("name", metavar="NAME", nargs="?", help="a card to explain: its name, or a path")


def _place(parser: Parser) -> None:
    parser.add_argument("--out", metavar="DIR", type=Path, help="where to write")
    parser.add_argument("--overwrite", action="store_true", help="replace what an earlier one has left there")


def _sampling(parser: Parser) -> None:
    for name in ("seed", "chains"):
        parser.add_argument(f"--{name}", type=int, metavar="N", help="instead of the study's")
    for name in ("draws", "warmup"):
        parser.add_argument(f"--{name}", type=int, metavar="N", help="per chain, instead of the study's")
    parser.add_argument(
        "--engine",
        choices=("auto", "direct", "pymc"),
        default="auto",
        help="direct: the compiled density; pymc: the PyMC model itself; auto: direct wherever it can",
    )


def _voice(parser: Parser) -> None:
    parser.add_argument(
        "--quiet", action="store_true", help="no progress, no summary: only the path of what was made"
    )
    parser.add_argument(
        "--json", action="store_true", help="one JSON object on standard output, nothing else"
    )


def parse(arguments: Sequence[str]) -> argparse.Namespace:
    """Parse a command line.

    Raises
    ------
    InputError
        If it is wrong.
    HelpAsked
        If help was asked for.
    """
    parser, parsers = build_parser()
    given, unknown = parser.parse_known_args(list(arguments) or ["--help"])
    if unknown:
        parsers[given.command_name].refuse(unknown)
    given.command_line = shlex.join([PROGRAM, *arguments])
    return given


def main() -> None:
    """Run the command line and leave with its exit code."""
    prepare_process()
    code = execute(sys.argv[1:])
    for stream in (sys.stdout, sys.stderr):
        # Lines of ours are flushed as they are written: what fails here was told, or nobody can be told.
        with suppress(OSError):
            stream.flush()
    # At once, because an interrupt that a library has seen on its way would still decide the exit code, and
    # because threads of the sampler need not be waited for. Everything written is closed by now.
    os._exit(code)


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
    signal.signal(signal.SIGINT, _interrupt)
    sys.unraisablehook = _reraise_interrupt


def _interrupt(number: int, frame: object) -> NoReturn:
    """Remember an interrupt and raise it."""
    _INTERRUPTED.set()
    raise KeyboardInterrupt


def _reraise_interrupt(lost: Any) -> None:
    """Raise an interrupt again, a moment later, that fell into a place where Python drops exceptions."""
    if lost.exc_type is KeyboardInterrupt:
        threading.Timer(0.05, _thread.interrupt_main).start()
    else:
        sys.__unraisablehook__(lost)


def execute(arguments: Sequence[str]) -> int:
    """Carry out one command line and return its exit code.

    Parameters
    ----------
    arguments : sequence of str
        Without the program's name.
    """
    # Looked for here as well as by the parser, because a line that does not parse must answer in kind.
    as_json, asks_help = "--json" in arguments, not {"-h", "--help"}.isdisjoint(arguments)
    quiet = "--quiet" in arguments and not asks_help
    # In JSON mode nothing but the object may reach standard output, whoever prints.
    with redirect_stdout(io.StringIO()) if as_json else nullcontext():
        answer = _answer(arguments)
    try:
        _print_json(answer) if as_json else _print_text(answer, quiet=quiet)
        sys.stdout.flush()
    except BrokenPipeError:
        _drop_output()  # the reader has seen enough
    except OSError as error:
        _drop_output()
        done = f" What was made is in {answer.out}." if answer.out is not None else ""
        with suppress(OSError):
            _line(f"Error: standard output cannot be written ({error.strerror}).{done}", sys.stderr)
        return FAULT
    return answer.exit_code


def _drop_output() -> None:
    """Let standard output lead nowhere, so that Python does not complain when it flushes at the end."""
    os.dup2(os.open(os.devnull, os.O_WRONLY), sys.stdout.fileno())


def _answer(arguments: Sequence[str]) -> Answer:
    """Parse and work; every failure becomes an answer."""
    try:
        given = parse(arguments)
        from bayes_sys import display

        with display.watching(quiet=given.quiet) as watch:
            answer: Answer = given.work(given, watch)
            return answer
    except HelpAsked as asked:
        return Answer("complete", messages=[str(asked)], text=str(asked))
    except BayesSysError as error:
        status = "input-error" if isinstance(error, InputError) else "error"
        return Answer(status, messages=[str(error)], exit_code=error.exit_code)
    except KeyboardInterrupt:
        return Answer("interrupted", messages=[INTERRUPTED], exit_code=FAULT)
    except BaseException as error:  # a panic of a library in Rust is no Exception
        if _INTERRUPTED.is_set():
            # Some libraries turn an interrupt into an error of their own, such as a failed import.
            return Answer("interrupted", messages=[INTERRUPTED], exit_code=FAULT)
        return _unexpected(error)


def _unexpected(error: BaseException) -> Answer:
    """Return the one line that an error nobody foresaw comes to."""
    if os.environ.get(DEBUG):
        import traceback

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
    elif answer.exit_code == GATE_FAILED and answer.gate is not None:
        from bayes_sys.display import gate_line

        _line(gate_line(answer.gate), sys.stderr)
    if answer.out is not None:
        _line(str(answer.out), sys.stdout)


def _line(text: str, stream: TextIO) -> None:
    stream.write(text + "\n")
    stream.flush()
