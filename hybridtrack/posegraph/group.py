"""The two groups a pose graph can live on, behind one small object that the solver is written against.

Elements are matrices (..., 4, 4). A perturbation acts on the right, T = T_hat exp(xi), with xi in the order
translation, rotation vector (SE(3), six numbers) or translation, rotation vector, log scale (Sim(3), seven numbers).

Right Jacobian. On any Lie group, exp(xi + d) = exp(xi) exp(J_r(xi) d) to first order, and J_r(xi) = phi1(-ad(xi)) with
phi1(A) = sum A^n / (n + 1)! (Sola, Deray and Atchuthan 2018 for SE(3); Strasdat et al. 2010 use the group Sim(3)).
SE(3) has it in closed form in `geometry.se3`. For Sim(3) it is evaluated here to rounding: phi1 and exp by Taylor
series on a halved argument, then phi1(2 A) = phi1(A) (exp(A) + I) / 2 (Higham 2008, section 10.7.4).
"""

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np

from hybridtrack.errors import ShapeError
from hybridtrack.geometry import se3, sim3, so3

Array = np.ndarray

HALVINGS = 6
TAYLOR_TERMS = 10


def _sim3_little_adjoint(xi: Array) -> Array:
    """ad(xi) (..., 7, 7): the commutator with `xi` (..., 7) as a matrix on tangent vectors."""
    translation, rotation, log_scale = xi[..., :3], xi[..., 3:6], xi[..., 6]
    turn = so3.hat(rotation)
    ad = np.zeros((*xi.shape[:-1], 7, 7))
    ad[..., :3, :3] = turn + log_scale[..., None, None] * np.eye(3)
    ad[..., :3, 3:6] = so3.hat(translation)
    ad[..., :3, 6] = -translation
    ad[..., 3:6, 3:6] = turn
    return ad


def _phi1(matrix: Array) -> Array:
    """phi1(A) = (exp(A) - I) / A as a power series, for stacks of square matrices of norm up to about 30."""
    small = matrix / 2.0**HALVINGS
    identity = np.eye(matrix.shape[-1])
    series = np.broadcast_to(identity, matrix.shape)
    for n in range(TAYLOR_TERMS, 1, -1):
        series = identity + small @ series / n
    exponential = identity + small @ series
    for _ in range(HALVINGS):
        series = 0.5 * series @ (exponential + identity)
        exponential = exponential @ exponential
    return series


def sim3_right_jacobian_inverse(xi: Array) -> Array:
    """Inverse right Jacobian (..., 7, 7) of Sim(3) at `xi` (..., 7).

    The translation enters ad(xi) only in its upper right block, and phi1 keeps that grading: the translation is scaled
    to at most one unit before, and the block scaled back after, so that far poses cost no accuracy.
    """
    reach = np.maximum(np.linalg.norm(xi[..., :3], axis=-1), 1.0)[..., None]
    scaled = np.concatenate([xi[..., :3] / reach, xi[..., 3:]], axis=-1)
    inverse = np.linalg.inv(_phi1(-_sim3_little_adjoint(scaled)))
    inverse[..., :3, 3:] *= reach[..., None]
    return inverse


def _orthonormal_se3(pose: Array) -> Array:
    return se3.compose(so3.project_to_rotation(pose[..., :3, :3]), pose[..., :3, 3])


def _orthonormal_sim3(pose: Array) -> Array:
    scale = np.cbrt(np.linalg.det(pose[..., :3, :3]))
    rotation = so3.project_to_rotation(pose[..., :3, :3] / scale[..., None, None])
    return sim3.compose(scale, rotation, pose[..., :3, 3])


@dataclass(frozen=True)
class Group:
    """What the solver needs to know of a matrix Lie group; every function is vectorised over leading axes.

    Adjoint: T exp(xi) T^-1 = exp(Ad(T) xi). `orthonormal` removes rounding that many products gather.
    """

    name: str
    dimension: int
    exp: Callable[[Array], Array]
    log: Callable[[Array], Array]
    inverse: Callable[[Array], Array]
    adjoint: Callable[[Array], Array]
    right_jacobian_inverse: Callable[[Array], Array]
    orthonormal: Callable[[Array], Array]

    def checked(self, pose: Array, name: str) -> Array:
        """Return `pose` as a (4, 4) float64 element of the group. Raises ShapeError where it is none."""
        matrix = np.array(pose, dtype=np.float64)
        if matrix.shape != (4, 4):
            raise ShapeError(f"{name}: expected a pose of shape (4, 4), got {matrix.shape}")
        if not np.isfinite(matrix).all() or not np.array_equal(matrix[3], [0.0, 0.0, 0.0, 1.0]):
            raise ShapeError(f"{name}: expected finite numbers and a last row 0 0 0 1, got {matrix.tolist()}")
        gram = matrix[:3, :3] @ matrix[:3, :3].T
        square = np.trace(gram) / 3.0 if self.dimension == 7 else 1.0
        if np.abs(gram - square * np.eye(3)).max() > 1e-6 * square or np.linalg.det(matrix[:3, :3]) <= 0.0:
            raise ShapeError(f"{name}: expected an element of {self.name}, got the block {matrix[:3, :3].tolist()}")
        return matrix


SE3 = Group("SE(3)", 6, se3.exp, se3.log, se3.inverse, se3.adjoint, se3.right_jacobian_inverse, _orthonormal_se3)
SIM3 = Group(
    "Sim(3)",
    7,
    sim3.exp,
    sim3.log,
    sim3.inverse,
    sim3.adjoint,
    sim3_right_jacobian_inverse,
    _orthonormal_sim3,
)
