"""Lamps over time: steady, mains flicker or pulsed, with exact integrals.

Levels are relative to the lamps' mean, so that a scene is as bright on average whatever the lamps do.
"""

from typing import Literal

import numpy as np
from pydantic import Field, model_validator

from hybridtrack.synthesis.recipe_parts import Strict

Array = np.ndarray

_SAMPLES_A_CYCLE = 24


class LampRecipe(Strict):
    """`steady`; `flicker`: 1 + depth sin(2 pi rate t); `pulsed`: on for `duty` of each cycle, with `edge_us` ramps.

    `white_dn` is what a white surface shows in a frame, linear DN above black: lower it for a dim room. `daylight` is
    the share of the mean light that does not come from the lamps.
    """

    kind: Literal["steady", "flicker", "pulsed"] = "steady"
    white_dn: float = Field(default=280.0, gt=0)
    rate_hz: float = Field(default=100.0, gt=0)
    depth: float = Field(default=0.3, ge=0, le=1)
    duty: float = Field(default=0.5, gt=0, lt=1)
    edge_us: float = Field(default=10.0, gt=0)
    daylight: float = Field(default=0.3, ge=0, le=1)
    phase: float = Field(default=0.0, ge=0, le=1, description="part of a cycle")

    @model_validator(mode="after")
    def _edges_fit(self) -> "LampRecipe":
        if self.kind == "pulsed" and self.edge_us * 1e-6 * self.rate_hz >= min(self.duty, 1 - self.duty):
            raise ValueError("edge_us must be shorter than the lamp's on and off times")
        return self

    def _cycles(self, t_ns: Array) -> Array:
        return np.asarray(t_ns, float) * 1e-9 * self.rate_hz + self.phase

    def level(self, t_ns: Array) -> Array:
        """Light relative to its mean at times (T,)."""
        cycles = self._cycles(t_ns)
        if self.kind == "steady":
            return np.ones_like(cycles)
        if self.kind == "flicker":
            lamps = 1.0 + self.depth * np.sin(2 * np.pi * cycles)
        else:
            place, edge = cycles % 1.0, self._edge
            lamps = np.clip(np.minimum(place, self.duty + edge - place) / edge, 0.0, 1.0) / self.duty
        return self.daylight + (1.0 - self.daylight) * lamps

    @property
    def _edge(self) -> float:
        """Length of a ramp, as part of a cycle."""
        return self.edge_us * 1e-6 * self.rate_hz

    def integral_ns(self, t_ns: Array) -> Array:
        """Integral of `level` from time 0 to times (T,), in ns."""
        t = np.asarray(t_ns, float)
        if self.kind == "steady":
            return t
        cycles = self._lamp_cycles(self._cycles(t)) - self._lamp_cycles(self._cycles(np.zeros(1)))
        return np.asarray(self.daylight * t + (1.0 - self.daylight) * cycles * 1e9 / self.rate_hz)

    def _lamp_cycles(self, cycles: Array) -> Array:
        """Integral of the lamps' part over cycles, from cycle 0."""
        if self.kind == "flicker":
            return cycles + self.depth * (1.0 - np.cos(2 * np.pi * cycles)) / (2 * np.pi)
        whole, place, edge = np.floor(cycles), cycles % 1.0, self._edge
        ramp_up, ramp_down = np.clip(place, 0, edge), np.clip(place - self.duty, 0, edge)
        on = np.clip(place - edge, 0, None) - np.clip(place - self.duty, 0, None)
        # Half of a ramp's square over its length is what the ramp lets through.
        return whole + (0.5 * ramp_up**2 / edge + on + ramp_down - 0.5 * ramp_down**2 / edge) / self.duty

    def turning_points_ns(self, t0_ns: float, t1_ns: float) -> Array:
        """Times in between at which `level` must be sampled to be nearly straight lines."""
        if self.kind == "steady":
            return np.empty(0)
        if self.kind == "flicker":
            places = np.arange(_SAMPLES_A_CYCLE) / _SAMPLES_A_CYCLE
        else:
            places = np.array([0.0, self._edge, self.duty, self.duty + self._edge])
        first, last = np.floor(self._cycles(np.array([t0_ns, t1_ns])))
        cycles = (np.arange(first - 1, last + 2)[:, None] + places).ravel()
        times = np.sort(cycles - self.phase) * 1e9 / self.rate_hz
        return times[(times > t0_ns) & (times < t1_ns)]
