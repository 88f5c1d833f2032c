"""Blinking calibration targets. Layout `hybridtrack-target`, version 1."""

from pathlib import Path
from typing import Literal

import numpy as np
from pydantic import Field, model_validator

from hybridtrack.files import read_document, write_document
from hybridtrack.module.layout import Array, Part

LAYOUT = "hybridtrack-target"


class Target(Part):
    """A blinking checker board.

    Set A holds square (0, 0) and every square of the same colour; it is bright for `duty` of each cycle. On a
    shuttered board set B stays dark, on a counterphase board it is bright for the rest of the cycle.
    """

    format: Literal["hybridtrack-target"] = "hybridtrack-target"
    version: float = 1
    name: str = ""
    kind: Literal["shuttered_checker", "counterphase_checker"]
    columns: int = Field(ge=3)
    rows: int = Field(ge=3)
    square_m: float | tuple[float, float]
    blink_hz: float = Field(gt=0)
    duty: float = Field(default=0.5, gt=0, lt=1)
    steady_dark: list[tuple[int, int]] = []
    levels: list[float] | None = None
    scanout_s: float = Field(default=0.0, ge=0)
    scan_direction: Literal["down", "up", "left", "right"] = "down"
    rise_s: float | None = Field(default=None, ge=0)
    fall_s: float | None = Field(default=None, ge=0)
    square_sigma_m: float | None = Field(default=None, ge=0)
    flatness_sigma_m: float | None = Field(default=None, ge=0)

    @model_validator(mode="after")
    def _consistent(self) -> "Target":
        if (self.columns + self.rows) % 2 == 0:
            raise ValueError(f"one of columns and rows must be even, the other odd (got {self.columns}x{self.rows})")
        if min(self.square_xy_m) <= 0:
            raise ValueError(f"square_m must be positive (got {self.square_m})")
        outside = [s for s in self.steady_dark if not (0 <= s[0] < self.columns and 0 <= s[1] < self.rows)]
        if outside:
            raise ValueError(f"steady_dark squares must lie on the board (got {outside[0]})")
        return self

    @property
    def square_xy_m(self) -> tuple[float, float]:
        """Square size along x and y, in metres."""
        return self.square_m if isinstance(self.square_m, tuple) else (self.square_m, self.square_m)

    @property
    def is_counterphase(self) -> bool:
        """Whether set B is bright while set A is dark."""
        return self.kind == "counterphase_checker"

    def corners_m(self) -> Array:
        """Inner corners (rows - 1, columns - 1, 3) on the board, indexed [j - 1, i - 1], in metres, z = 0."""
        size_x, size_y = self.square_xy_m
        x, y = np.meshgrid(np.arange(1, self.columns) * size_x, np.arange(1, self.rows) * size_y)
        return np.stack([x, y, np.zeros_like(x)], axis=-1)

    def square_sets(self) -> Array:
        """What each square does, int8 (rows, columns): 1 blinks with set A, -1 with set B, 0 never brightens."""
        columns, rows = np.meshgrid(np.arange(self.columns), np.arange(self.rows))
        sets = np.where((columns + rows) % 2 == 0, 1, -1 if self.is_counterphase else 0).astype(np.int8)
        for column, row in self.steady_dark:
            sets[row, column] = 0
        return sets


def load_target(path: Path | str) -> Target:
    """Read a `*.target.json` file. Raises MissingFileError or FileFormatError."""
    return read_document(path, Target, LAYOUT)


def save_target(target: Target, path: Path | str) -> None:
    """Write a target atomically, unknown fields included."""
    write_document(path, target)
