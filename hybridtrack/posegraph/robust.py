"""Solve a pose graph whose loops may be wrong, and say of each loop why it was kept or rejected.

Four stages, each with the same chi-square confidence:
1. pairwise consistency with odometry and among loops (`consistency.py`, Mangelson et al. 2018);
2. graduated non-convexity over the survivors (`non_convexity.py`, Yang et al. 2020);
3. loops rejected so far that agree with the solution within its own uncertainty come back;
4. deletion test: a loop's residual at the solution is small even where the loop is wrong, for it bends the weaker
   odometry. Normalised by the covariance it has *after* the fit, C - J P J', it is as large as the misfit that the
   solution without this loop would predict (Baarda 1968). The worst loop beyond the limit is rejected, and the graph
   solved again, until none is left.
"""

from collections.abc import Sequence
from dataclasses import dataclass, field, replace

import numpy as np
from scipy.stats import chi2

from hybridtrack.errors import OptionError
from hybridtrack.posegraph.consistency import consistent_loops
from hybridtrack.posegraph.graph import WORLD, PoseGraph
from hybridtrack.posegraph.levenberg_marquardt import SolveOptions
from hybridtrack.posegraph.marginals import Marginals
from hybridtrack.posegraph.non_convexity import graduated_weights
from hybridtrack.posegraph.problem import build_problem, gauge, linearise
from hybridtrack.posegraph.solver import KEPT_WEIGHT, SolveResult, solve

Array = np.ndarray

# Below this share of its variance left after the fit, a loop's residual tells rounding, not truth.
SMALLEST_REDUNDANCY = 1e-9


@dataclass(frozen=True)
class RobustOptions:
    """Confidence of every test; kinds of constraint that may be wrong; whether odometry's covariances are honest.

    With `trust_odometry` false, loops are not tested against odometry alone (part of stage 1, and stages 3 and 4):
    only against one another.
    """

    confidence: float = 0.999
    loop_kinds: tuple[str, ...] = ("loop",)
    trust_odometry: bool = True
    solve: SolveOptions = field(default_factory=SolveOptions)

    def __post_init__(self) -> None:
        if not 0.5 <= self.confidence < 1.0:
            raise OptionError(f"confidence: expected a number in [0.5, 1), got {self.confidence}")


@dataclass(frozen=True, eq=False)
class RobustResult(SolveResult):
    """A solved graph with, by constraint index, a sentence for every loop that was rejected.

    `is_exact` is false where the largest consistent set of loops could not be proven largest.
    """

    reasons: dict[int, str]
    is_exact: bool


def _loop_tests(result: SolveResult, loops: Sequence[int], included: bool) -> list[tuple[float, int]]:
    """(chi-square, degrees of freedom) of each loop's residual normalised by its covariance at the solution.

    That covariance is C - J P J' for loops that took part in the solution (`included`), C + J P J' for others.
    """
    graph, d = result.graph, result.graph.group.dimension
    marginals = Marginals(result)
    tests = []
    for index in loops:
        constraint = graph.constraint(index)
        pair = PoseGraph(graph.group)
        ends = [i for i in (constraint.from_id, constraint.to_id) if i != WORLD]
        for number, pose_id in enumerate(ends):
            pair.add_pose(pose_id, number, graph.pose(pose_id).world_from_camera)
        pair.add(constraint)
        line = linearise(build_problem(pair, [0]), np.concatenate([pair.world_from_camera(), np.eye(4)[None]]))
        by_ends = np.concatenate([line.by_a[0], line.by_b[0]], axis=1)[:, -d * len(ends) :]
        spread = by_ends @ marginals.joint(ends) @ by_ends.T
        values, vectors = np.linalg.eigh(np.eye(d) - spread if included else np.eye(d) + spread)
        testable = values > SMALLEST_REDUNDANCY
        along = vectors.T @ line.residual[0]
        tests.append((float(np.sum(along[testable] ** 2 / values[testable])), int(testable.sum())))
    return tests


def _excess(test: tuple[float, int], confidence: float) -> float:
    """Chi-square over its limit; zero where nothing could be tested."""
    value, freedom = test
    return value / float(chi2.ppf(confidence, freedom)) if freedom else 0.0


def _start(graph: PoseGraph, poses: Array, indices: Sequence[int]) -> PoseGraph:
    """The graph at `poses` (N, 4, 4), each component moved as a whole so that its fixed pose keeps its place."""
    held = gauge(graph, indices)
    row = {pose_id: number for number, pose_id in enumerate(graph.ids)}
    moved = poses.copy()
    for component in graph.components(indices):
        rows = [row[i] for i in component if i != WORLD]
        fixed = next(iter(component & held))
        if fixed != WORLD:
            back = graph.pose(fixed).world_from_camera @ graph.group.inverse(poses[row[fixed]])
            moved[rows] = back @ poses[rows]
    return graph.with_solution(moved, graph.constraints)


def _solve_with(
    graph: PoseGraph, poses: Array, trusted: Sequence[int], kept: Sequence[int], options: SolveOptions
) -> SolveResult:
    chosen = [*trusted, *kept]
    start = _start(graph, poses, chosen)
    used = set(chosen)
    marked = [replace(c, verdict="untested" if i in used else "rejected") for i, c in enumerate(start.constraints)]
    return solve(start.with_solution(start.world_from_camera(), marked), options)


def _readmitted(result: SolveResult, rejected: Sequence[int], confidence: float) -> list[int]:
    """Rejected loops that agree with the solution, among those whose ends it ties together."""
    tied = [i for i in rejected if result.graph.constraint(i).chi_square is not None]
    tests = _loop_tests(result, tied, included=False)
    return [i for i, test in zip(tied, tests, strict=True) if _excess(test, confidence) <= 1.0]


def _first_rejections(
    graph: PoseGraph, trusted: Sequence[int], loops: Sequence[int], options: RobustOptions
) -> tuple[dict[int, str], Array, bool]:
    """Stages 1 and 2: reasons by constraint index, poses (N, 4, 4), and whether the clique is proven largest."""
    agreed = consistent_loops(graph, loops, trusted, options.confidence, options.trust_odometry)
    limit = float(chi2.ppf(options.confidence, graph.group.dimension))
    reasons = {}
    for row in np.flatnonzero(~agreed.kept):
        against = agreed.against_odometry[row]
        if agreed.contested[row]:
            sentence = "contradicts another loop, and nothing tells which of the two is right"
        elif options.trust_odometry and against > limit:
            sentence = f"contradicts odometry (chi-square {against:.1f}, limit {limit:.1f})"
        else:
            sentence = "contradicts loops of the largest consistent set"
        reasons[agreed.loops[row]] = sentence
    survivors = [i for i in loops if i not in reasons]
    weights, poses = graduated_weights(graph, trusted, survivors, limit, options.solve)
    for index, weight in zip(survivors, weights, strict=True):
        if weight < KEPT_WEIGHT:
            reasons[index] = "contradicts the other constraints in the joint solution"
    return reasons, poses, agreed.is_exact


def solve_robust(graph: PoseGraph, options: RobustOptions | None = None) -> RobustResult:
    """Solve with all constraints but loops that contradict the rest; every loop is judged anew.

    The graph is not changed; the result's graph has a chi-square and a verdict on every constraint. Raises
    DegenerateDataError where the graph is empty or a segment falls apart.
    """
    chosen = options or RobustOptions()
    loops = [i for i, c in enumerate(graph.constraints) if c.kind in chosen.loop_kinds]
    trusted = [
        i for i, c in enumerate(graph.constraints) if c.kind not in chosen.loop_kinds and c.verdict != "rejected"
    ]
    reasons, poses, is_exact = _first_rejections(graph, trusted, loops, chosen)
    kept = [i for i in loops if i not in reasons]
    result = _solve_with(graph, poses, trusted, kept, chosen.solve)
    if chosen.trust_odometry:
        back = _readmitted(result, sorted(reasons), chosen.confidence)
        if back:
            reasons = {i: sentence for i, sentence in reasons.items() if i not in back}
            kept = sorted([*kept, *back])
            result = _solve_with(graph, result.graph.world_from_camera(), trusted, kept, chosen.solve)
        while kept:
            excess = [_excess(test, chosen.confidence) for test in _loop_tests(result, kept, included=True)]
            worst = int(np.argmax(excess))
            if excess[worst] <= 1.0:
                break
            reasons[kept[worst]] = f"contradicts the solution without it ({excess[worst]:.1f} times the limit)"
            del kept[worst]
            result = _solve_with(graph, result.graph.world_from_camera(), trusted, kept, chosen.solve)
    base = {name: getattr(result, name) for name in SolveResult.__dataclass_fields__}
    return RobustResult(**base, reasons=reasons, is_exact=is_exact)
