"""Limits of a production line: a calibration passes or fails number by number.

A limits file is TOML or JSON, one table for each number, by the number's name:

    guard_deviations = 2.0            # optional, 0 if left out

    [lens.fx]
    min = 820.0
    max = 860.0
    max_sigma = 0.5

    [timing.line_time_ns]
    min = 9_900
    max = 10_100

`min` and `max` bound the value, `max_sigma` its deviation. With `guard_deviations` g a value passes only if it lies
within its bounds by g of its deviations (guarded acceptance, ISO 14253-1). A number that could not be determined fails.
"""

import json
import tomllib
from dataclasses import dataclass
from pathlib import Path
from typing import Any

from hybridtrack.calibration.named_numbers import KNOWN, Number
from hybridtrack.errors import FileFormatError, MissingFileError

BOUNDS = ("min", "max", "max_sigma")


@dataclass(frozen=True)
class Limit:
    """Bounds of one number; None where there is none."""

    name: str
    least: float | None = None
    most: float | None = None
    most_sigma: float | None = None


@dataclass(frozen=True)
class Limits:
    """All limits of a line."""

    limits: tuple[Limit, ...]
    guard_deviations: float = 0.0


@dataclass(frozen=True)
class LimitCheck:
    """One number against its limit; `reason` says why it failed, and is empty where it passed."""

    limit: Limit
    number: Number
    reason: str

    @property
    def passed(self) -> bool:
        """Whether the number holds its limit."""
        return not self.reason


def _number(source: str, name: str, bound: str, value: object) -> float:
    if isinstance(value, bool) or not isinstance(value, (int, float)) or value != value:
        raise FileFormatError(f"{source}: {name}.{bound}: a number is required, got {value!r}")
    return float(value)


def _tables(source: str, data: dict[str, Any], path: str = "") -> dict[str, dict[str, Any]]:
    """Tables that hold bounds, by the dotted path to them."""
    found: dict[str, dict[str, Any]] = {}
    for key, value in data.items():
        name = f"{path}.{key}" if path else key
        if not isinstance(value, dict):
            wanted = "; bounds are " + ", ".join(BOUNDS)
            raise FileFormatError(f"{source}: a table of bounds is required at '{name}', got {value!r:.40}{wanted}")
        is_block = name not in KNOWN and any(known.startswith(f"{name}.") for known in KNOWN)
        found |= _tables(source, value, name) if is_block else {name: value}
    return found


def _limit(source: str, name: str, table: dict[str, Any]) -> Limit:
    if name not in KNOWN:
        raise FileFormatError(f"{source}: a known number is required, got '{name}'; known are {', '.join(KNOWN)}")
    strange = [key for key in table if key not in BOUNDS]
    if strange or not table:
        got = f"'{strange[0]}'" if strange else "none"
        raise FileFormatError(f"{source}: {name}: bounds among {', '.join(BOUNDS)} are required, got {got}")
    least, most, most_sigma = (
        _number(source, name, bound, table[bound]) if bound in table else None for bound in BOUNDS
    )
    if least is not None and most is not None and least > most:
        raise FileFormatError(f"{source}: {name}: min at most max is required, got {least:g} and {most:g}")
    if most_sigma is not None and most_sigma <= 0:
        raise FileFormatError(f"{source}: {name}: max_sigma above zero is required, got {most_sigma:g}")
    return Limit(name, least, most, most_sigma)


def parse_limits(data: dict[str, Any], source: str) -> Limits:
    """Limits from a parsed document. Raises FileFormatError with the field, the requirement and the value received."""
    rest = dict(data)
    guard = _number(source, "guard_deviations", "value", rest.pop("guard_deviations", 0.0))
    if guard < 0:
        raise FileFormatError(f"{source}: guard_deviations: zero or more is required, got {guard:g}")
    limits = tuple(_limit(source, name, table) for name, table in _tables(source, rest).items())
    if not limits:
        raise FileFormatError(f"{source}: at least one number with a limit is required, got none")
    return Limits(limits, guard)


def load_limits(path: Path | str) -> Limits:
    """Read a limits file, JSON if it is named so, else TOML. Raises MissingFileError or FileFormatError."""
    file = Path(path)
    if not file.is_file():
        raise MissingFileError(f"{file}: expected a limits file (TOML or JSON), found none")
    try:
        text = file.read_text(encoding="utf-8")
        data = json.loads(text) if file.suffix.lower() == ".json" else tomllib.loads(text)
    except (json.JSONDecodeError, tomllib.TOMLDecodeError, UnicodeDecodeError) as error:
        raise FileFormatError(f"{file}: expected TOML or JSON text, got a syntax error ({error})") from None
    if not isinstance(data, dict):
        raise FileFormatError(f"{file}: expected tables of bounds, got {type(data).__name__}")
    return parse_limits(data, str(file))


def _reason(limit: Limit, number: Number, guard: float) -> str:
    if number.value is None:
        return "not determined"
    if number.sigma is None and (limit.most_sigma is not None or guard > 0):
        return "its deviation is not known"
    margin = guard * (number.sigma or 0.0)
    by_guard = f" by {guard:g} deviations" if guard else ""
    if limit.least is not None and number.value - margin < limit.least:
        return f"not above min{by_guard}"
    if limit.most is not None and number.value + margin > limit.most:
        return f"not below max{by_guard}"
    if limit.most_sigma is not None and number.sigma is not None and number.sigma > limit.most_sigma:
        return "its deviation is above max_sigma"
    return ""


def check_limits(numbers: dict[str, Number], limits: Limits) -> list[LimitCheck]:
    """Hold a calibration's `numbers` against the limits, in the order of the file."""
    checks = []
    for limit in limits.limits:
        number = numbers.get(limit.name, Number(None))
        checks.append(LimitCheck(limit, number, _reason(limit, number, limits.guard_deviations)))
    return checks
