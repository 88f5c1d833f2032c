"""Marginal covariances of solved poses: columns of the inverse normal equations (Triggs et al. 2000, section 9).

They hold for right perturbations of each pose relative to what fixes its component: a prior, or its earliest pose,
whose own covariance is zero. They are as honest as the covariances of the constraints.
"""

from collections.abc import Iterable, Sequence

import numpy as np

from hybridtrack.errors import DegenerateDataError, OptionError
from hybridtrack.posegraph.normal_equations import NormalEquations
from hybridtrack.posegraph.problem import build_problem, linearise
from hybridtrack.posegraph.solver import SolveResult

Array = np.ndarray

COLUMNS_AT_ONCE = 240


class Marginals:
    """The information of a solved graph, factorised once; asked for as many covariances as wanted."""

    def __init__(self, result: SolveResult) -> None:
        graph = result.graph
        problem = build_problem(graph, np.flatnonzero(result.weights > 0.0).tolist())
        self._equations = NormalEquations(problem)
        self.dimension = graph.group.dimension
        line = linearise(problem, problem.start)
        blocks = self._equations.hessian_blocks(line, result.weights[problem.used])
        self._factors = self._equations.factorised(blocks) if self._equations.count else None
        if self._factors is None and self._equations.count:
            raise DegenerateDataError(
                "pose graph: expected constraints that determine every pose, got singular normal equations"
            )
        self._position = dict(zip(graph.ids, self._equations.position[:-1].tolist(), strict=True))

    def _positions(self, ids: Iterable[int]) -> list[int]:
        chosen = list(ids)
        for pose_id in chosen:
            if pose_id not in self._position:
                raise OptionError(f"marginals: expected the id of a pose of the graph, got {pose_id}")
        return [self._position[pose_id] for pose_id in chosen]

    def _columns(self, positions: Sequence[int]) -> Array:
        """Columns (count, d, len(positions), d) of the inverse; zero for fixed poses."""
        count, d = self._equations.count, self.dimension
        selected = np.zeros((count, d, len(positions), d))
        for column, position in enumerate(positions):
            if position >= 0:
                selected[position, :, column, :] = np.eye(d)
        if self._factors is None:
            return selected
        solved = self._factors.solve(selected.reshape(count * d, -1))
        return solved.reshape(count, d, len(positions), d)

    def covariances(self, ids: Iterable[int]) -> Array:
        """Covariances (K, d, d) of single poses, in tangent order. Raises OptionError for an unknown id."""
        positions = self._positions(ids)
        result = np.zeros((len(positions), self.dimension, self.dimension))
        width = max(1, COLUMNS_AT_ONCE // self.dimension)
        for start in range(0, len(positions), width):
            batch = positions[start : start + width]
            columns = self._columns(batch)
            for offset, position in enumerate(batch):
                if position >= 0:
                    block = columns[position, :, offset, :]
                    result[start + offset] = 0.5 * (block + block.T)
        return result

    def joint(self, ids: Iterable[int]) -> Array:
        """Joint covariance (K d, K d) of several poses. Raises OptionError for an unknown id."""
        positions = self._positions(ids)
        size = len(positions) * self.dimension
        columns = self._columns(positions)
        result = np.zeros((len(positions), self.dimension, len(positions), self.dimension))
        for row, position in enumerate(positions):
            if position >= 0:
                result[row] = columns[position]
        matrix = result.reshape(size, size)
        return 0.5 * (matrix + matrix.T)


def marginal_covariances(result: SolveResult, ids: Iterable[int]) -> Array:
    """Covariances (K, d, d) of chosen poses of a solved graph. Raises OptionError, DegenerateDataError."""
    return Marginals(result).covariances(ids)
