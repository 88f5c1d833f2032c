"""Graphs of known truth: laps of a swaying circle, with loops between laps."""

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
import pytest

from hybridtrack.geometry import se3, so3
from hybridtrack.posegraph import SE3, Group, PoseGraph

Array = np.ndarray

SIGMA = {6: np.array([0.01] * 3 + [0.002] * 3), 7: np.array([0.01] * 3 + [0.002] * 3 + [0.003])}


@dataclass(frozen=True)
class Laps:
    """A graph, the true poses (N, 4, 4) in its order, and the covariance of every constraint."""

    graph: PoseGraph
    truth: Array
    covariance: Array

    @property
    def loops(self) -> list[int]:
        return [i for i, c in enumerate(self.graph.constraints) if c.kind == "loop"]

    def measured(self, start: int, end: int, error: Array) -> Array:
        """True motion from start to end, disturbed on the right by a tangent vector."""
        return np.linalg.inv(self.truth[start]) @ self.truth[end] @ self.graph.group.exp(error)


def true_path(count: int, lap: int) -> Array:
    """Poses (count, 4, 4): a circle of 5 m with a sway of 0.3 m, looking along it."""
    angle = 2.0 * np.pi * np.arange(count) / lap
    turn = np.stack([0.1 * np.sin(3.0 * angle), angle, 0.05 * np.cos(2.0 * angle)], axis=1)
    place = np.stack([5.0 * np.sin(angle), 0.3 * np.sin(2.3 * angle), 5.0 * np.cos(angle)], axis=1)
    return se3.compose(so3.exp(turn), place)


def make_laps(
    count: int = 60, lap: int = 20, seed: int | None = 0, group: Group = SE3, every: int = 5, size: float = 1.0
) -> Laps:
    """Odometry along the path and a loop to the lap before at every fifth pose; no noise where `seed` is None.

    The graph starts at chained odometry. `size` multiplies all deviations.
    """
    sigma = size * SIGMA[group.dimension]
    rng = np.random.default_rng(seed)
    laps = Laps(PoseGraph(group), true_path(count, lap), np.diag(sigma**2))

    def noise() -> Array:
        return np.zeros(group.dimension) if seed is None else sigma * rng.normal(size=group.dimension)

    steps = [laps.measured(i, i + 1, noise()) for i in range(count - 1)]
    estimate = laps.truth[0]
    laps.graph.add_pose(0, 0, estimate)
    for i, step in enumerate(steps):
        estimate = estimate @ step
        laps.graph.add_pose(i + 1, (i + 1) * 1_000_000, estimate)
        laps.graph.add_constraint(i, i + 1, "odometry", step, laps.covariance)
    for i in range(lap, count, every):
        back = i - lap + int(rng.integers(0, 3))
        laps.graph.add_constraint(back, i, "loop", laps.measured(back, i, noise()), laps.covariance)
    return laps


@pytest.fixture
def laps() -> Callable[..., Laps]:
    """The builder `make_laps`."""
    return make_laps
