"""The share of an exposure in which set A is bright, in closed form, with its derivatives.

The light of set A over one cycle c in [0, 1) rises from 0 to 1 over `rise` from c = 0 and falls back over `fall` from
c = duty (both in cycles, 0 for a square wave). Its integral from cycle 0 to c is

    B(c) = floor(c) m + E(c - floor(c), rise) - E(c - floor(c) - duty, fall),    m = duty + (fall - rise) / 2
    E(x, w) = 0 for x < 0,  x^2 / 2w up to w,  x - w/2 from there on

and the share of an exposure from a to b is (B(b) - B(a)) / (b - a). Where cycles differ in strength, each counts with
its own, and the share is that of the strongest light.
"""

from dataclasses import dataclass

import numpy as np

Array = np.ndarray


@dataclass(frozen=True, eq=False)
class CycleStrengths:
    """`values` (C,): step of light of cycles `first`, `first` + 1, .. in parts of the strongest; the outermost ones
    hold beyond both ends."""

    first: int
    values: Array

    def of(self, cycle: Array) -> Array:
        """Strength (any shape) of whole cycles."""
        return self.values[np.clip(np.asarray(cycle, np.int64) - self.first, 0, len(self.values) - 1)]

    def before(self, cycle: Array) -> Array:
        """Sum (any shape) of the strengths from `first` up to, not including, whole cycles."""
        sums = np.concatenate([[0.0], np.cumsum(self.values)])
        place = np.asarray(cycle, np.int64) - self.first
        inside = np.clip(place, 0, len(self.values))
        return sums[inside] + (place - inside) * np.where(place < 0, self.values[0], self.values[-1])


@dataclass(frozen=True)
class Waveform:
    """Light of set A over a cycle: `duty`, and edges `rise`, `fall`, all in cycles; `strengths` of cycles that
    differ."""

    duty: float
    rise: float = 0.0
    fall: float = 0.0
    strengths: CycleStrengths | None = None

    def strength(self, cycle: Array) -> Array | float:
        """Strength of whole cycles."""
        return 1.0 if self.strengths is None else self.strengths.of(cycle)

    def strength_before(self, cycle: Array) -> Array:
        """Summed strength of the cycles ahead of whole cycles."""
        return cycle if self.strengths is None else self.strengths.before(cycle)


def edge_level(x: Array, width: float) -> Array:
    """Level of an edge that begins at x = 0 and lasts `width`."""
    return np.clip(x / width, 0.0, 1.0) if width > 0 else (x >= 0).astype(float)


def edge_integral(x: Array, width: float) -> Array:
    """Integral of `edge_level` up to x."""
    late = np.maximum(x - width, 0.0)
    inside = np.clip(x, 0.0, width)
    return (inside**2 / (2 * width) if width > 0 else 0.0) + late


def level(cycles: Array, wave: Waveform) -> Array:
    """Light (any shape) at a time in cycles."""
    whole = np.floor(cycles)
    part = cycles - whole
    return wave.strength(whole) * (edge_level(part, wave.rise) - edge_level(part - wave.duty, wave.fall))


def integral(cycles: Array, wave: Waveform) -> Array:
    """Integral of `level` from the first cycle, in cycles."""
    whole = np.floor(cycles)
    part = cycles - whole
    mean = wave.duty + 0.5 * (wave.fall - wave.rise)
    pulse = edge_integral(part, wave.rise) - edge_integral(part - wave.duty, wave.fall)
    return wave.strength_before(whole) * mean + wave.strength(whole) * pulse


def bright_share(start: Array, length: Array, wave: Waveform) -> Array:
    """Share (any shape) of exposures that begin at `start` and last `length` > 0, both in cycles."""
    return (integral(start + length, wave) - integral(start, wave)) / length


def bright_share_slopes(start: Array, length: Array, wave: Waveform) -> tuple[Array, Array, Array]:
    """Derivatives of `bright_share` by start, by length and by duty."""
    end = start + length
    begin_level, end_level = level(start, wave), level(end, wave)
    share = (integral(end, wave) - integral(start, wave)) / length

    def falls(cycles: Array) -> Array:
        whole = np.floor(cycles)
        return wave.strength_before(whole) + wave.strength(whole) * edge_level(cycles - whole - wave.duty, wave.fall)

    return (end_level - begin_level) / length, (end_level - share) / length, (falls(end) - falls(start)) / length
