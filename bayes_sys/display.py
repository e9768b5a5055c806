"""What a person at the terminal reads: progress on standard error, summaries on standard output."""

from __future__ import annotations

import sys
from collections.abc import Iterator, Mapping, Sequence
from contextlib import contextmanager
from typing import TYPE_CHECKING, Any

from bayes_sys import runs
from bayes_sys.classical.check import WARNING
from bayes_sys.sampling.progress import Progress, Watcher, unwatched

if TYPE_CHECKING:
    import pandas as pd
    from rich.progress import Progress as Bars

    from bayes_sys.job import Examination, Run

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
MOST_ROWS = 40
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
        line = ("sampling" if progress.stage in ONE_BAR else progress.stage, progress.attempt)
        if line != self.line:
            self.finish()
            self.line = line
            self.task = self.bars.add_task("", total=None, detail="")
        again = ", second attempt" if progress.attempt > 1 else ""
        self.bars.update(
            self.task,
            description=STAGES.get(progress.stage, progress.stage) + again,
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
    head = [
        str(manifest["title"]),
        f"{system.n_equations} equations, {system.n_periods} periods, {system.n_coefficients} coefficients; "
        f"prior card “{run.prepared.card.name}”; {manifest['timings']['total']:.1f} s.",
        "",
        *gate_lines(manifest["gate"]),
        "",
        *coefficient_lines(run.coefficients),
    ]
    said = [*run.prepared.system.notes, *run.prepared.warnings]
    mind = ["", "What to mind:", *(f"- {sentence}" for sentence in said)] if said else []
    tail = ["", CAUTION, "", f"Page: {run.folder.path / runs.REPORT}"]
    return "\n".join([*head, *mind, *tail])


def gate_lines(gate: Mapping[str, Any]) -> list[str]:
    """Return the verdict of the gate, with what failed and what helps."""
    figures = [
        f"largest R-hat {_number(gate.get('rhat_max'))}",
        f"fewest effective draws {_number(gate.get('ess_bulk_min'))} (bulk), "
        f"{_number(gate.get('ess_tail_min'))} (tails)",
        f"divergences {_number(gate.get('divergences'))}",
    ]
    if gate["passed"]:
        return [f"Gate: passed. {', '.join(figures).capitalize()}."]
    return [
        f"Gate: NOT passed. {', '.join(figures).capitalize()}.",
        "The figures below are written and marked, but must not be read as results.",
        *(f"- {failure}" for failure in gate["failures"]),
        *(f"- {advice}" for advice in gate["advice"]),
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


def examination_text(examination: Examination) -> str:
    """Return the checks and the benchmark as text."""
    system = examination.prepared.system
    lines = [
        system.title,
        f"{system.n_equations} equations, {system.n_periods} periods, {system.n_coefficients} coefficients.",
        *(f"- {note}" for note in system.notes),
        "",
        "Checks",
    ]
    cells = [["verdict", "check", "equation", "figure"]]
    cells += [
        [_number(row[k]) for k in ("verdict", "name", "equation", "figure")] for row in examination.rows
    ]
    lines += aligned(cells, left=3)
    said = [row["sentence"] for row in examination.rows if row["verdict"] == WARNING]
    lines += ["", "What to mind:", *(f"- {s}" for s in said)] if said else []
    lines += ["", "Classical estimates (standard errors beside them)"]
    columns = list(examination.benchmark.columns)
    cells = [["", "", *(c.removesuffix("_se") if not c.endswith("_se") else "se" for c in columns[2:])]]
    cells += [[_number(v) for v in row] for row in examination.benchmark.to_numpy(dtype=object)]
    lines += aligned(cells, left=2)
    lines += [f"- {reason}" for reason in examination.prepared.benchmark.reasons.values()]
    if examination.place is None:
        lines += ["", "Nothing was written; --out DIR keeps examination.json and benchmark.csv."]
    return "\n".join(lines)


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
    width = max(len(card["name"]) for card in cards)
    lines = [f"{card['name'].ljust(width)}  {card['summary']}" for card in cards]
    return "\n".join([*lines, "", "bayes-sys cards NAME explains one."])


def card_text(card: Mapping[str, Any]) -> str:
    """Return a prior card in words, and as its file says it."""
    words = [f"- {sentence}" for sentence in card["words"]]
    return "\n".join(
        [f"{card['name']}: {card['summary']}", "", *words, "", "The card:", "", card["text"].rstrip()]
    )
