"""Sparse Levenberg-Marquardt on a pose problem, for any group of `group.py`.

Each iteration solves (J'WJ + lambda diag(J'WJ)) x = -J'Wr for the right perturbations x and retracts T exp(x). The
damping follows the gain ratio (Nielsen 1999) from a start so small that the first steps are Gauss-Newton steps (for
pose graphs: Grisetti et al. 2010). Robust losses enter as weights, and as less curvature along each residual (Triggs
et al. 2000): without the second, convergence is only linear where a residual stays large.
"""

from dataclasses import dataclass, field

import numpy as np

from hybridtrack.errors import OptionError
from hybridtrack.posegraph.loss import Loss, Quadratic
from hybridtrack.posegraph.normal_equations import NormalEquations
from hybridtrack.posegraph.problem import Linearisation, PoseProblem, linearise, moved, residuals

Array = np.ndarray

FIRST_DAMPING = 1e-9
SMALLEST_DAMPING = 1e-12
LARGEST_DAMPING = 1e12
# A step that should lower the cost by less than this share of it and fails to has met the rounding of the cost itself.
ROUNDING_SHARE = 1e-8
# Above this damping a small predicted decrease says that the step is short, not that the gradient is.
GAUSS_NEWTON_DAMPING = 1e-3
NEGLIGIBLE_CHI_SQUARE = 1e-16
# A longer turn, or change of log scale, in one step lies outside what a linearisation can promise.
LONGEST_TURN = 3.0
# Share of a constraint's curvature along its residual that is always left: the equations must stay positive definite.
LEAST_CURVATURE = 0.05


@dataclass(frozen=True)
class SolveOptions:
    """How to solve: the loss and the kinds of constraint it applies to, the iteration limit, and when to stop.

    The solver stops when a step is predicted to lower the cost by less than `relative_decrease` of itself, or by a
    chi-square of 1e-16, which is nothing in the unit of the noise.
    """

    loss: Loss = field(default_factory=Quadratic)
    robust_kinds: tuple[str, ...] = ("loop",)
    max_iterations: int = 100
    relative_decrease: float = 1e-12

    def __post_init__(self) -> None:
        if self.max_iterations < 1:
            raise OptionError(f"max_iterations: expected at least 1, got {self.max_iterations}")
        if not 0.0 < self.relative_decrease < 1.0:
            raise OptionError(f"relative_decrease: expected a number in (0, 1), got {self.relative_decrease}")


@dataclass(frozen=True, eq=False)
class Minimum:
    """End of one minimisation.

    Poses (N, 4, 4), weights (M,), unweighted chi-squares (M,), `status` as in `SolveResult`, and iterations taken.
    """

    poses: Array
    weights: Array
    chi_squares: Array
    status: str
    iterations: int


@dataclass(frozen=True, eq=False)
class WeightedCost:
    """Sum over constraints of `factors` (M,) times the loss where `robust` (M,) says so, else times chi-square."""

    loss: Loss
    robust: Array
    factors: Array

    def total(self, chi_squares: Array) -> float:
        """Cost of unweighted chi-squares (M,)."""
        return float(np.sum(self.factors * np.where(self.robust, self.loss.cost(chi_squares), chi_squares)))

    def weights(self, chi_squares: Array) -> Array:
        """Derivative (M,) of the cost by every chi-square."""
        return self.factors * np.where(self.robust, self.loss.weight(chi_squares), 1.0)

    def bent(self, line: Linearisation, chi_squares: Array) -> Linearisation:
        """The linearisation with Jacobians shortened along the residual, as the bend of the loss asks."""
        if isinstance(self.loss, Quadratic) or not self.robust.any():
            return line
        left = np.maximum(1.0 + self.loss.bend(chi_squares), LEAST_CURVATURE)
        shortening = np.where(self.robust, 1.0 - np.sqrt(left), 0.0) / np.maximum(chi_squares, 1e-300)
        along = shortening[:, None, None] * line.residual[:, :, None] * line.residual[:, None, :]
        return Linearisation(line.residual, line.by_a - along @ line.by_a, line.by_b - along @ line.by_b)


class _System:
    """Normal equations at one set of poses, solved for several dampings."""

    def __init__(
        self, equations: NormalEquations, line: Linearisation, weighting: WeightedCost, chi_squares: Array
    ) -> None:
        weights = weighting.weights(chi_squares)
        self._equations = equations
        self._blocks = equations.hessian_blocks(weighting.bent(line, chi_squares), weights)
        self._gradient = equations.gradient(line, weights)
        self._diagonal = equations.diagonal(self._blocks)

    def step(self, damping: float) -> tuple[Array | None, float]:
        """Perturbations (free poses, d) and the decrease of the cost they predict; None where singular or too long."""
        factors = self._equations.factorised(self._blocks, damping * self._diagonal)
        step = None if factors is None else -factors.solve(self._gradient)
        if step is None or not np.isfinite(step).all():
            return None, np.inf
        by_pose = self._equations.in_pose_order(step)
        if np.abs(by_pose[:, 3:]).max(initial=0.0) > LONGEST_TURN:
            return None, np.inf
        return by_pose, float(step @ (damping * self._diagonal * step - self._gradient))


@dataclass(frozen=True, eq=False)
class _State:
    """Poses (N, 4, 4) with their chi-squares (M,) and cost."""

    poses: Array
    chi_squares: Array
    cost: float


def _evaluated(problem: PoseProblem, poses: Array, weighting: WeightedCost) -> _State:
    with np.errstate(over="ignore", invalid="ignore", divide="ignore"):
        chi_squares = np.sum(residuals(problem, poses) ** 2, axis=1)
    return _State(poses, chi_squares, weighting.total(chi_squares))


def _is_last(predicted: float, cost: float, damping: float, lowered: bool, options: SolveOptions) -> bool:
    """Whether a step that was predicted to lower the cost so little ends the search."""
    negligible = predicted <= NEGLIGIBLE_CHI_SQUARE + options.relative_decrease * cost
    at_rounding = not lowered and predicted <= ROUNDING_SHARE * cost
    return damping <= GAUSS_NEWTON_DAMPING and (negligible or at_rounding)


def _search(
    problem: PoseProblem, state: _State, weighting: WeightedCost, options: SolveOptions, equations: NormalEquations
) -> tuple[_State, str, int]:
    """Best state found, "converged" or "stalled", and the number of iterations."""
    damping, growth = FIRST_DAMPING, 2.0
    system: _System | None = None
    for iteration in range(1, options.max_iterations + 1):
        system = system or _System(equations, linearise(problem, state.poses), weighting, state.chi_squares)
        step, predicted = system.step(damping)
        lowered = False
        if step is not None:
            before, tried = state, _evaluated(problem, moved(problem, state.poses, step), weighting)
            lowered = tried.cost < before.cost
            if lowered:
                state, system = tried, None
            if _is_last(predicted, before.cost, damping, lowered, options):
                return state, "converged", iteration
        if lowered:
            gain = (before.cost - state.cost) / predicted
            damping = max(damping * max(1.0 / 3.0, 1.0 - (2.0 * gain - 1.0) ** 3), SMALLEST_DAMPING)
            growth = 2.0
        else:
            damping, growth = damping * growth, growth * 2.0
            if damping > LARGEST_DAMPING:
                return state, "stalled", iteration
    return state, "stalled", options.max_iterations


def minimise(
    problem: PoseProblem, start: Array, weighting: WeightedCost, options: SolveOptions, equations: NormalEquations
) -> Minimum:
    """Minimise the weighted cost over the free poses, from `start` (N, 4, 4)."""
    state, iterations = _evaluated(problem, start, weighting), 0
    if not np.isfinite(state.cost):
        status = "diverged"
    elif problem.fixed.all():
        status = "converged"
    else:
        state, status, iterations = _search(problem, state, weighting, options, equations)
    poses = np.where(problem.fixed[:, None, None], state.poses, problem.group.orthonormal(state.poses))
    return Minimum(poses, weighting.weights(state.chi_squares), state.chi_squares, status, iterations)
