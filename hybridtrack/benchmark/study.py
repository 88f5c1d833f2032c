"""What a study returns: a table of recordings, and checks against stated limits."""

import csv
import io
from dataclasses import dataclass
from pathlib import Path

from hybridtrack.files import write_text


@dataclass(frozen=True)
class Check:
    """One limit: `value` must be at most (or at least) `limit`, both in `unit`; NaN fails."""

    name: str
    value: float
    limit: float
    unit: str = ""
    at_least: bool = False

    @property
    def passed(self) -> bool:
        """Whether the limit holds."""
        return self.value >= self.limit if self.at_least else self.value <= self.limit

    def sentence(self) -> str:
        """The check in words, its outcome first."""
        side = "at least" if self.at_least else "at most"
        outcome = "holds" if self.passed else "FAILS"
        return f"{outcome}: {self.name} {self.value:.4g} {self.unit} ({side} {self.limit:g})".replace("  ", " ")


@dataclass(frozen=True)
class Study:
    """A finished study: heads and rows of a table as text, checks, and notes on how it was done."""

    title: str
    columns: tuple[str, ...]
    rows: tuple[tuple[str, ...], ...]
    checks: tuple[Check, ...]
    notes: tuple[str, ...] = ()

    @property
    def passed(self) -> bool:
        """Whether every check holds."""
        return all(check.passed for check in self.checks)


def write_study_csv(study: Study, path: Path | str) -> None:
    """Write the table as CSV, atomically."""
    buffer = io.StringIO()
    writer = csv.writer(buffer, lineterminator="\n")
    writer.writerow(study.columns)
    writer.writerows(study.rows)
    write_text(path, buffer.getvalue())
