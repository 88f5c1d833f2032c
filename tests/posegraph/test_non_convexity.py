"""Graduated non-convexity: closed-form weights, and loops told apart."""

import numpy as np
import pytest

from hybridtrack.posegraph import SE3, SIM3, SolveOptions
from hybridtrack.posegraph.non_convexity import graduated_weights, truncated_weights


@pytest.mark.parametrize("mu", [0.01, 1.0, 50.0])
def test_weights_minimise_the_surrogate(mu):
    """For each chi-square s the weight minimises w s + mu (1 - w) c^2 / (mu + w), by search over w (Yang et al. 2020,
    equation 10)."""
    limit = 16.0
    grid = np.linspace(0.0, 1.0, 200_001)
    penalty = mu * (1.0 - grid) / (mu + grid) * limit
    for s in [0.0, 0.5, 8.0, 15.9, 16.1, 40.0, 1700.0]:
        best = grid[np.argmin(grid * s + penalty)]
        assert truncated_weights(np.array([s]), limit, mu)[0] == pytest.approx(best, abs=1e-4)


@pytest.mark.parametrize("group", [SE3, SIM3], ids=["SE3", "Sim3"])
def test_wrong_loops_lose_their_weight(laps, group):
    """Among many right loops, wrong ones end at zero and right ones at one; the poses are those of the right ones."""
    made = laps(60, lap=12, seed=2, group=group, every=1)
    right = made.loops
    d = group.dimension
    wrong = [
        made.graph.add_constraint(
            a, b, "loop", made.measured(a, b, np.r_[0.6, -0.5, np.full(d - 2, 0.2)]), made.covariance
        )
        for a, b in [(3, 40), (10, 55), (20, 31)]
    ]
    odometry = list(range(59))
    weights, poses = graduated_weights(made.graph, odometry, [*right, *wrong], 22.5, SolveOptions())
    assert weights[: len(right)].tolist() == [1.0] * len(right)
    assert weights[len(right) :].tolist() == [0.0] * 3
    assert np.abs(poses[:, :3, 3] - made.truth[:, :3, 3]).max() < 0.1


def test_right_loops_alone_stop_at_once(laps):
    """Where every loop fits, no weight is touched."""
    made = laps(30, lap=10, seed=None)
    weights, poses = graduated_weights(made.graph, list(range(29)), made.loops, 22.5, SolveOptions())
    assert weights.tolist() == [1.0] * len(made.loops)
    assert np.abs(poses - made.truth).max() < 1e-8
