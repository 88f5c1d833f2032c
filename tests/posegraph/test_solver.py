"""The solver is exact without noise, honest with it, and says how it ended."""

import numpy as np
import pytest
from scipy.stats import chi2

from hybridtrack.errors import OptionError
from hybridtrack.posegraph import SE3, SIM3, GemanMcClure, Huber, Marginals, PoseGraph, SolveOptions, solve

GROUPS = pytest.mark.parametrize("group", [SE3, SIM3], ids=["SE3", "Sim3"])


def disturbed(graph: PoseGraph, size: float, seed: int) -> PoseGraph:
    """The graph with all poses but the first moved by random tangent vectors."""
    rng = np.random.default_rng(seed)
    poses = graph.world_from_camera()
    poses[1:] = poses[1:] @ graph.group.exp(size * rng.normal(size=(len(poses) - 1, graph.group.dimension)))
    return graph.with_solution(poses, graph.constraints)


@GROUPS
def test_exact_without_noise(laps, group):
    """From poses disturbed by 0.2 m and 0.2 rad the truth comes back to 1e-9, with chi-square zero."""
    made = laps(60, seed=None, group=group)
    result = solve(disturbed(made.graph, 0.2, seed=1))
    assert result.status == "converged"
    assert np.abs(result.graph.world_from_camera() - made.truth).max() < 1e-9
    assert result.chi_square < 1e-12
    assert result.dof == group.dimension * (len(made.graph.constraints) - 59)
    assert result.p_value == pytest.approx(1.0)


@GROUPS
def test_chi_square_and_nees_are_honest(laps, group):
    """Over 100 noisy graphs: chi-square over dof, and joint NEES of all poses over theirs, average one.

    Limits are 4 standard errors of a mean of 100, plus 1 % for what is not linear; coverage as the trade asks.
    """
    ratios, nees, inside = [], [], 0
    for seed in range(100):
        made = laps(16, lap=6, seed=seed, group=group)
        result = solve(made.graph)
        assert result.status == "converged"
        ratios.append(result.chi_square / result.dof)
        error = group.log(group.inverse(result.graph.world_from_camera()[1:]) @ made.truth[1:]).ravel()
        squared = error @ np.linalg.solve(Marginals(result).joint(made.graph.ids[1:]), error)
        nees.append(squared / len(error))
        inside += squared < chi2.ppf(0.95, len(error))
    assert abs(np.mean(ratios) - 1.0) < 0.01 + 4.0 * np.sqrt(2.0 / result.dof / 100.0)
    assert abs(np.mean(nees) - 1.0) < 0.01 + 4.0 * np.sqrt(2.0 / len(error) / 100.0)
    assert 0.88 <= inside / 100.0 <= 0.99


@GROUPS
def test_a_prior_fixes_the_gauge(laps, group):
    """With a prior no pose is held: the solution moves to where the prior says."""
    made = laps(30, lap=10, seed=None, group=group)
    away = group.exp(0.3 * np.ones(group.dimension))
    shifted = made.graph.with_solution(away @ made.graph.world_from_camera(), made.graph.constraints)
    shifted.add_prior(7, made.truth[7], made.covariance)
    result = solve(shifted)
    assert result.status == "converged"
    assert np.abs(result.graph.world_from_camera() - made.truth).max() < 1e-9


def test_components_keep_their_own_gauge(laps):
    """Two segments that nothing ties are solved each in its own frame."""
    one, two = laps(25, lap=10, seed=1), laps(25, lap=10, seed=2)
    graph = one.graph
    for pose in two.graph.poses:
        graph.add_pose(100 + pose.id, 10**9 + pose.t_ns, pose.world_from_camera, segment=1)
    for c in two.graph.constraints:
        graph.add_constraint(100 + c.from_id, 100 + c.to_id, c.kind, c.from_from_to, c.covariance)
    result = solve(graph)
    alone = [solve(laps(25, lap=10, seed=seed).graph) for seed in (1, 2)]
    assert result.chi_square == pytest.approx(alone[0].chi_square + alone[1].chi_square, rel=1e-9)
    together = result.graph.world_from_camera()
    assert np.abs(together[:25] - alone[0].graph.world_from_camera()).max() < 1e-8
    assert np.abs(together[25:] - alone[1].graph.world_from_camera()).max() < 1e-8


def test_verdicts_of_a_plain_solve(laps):
    """Constraints in cycles are kept, those in none untested, rejected ones stay out but get a chi-square."""
    made = laps(30, lap=20)
    wrong = made.measured(3, 25, np.array([1.0, 0, 0, 0, 0, 0]))
    index = made.graph.add_constraint(3, 25, "loop", wrong, made.covariance)
    marked = [*made.graph.constraints]
    marked[index] = type(marked[index])(3, 25, "loop", wrong, made.covariance, verdict="rejected")
    result = solve(made.graph.with_solution(made.graph.world_from_camera(), marked))
    assert result.graph.constraint(index).verdict == "rejected"
    assert result.graph.constraint(index).chi_square > 100.0
    assert result.weights[index] == 0.0
    assert result.graph.constraint(28).verdict == "untested"
    assert result.graph.constraint(28).chi_square < 1e-12
    assert result.graph.constraint(5).verdict == "kept"


@pytest.mark.parametrize(("loss", "start_at_truth"), [(Huber(2.0), False), (GemanMcClure(2.0), True)])
def test_robust_losses_resist_a_wrong_loop_among_right_ones(laps, loss, start_at_truth):
    """With many right loops, a wrong one of 0.5 m is down-weighted and moves the poses far less than without a loss.

    Geman and McClure's loss is not convex and needs a near start: from chained odometry it lets go of every loop.
    """
    made = laps(60, lap=20, every=2)
    index = made.graph.add_constraint(
        5, 45, "loop", made.measured(5, 45, np.array([0.5, 0, 0, 0, 0, 0.0])), made.covariance
    )
    start = made.graph.with_solution(made.truth, made.graph.constraints) if start_at_truth else made.graph
    robust, plain = solve(start, SolveOptions(loss=loss)), solve(start)

    def worst(result):
        return np.abs(result.graph.world_from_camera()[:, :3, 3] - made.truth[:, :3, 3]).max()

    assert robust.status == "converged"
    assert robust.graph.constraint(index).verdict == "down-weighted"
    assert worst(robust) < 0.6 * worst(plain)


def test_input_graph_is_not_changed(laps):
    """Solving returns a copy."""
    made = laps(25)
    before = made.graph.world_from_camera()
    solve(made.graph)
    assert np.array_equal(made.graph.world_from_camera(), before)
    assert {c.chi_square for c in made.graph.constraints} == {None}


def test_says_when_it_stalls(laps):
    """One iteration is not enough from far away, and the status says so."""
    made = laps(60, seed=None)
    result = solve(disturbed(made.graph, 0.2, seed=1), SolveOptions(max_iterations=1))
    assert (result.status, result.iterations) == ("stalled", 1)


def test_says_when_numbers_overflow(laps):
    """A start whose residuals have no finite square ends as diverged, with the poses as they were."""
    graph = laps(10, lap=5).graph
    poses = graph.world_from_camera()
    poses[4, :3, 3] = 1e200
    result = solve(graph.with_solution(poses, graph.constraints))
    assert result.status == "diverged"
    assert np.allclose(result.graph.world_from_camera()[4], poses[4], rtol=1e-12, atol=1e-12)


def test_nothing_to_estimate_is_converged():
    """A single pose has no freedom: its place, no chi-square, no p-value."""
    graph = PoseGraph()
    graph.add_pose(0, 0, np.eye(4))
    result = solve(graph)
    assert (result.status, result.dof, result.chi_square, result.p_value) == ("converged", 0, 0.0, None)


def test_refuses_options_out_of_range():
    """Limits that cannot work are refused when built."""
    with pytest.raises(OptionError, match="max_iterations: expected at least 1, got 0"):
        SolveOptions(max_iterations=0)
    with pytest.raises(OptionError, match=r"relative_decrease: expected a number in \(0, 1\), got 1"):
        SolveOptions(relative_decrease=1.0)


@pytest.mark.study
def test_time_grows_about_linearly_with_laps(laps):
    """Four times the poses of the same laps take less than eight times as long to solve."""
    from time import perf_counter

    def seconds(count: int) -> float:
        graph = laps(count, lap=200, every=7).graph
        times = []
        for _ in range(3):
            start = perf_counter()
            assert solve(graph).status == "converged"
            times.append(perf_counter() - start)
        return min(times)

    assert seconds(4000) < 8.0 * seconds(1000)
