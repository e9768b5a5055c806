"""What a person at the terminal reads: progress on standard error, summaries on standard output."""

from __future__ import annotations

import shutil
import sys
import textwrap
from collections.abc import Iterable, Iterator, Mapping, Sequence
from contextlib import contextmanager
from typing import TYPE_CHECKING, Any

from bayes_sys import runs
from bayes_sys.classical.check import FINE, LABELS, NOTE, WARNING, counted, for_people
from bayes_sys.sampling.progress import Progress, Watcher, unwatched

if TYPE_CHECKING:
    import pandas as pd
    from rich.progress import Progress as Bars

    from bayes_sys.job import Examination, Run
    from bayes_sys.system.system import System

STAGES = {
    "reading": "Reading study and data",
    "examining": "Checking data and design",
    "preparing": "Preparing the sampler",
    "compiling": "Compiling (the first time takes longest)",
    "warmup": "Warming up",
    "sampling": "Sampling",
    "drawing": "Drawing the coefficients",
    "tables": "Writing draws and tables",
    "page": "Making the page",
}
ONE_BAR = ("warmup", "sampling")
MOST_ROWS, MOST_COLUMNS, MOST_PAIRS = 40, 6, 10
WIDEST = 110
MARKS = {FINE: "", NOTE: "*", WARNING: "!"}
CAUTION = (
    "Caution: these figures hold under the assumptions of the study and of its prior card. Before a decision "
    "that can hurt someone rests on them, have a qualified person review them, and follow the rules that "
    "apply where you are."
)


@contextmanager
def watching(*, quiet: bool) -> Iterator[Watcher]:
    """Show progress on standard error, if that is a terminal and the user has not asked for quiet.

    Yields
    ------
    callable
        To be told of every `Progress`, from any thread.
    """
    if quiet or not sys.stderr.isatty():
        yield unwatched
        return
    from rich.console import Console
    from rich.progress import BarColumn, SpinnerColumn, TextColumn, TimeElapsedColumn
    from rich.progress import Progress as Bars

    columns = (
        SpinnerColumn(finished_text="✓"),
        TextColumn("{task.description}", markup=False),
        BarColumn(bar_width=24),
        TextColumn("{task.fields[detail]}", markup=False),
        TimeElapsedColumn(),
    )
    with Bars(*columns, console=Console(stderr=True)) as bars:
        watcher = _Bars(bars)
        yield watcher
        watcher.finish()


class _Bars:
    """One line a stage; warmup and sampling share one."""

    def __init__(self, bars: Bars) -> None:
        self.bars = bars
        self.task: Any = None
        self.line: tuple[str, int] | None = None

    def __call__(self, progress: Progress) -> None:
        """Show one moment."""
        again = ", second attempt" if progress.attempt > 1 else ""
        words = STAGES.get(progress.stage, progress.stage) + again
        line = ("sampling" if progress.stage in ONE_BAR else progress.stage, progress.attempt)
        if line != self.line:
            self.finish()
            self.line = line
            self.task = self.bars.add_task(words, total=None, detail="")
        self.bars.update(
            self.task,
            description=words,
            completed=progress.done,
            total=progress.total or None,
            detail=_detail(progress),
        )

    def finish(self) -> None:
        """Mark the present line as done."""
        if self.task is not None:
            self.bars.update(self.task, total=1, completed=1)
            self.task = None


def _detail(progress: Progress) -> str:
    parts = [f"{progress.done:,} of {progress.total:,}"] if progress.total else []
    if progress.divergences:
        parts.append(f"{progress.divergences} divergences")
    return ", ".join(parts)


def run_text(run: Run) -> str:
    """Return the summary of a run: the gate, the coefficients, what to mind, where the page is."""
    manifest, system = run.manifest, run.prepared.system
    said = [*system.notes, *run.prepared.warnings]
    lines = [
        str(manifest["title"]),
        f"{_size(system)} Prior card “{run.prepared.card.name}”. {manifest['timings']['total']:.1f} s.",
        "",
        *gate_lines(manifest["gate"]),
        "",
        *(result_lines(run.tables) if run.passed else []),
        *(["What to mind", *points(said), ""] if said else []),
        *([*wrapped(CAUTION), ""] if run.passed else [f"Marked as not to be used: {run.folder.path}"]),
        f"Page: {run.folder.path / runs.REPORT}",
    ]
    return "\n".join(lines)


def result_lines(tables: Mapping[str, pd.DataFrame]) -> list[str]:
    """Return what a posterior that passed the gate says: coefficients, and correlations of the errors."""
    coefficients = coefficient_lines(tables[runs.COEFFICIENTS])
    return [*coefficients, "", *correlation_lines(tables[runs.CORRELATIONS])]


def gate_line(gate: Mapping[str, Any]) -> str:
    """Return in one line that the gate was not passed and why, for whoever sees nothing else."""
    why = " ".join(gate["failures"])
    return f"The posterior did not pass the gate; what was written is marked as not to be used. {why}".strip()


def gate_lines(gate: Mapping[str, Any]) -> list[str]:
    """Return the verdict of the gate, with what failed and what helps."""
    figures = (
        f"Largest R-hat {_number(gate['rhat_max'])}; fewest effective draws {_whole(gate['ess_bulk_min'])} "
        f"(bulk) and {_whole(gate['ess_tail_min'])} (tails); divergences {gate['divergences']}."
    )
    if gate["passed"]:
        return [f"The posterior passed the gate. {figures}"]
    return [
        f"The posterior did NOT pass the gate. {figures}",
        "Everything is written, and marked; no figure of it is a result, so none is shown here.",
        *points([*gate["failures"], *gate["advice"]]),
    ]


def coefficient_lines(table: pd.DataFrame) -> list[str]:
    """Return the coefficients as lines of text, the first `MOST_ROWS` of them."""
    columns = {"equation": "", "regressor": "", "mean": "mean", "q5": "5%", "q95": "95%", "fgls": "FGLS"}
    cells = [list(columns.values())]
    for row in table.head(MOST_ROWS).to_dict("records"):
        cells.append([_number(row[name]) for name in columns])
    lines = aligned(cells, left=2)
    if len(table) > MOST_ROWS:
        lines.append(f"… and {len(table) - MOST_ROWS} more in {runs.COEFFICIENTS}")
    return lines


def correlation_lines(table: pd.DataFrame) -> list[str]:
    """Return the largest correlations of the errors as lines of text, `MOST_PAIRS` of them; none for one equation."""
    if table.empty:
        return []
    columns = {"equation_a": "", "equation_b": "", "mean": "mean", "q5": "5%", "q95": "95%", "fgls": "FGLS"}
    largest = table.iloc[table["mean"].abs().argsort(kind="stable")[::-1][:MOST_PAIRS]]
    cells = [list(columns.values())]
    cells += [[_number(row[name]) for name in columns] for row in largest.to_dict("records")]
    title = "Correlation of the errors"
    if len(table) > MOST_PAIRS:
        title += f", the {MOST_PAIRS} largest of {len(table)} ({runs.CORRELATIONS} has all)"
    return [title, *aligned(cells, left=2), ""]


def examination_text(examination: Examination) -> str:
    """Return the checks and the classical estimates as text."""
    system, rows = examination.prepared.system, for_people(examination.rows)
    lines = [
        system.title,
        _size(system),
        *points(system.notes),
        "",
        "The system as a whole",
        *points(_marked(row) for row in rows if not row["equation"]),
        "",
        *wrapped("Each equation (! may mislead if not mended, * to be known when reading the results)"),
        *equation_matrix(rows, system.names),
        *points(shared_sentences(row for row in rows if row["equation"] and row["verdict"] != FINE)),
        "",
        "Classical estimates, each with its standard error",
        *benchmark_lines(examination.benchmark),
        *points(examination.prepared.benchmark.reasons.values()),
    ]
    if examination.place is None:
        lines += ["", f"Nothing was written; --out DIR keeps {' and '.join(runs.EXAMINATION_FILES)}."]
    return "\n".join(lines)


def equation_matrix(rows: Sequence[Mapping[str, Any]], names: Sequence[str]) -> list[str]:
    """Return the figures of the checks, one line a check and one column an equation."""
    found: dict[str, dict[str, str]] = {}
    for row in rows:
        if row["equation"]:
            mark = MARKS[row["verdict"]] or " "
            found.setdefault(row["name"], {})[row["equation"]] = _number(row["figure"]) + mark
    lines: list[str] = []
    for start in range(0, len(names), MOST_COLUMNS):
        some = names[start : start + MOST_COLUMNS]
        cells = [["", *(f"{name} " for name in some)]]
        cells += [
            [LABELS.get(check, check.replace("_", " ")), *(line.get(n, "") for n in some)]
            for check, line in found.items()
        ]
        lines += aligned(cells, left=1)
    return lines


def shared_sentences(rows: Iterable[Mapping[str, Any]]) -> list[str]:
    """Return the sentences of checks of single equations, those that several share said once."""
    said: dict[str, list[str]] = {}
    for row in rows:
        said.setdefault(f"{MARKS[row['verdict']]} {row['sentence']}", []).append(row["equation"])
    return [f"{text[0]} {', '.join(names)}: {text[2:]}" for text, names in said.items()]


def benchmark_lines(table: pd.DataFrame) -> list[str]:
    """Return the classical estimates as lines of text."""
    heads = ["se" if name.endswith("_se") else name for name in table.columns[2:]]
    cells = [["", "", *heads]]
    cells += [[_number(value) for value in row] for row in table.to_numpy(dtype=object)]
    return aligned(cells, left=2)


def points(sentences: Iterable[str]) -> list[str]:
    """Return sentences as points of a list, wrapped to the terminal; a mark in front replaces the dash."""
    marked = (s if s[:2] in ("* ", "! ") else f"- {s}" for s in sentences)
    return [line for s in marked for line in wrapped(s, indent="  ")]


def wrapped(text: str, *, indent: str = "") -> list[str]:
    """Return a text as lines no wider than the terminal, the second and later ones indented."""
    width = min(shutil.get_terminal_size().columns, WIDEST)
    return textwrap.wrap(
        text, width, subsequent_indent=indent, break_long_words=False, break_on_hyphens=False
    )


def _marked(row: Mapping[str, Any]) -> str:
    return f"{MARKS[row['verdict']]} {row['sentence']}".strip()


def _size(system: System) -> str:
    sizes = {
        "equation": system.n_equations,
        "period": system.n_periods,
        "coefficient": system.n_coefficients,
    }
    counts, labels = ", ".join(counted(size, noun) for noun, size in sizes.items()), system.periods.labels
    return f"{counts}; {labels[0]} to {labels[-1]}." if labels else f"{counts}."


def aligned(cells: Sequence[Sequence[str]], *, left: int) -> list[str]:
    """Return rows of cells as lines of text in columns, the first `left` columns flush left."""
    widths = [max(len(row[k]) for row in cells) for k in range(len(cells[0]))]
    padded = (
        [
            cell.ljust(w) if k < left else cell.rjust(w)
            for k, (cell, w) in enumerate(zip(row, widths, strict=True))
        ]
        for row in cells
    )
    return ["  " + "  ".join(row).rstrip() for row in padded]


def _whole(value: float | None) -> str:
    return "-" if value is None or value != value else f"{value:,.0f}"


def _number(value: Any) -> str:
    """Return a value as a reader wants it: four digits, “-” where there is none."""
    if value is None or value != value:
        return "-"
    if isinstance(value, str):
        return value
    if isinstance(value, bool):
        return "yes" if value else "no"
    return f"{value:,.0f}" if float(value).is_integer() and abs(value) >= 1000 else f"{value:.4g}"


def cards_text(cards: Sequence[Mapping[str, str]]) -> str:
    """Return the list of prior cards as text."""
    return "\n".join(
        [
            *points(f"{card['name']}: {card['summary']}" for card in cards),
            "",
            "bayes-sys cards NAME explains one.",
        ]
    )


def card_text(card: Mapping[str, Any]) -> str:
    """Return a prior card in words, and as its file says it."""
    return "\n".join(
        [
            *wrapped(f"{card['name']}: {card['summary']}"),
            "",
            *points(card["words"]),
            "",
            "The card:",
            "",
            card["text"].rstrip(),
        ]
    )
