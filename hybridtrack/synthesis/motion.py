"""Smooth motion of the camera with its exact derivatives.

A trajectory is a position curve and a rotation-vector curve about a resting attitude,
`R(t) = R_rest exp(phi(t))`, both at least twice differentiable. The angular velocity in camera axes is
`J_r(phi) dphi/dt` (Barfoot 2017).
"""

from dataclasses import dataclass
from functools import cached_property
from typing import Literal, Protocol

import numpy as np
from pydantic import Field
from scipy.interpolate import BSpline, make_interp_spline

from hybridtrack.errors import ShapeError
from hybridtrack.geometry import se3, so3
from hybridtrack.geometry.arrays import FloatArray, with_trailing_shape
from hybridtrack.synthesis.recipe_parts import Strict

Array = np.ndarray


class Curve(Protocol):
    """A vector in three dimensions over time."""

    def at(self, t_s: FloatArray, derivative: int = 0) -> FloatArray:
        """Value (T, 3) or derivative at times (T,) in s."""
        ...


@dataclass(frozen=True)
class Sinusoids:
    """`offset + sum_k amplitude_k sin(2 pi hz_k t + phase_k)`: (3,), (K, 3), (K,) and (K, 3) rad."""

    offset: FloatArray
    amplitude: FloatArray
    hz: FloatArray
    phase: FloatArray

    def at(self, t_s: FloatArray, derivative: int = 0) -> FloatArray:
        """Value (T, 3) or derivative; a derivative turns each sine by a quarter and scales it by its rate."""
        rate = 2.0 * np.pi * np.asarray(self.hz, float)[:, None]
        angle = np.asarray(t_s, float)[:, None, None] * rate + self.phase + 0.5 * np.pi * derivative
        moved = (np.asarray(self.amplitude) * rate**derivative * np.sin(angle)).sum(axis=1)
        return np.asarray(moved + (np.asarray(self.offset, float) if derivative == 0 else 0.0))


@dataclass(frozen=True)
class CubicSpline:
    """Cubic B-spline through `values` (K, 3) at rising times `t_s` (K,), K at least 4; beyond its ends it runs on."""

    t_s: FloatArray
    values: FloatArray

    def __post_init__(self) -> None:
        """Refuse times that do not rise or do not match."""
        times = np.asarray(self.t_s, float)
        if len(times) < 4 or np.any(np.diff(times) <= 0) or np.shape(self.values) != (len(times), 3):
            shapes = f"{np.shape(times)} and {np.shape(self.values)}"
            raise ShapeError(f"Expected at least 4 rising times and as many values of 3, got {shapes}.")

    @cached_property
    def _spline(self) -> BSpline:
        return make_interp_spline(np.asarray(self.t_s, float), np.asarray(self.values, float), k=3)

    def at(self, t_s: FloatArray, derivative: int = 0) -> FloatArray:
        """Value (T, 3) or derivative at times (T,)."""
        return np.asarray(self._spline(np.asarray(t_s, float), nu=derivative))


@dataclass(frozen=True)
class Trajectory:
    """Position in world axes and rotation vector about `rest` (3, 3), `world_from_camera` at rest. Times in ns."""

    rest: FloatArray
    position: Curve
    rotation: Curve

    def _seconds(self, t_ns: Array) -> FloatArray:
        return np.atleast_1d(np.asarray(t_ns, float)) * 1e-9

    def poses(self, t_ns: Array) -> FloatArray:
        """`world_from_camera` (T, 4, 4) at times (T,)."""
        t = self._seconds(t_ns)
        return se3.compose(np.asarray(self.rest) @ so3.exp(self.rotation.at(t)), self.position.at(t))

    def velocity(self, t_ns: Array) -> FloatArray:
        """Velocity (T, 3), world axes, m/s."""
        return self.position.at(self._seconds(t_ns), 1)

    def acceleration(self, t_ns: Array) -> FloatArray:
        """Acceleration (T, 3), world axes, m/s^2, gravity not included."""
        return self.position.at(self._seconds(t_ns), 2)

    def angular_velocity(self, t_ns: Array) -> FloatArray:
        """Angular velocity (T, 3), camera axes, rad/s."""
        t = self._seconds(t_ns)
        jacobian = so3.right_jacobian(self.rotation.at(t))
        return np.asarray((jacobian @ self.rotation.at(t, 1)[..., None])[..., 0])

    def twists(self, t_ns: Array) -> FloatArray:
        """Translation and rotation rates (T, 6) in camera axes: the right-side perturbation a second."""
        R = self.poses(t_ns)[:, :3, :3]
        linear = np.swapaxes(R, -1, -2) @ self.velocity(t_ns)[..., None]
        return np.concatenate([linear[..., 0], self.angular_velocity(t_ns)], axis=1)


def looking(forward: FloatArray) -> FloatArray:
    """Attitude (3, 3) of a level camera that looks along `forward` (3,), world z up; ShapeError on the vertical."""
    forward = with_trailing_shape(forward, "forward", (3,))
    right = np.cross(forward, [0.0, 0.0, 1.0])
    if np.linalg.norm(right) < 1e-6 * np.linalg.norm(forward):
        raise ShapeError("Expected `forward` off the vertical, got a direction straight up or down.")
    z, x = forward / np.linalg.norm(forward), right / np.linalg.norm(right)
    return np.stack([x, np.cross(z, x), z], axis=1)


class LapMotion(Strict):
    """The trolley goes round an oval above the benches, always looking the same way, and sways as it hangs.

    Half axes along and across the benches, bob up and down, all in m; `lap_s` a round; `pitch_deg` below the horizon.
    The swing has three rates near `sway_hz`, whole numbers of swings a lap, so that the path closes.
    """

    preset: Literal["lap"] = "lap"
    lap_s: float = Field(default=5.6, gt=0)
    half_length_m: float = Field(default=1.0, gt=0, le=3.0)
    half_width_m: float = Field(default=0.32, ge=0, le=1.0)
    height_m: float = Field(default=2.3, gt=0.5, lt=2.8)
    bob_m: float = Field(default=0.06, ge=0)
    pitch_deg: float = Field(default=50.0, gt=-89, lt=89)
    sway_deg: float = Field(default=2.0, ge=0, lt=30)
    sway_hz: float = Field(default=0.6, ge=0)

    def trajectory(self, random: np.random.Generator) -> Trajectory:
        """The motion, its phases drawn."""
        lap = 1.0 / self.lap_s
        start = random.uniform(0, 2 * np.pi)
        # The third harmonic evens the speed along the oval's long sides: a fifth more way at the same top speed.
        hz = lap * np.array([1.0, 3.0, 2.0])
        length, width = self.half_length_m, self.half_width_m
        amplitude = np.array([[length, width, 0], [0.08 * length, 0, 0], [0, 0, self.bob_m]])
        quarter = 0.5 * np.pi
        bob = random.uniform(0, 2 * np.pi)
        phase = np.array([[start + quarter, start, 0], [3 * start + quarter, 0, 0], [0, 0, bob]])
        swings = np.maximum(np.rint(self.sway_hz * self.lap_s * np.array([0.7, 1.0, 1.5])), 1.0)
        share = np.array([[0.6, 0.5, 0.4], [0.3, 0.4, 0.8], [0.25, 0.2, 0.25]])
        rotation = Sinusoids(
            np.zeros(3), np.deg2rad(self.sway_deg) * share, lap * swings, random.uniform(0, 2 * np.pi, (3, 3))
        )
        pitch = np.deg2rad(self.pitch_deg)
        rest = looking(np.array([0.0, np.cos(pitch), -np.sin(pitch)]))
        return Trajectory(rest, Sinusoids(np.array([0, 0, self.height_m]), amplitude, hz, phase), rotation)


class ReversingMotion(Strict):
    """The trolley shakes to and fro on one spot: the same path at any speed.

    `amplitude_px` is the reach of picture motion on either side, at `distance_m`; `peak_px_s` the speed in its middle;
    zero stands still. `rotation_share` of the motion is turning, the rest is sliding along the picture plane.
    """

    preset: Literal["reversing"] = "reversing"
    peak_px_s: float = Field(default=1000.0, ge=0)
    amplitude_px: float = Field(default=60.0, gt=0)
    rotation_share: float = Field(default=0.5, ge=0, le=1)
    distance_m: float = Field(default=2.0, gt=0)
    place_m: tuple[float, float, float] = (0.0, 0.0, 2.3)
    pitch_deg: float = Field(default=50.0, gt=-89, lt=89)

    def trajectory(self, random: np.random.Generator, focal_px: float) -> Trajectory:
        """The motion for a lens of `focal_px`, its direction and phases drawn."""
        heading, start = random.uniform(0, 2 * np.pi, 2)
        hz = self.peak_px_s / (2 * np.pi * self.amplitude_px)
        turn = self.rotation_share * self.amplitude_px / focal_px
        slide = (1 - self.rotation_share) * self.amplitude_px / focal_px * self.distance_m
        along = np.array([np.cos(heading), np.sin(heading)])
        across = np.array([-along[1], along[0]])
        pitch = np.deg2rad(self.pitch_deg)
        rest = looking(np.array([0.0, np.cos(pitch), -np.sin(pitch)]))
        # A slower and smaller swing across keeps the way back off the way out.
        rates, phases = hz * np.array([1.0, 0.61]), np.repeat([[start], [random.uniform(0, 2 * np.pi)]], 3, axis=1)
        shift = np.array([[*along, 0.0], [*(0.3 * across), 0.0]]) * slide @ rest.T
        # Sliding along (u, v) moves the picture along (-u, -v), as turning about (-v, u) does.
        rotation = np.array([[-along[1], along[0], 0.0], [-0.3 * across[1], 0.3 * across[0], 0.15]]) * turn
        place = np.asarray(self.place_m, float)
        return Trajectory(rest, Sinusoids(place, shift, rates, phases), Sinusoids(np.zeros(3), rotation, rates, phases))
