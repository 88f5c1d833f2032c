"""What every command shares on the terminal: progress and tables."""

import sys
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from pathlib import Path

from rich.console import Console
from rich.progress import BarColumn, Progress, TaskProgressColumn, TextColumn, TimeElapsedColumn
from rich.table import Table as TerminalTable

from hybridtrack.report.page import Table

# A log or a pipe has no width of its own: tables must not be cut there.
console = Console(highlight=False, width=None if sys.stdout.isatty() else 180)
ProgressCallback = Callable[[str, float], None]


@contextmanager
def shown_progress() -> Iterator[ProgressCallback]:
    """Yield `progress(stage, fraction)`; stages are shown one below the other, on standard error.

    Where standard error is no terminal (a log), a line is written when a stage begins.
    """
    terminal = Console(stderr=True, highlight=False)
    if not terminal.is_terminal:
        seen: set[str] = set()

        def log(stage: str, fraction: float) -> None:
            if stage not in seen:
                seen.add(stage)
                print(f"{stage} ...", file=sys.stderr, flush=True)

        yield log
        return
    columns = (TextColumn("{task.description:<28}"), BarColumn(), TaskProgressColumn(), TimeElapsedColumn())
    with Progress(*columns, console=terminal) as bars:
        tasks: dict[str, int] = {}

        def show(stage: str, fraction: float) -> None:
            if stage not in tasks:
                for earlier in tasks.values():
                    bars.update(earlier, completed=1.0)  # type: ignore[arg-type]
                tasks[stage] = bars.add_task(stage, total=1.0)
            bars.update(tasks[stage], completed=min(1.0, fraction))  # type: ignore[arg-type]

        yield show
        for task in tasks.values():
            bars.update(task, completed=1.0)  # type: ignore[arg-type]


def print_table(table: Table, title: str = "") -> None:
    """Print a report table on the terminal."""
    shown = TerminalTable(title=title or None, title_justify="left", box=None, pad_edge=False)
    for index, name in enumerate(table.columns):
        shown.add_column(name, justify="left" if index == 0 or index in table.prose else "right")
    for row in table.rows:
        shown.add_row(*row)
    console.print(shown)


def print_findings(findings: tuple[str, ...] | list[str]) -> None:
    """Print findings as a list."""
    for finding in findings:
        console.print(f"- {finding}", soft_wrap=True, markup=False)


def report_written(path: Path) -> None:
    """Say where the page is; always the last line of a command."""
    console.print(str(path), soft_wrap=True, markup=False)
