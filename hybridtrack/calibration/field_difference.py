"""How far two lenses or event maps lie apart over the array, against their covariances.

Parameters of two lens models can't be compared, but what they do can: displacement over a 5x4 field, with the turn of
the camera that best cancels it removed, for a board can't tell that from its own pose.
"""

from dataclasses import dataclass

import numpy as np
from scipy.stats import chi2

from hybridtrack.calibration.coverage import field_points
from hybridtrack.geometry import so3
from hybridtrack.module import HybridModule, Lens

Array = np.ndarray


@dataclass(frozen=True)
class FieldDifference:
    """Displacement between two lenses or maps over the array, colour px: RMS and largest, the RMS that the two
    covariances lead one to expect, and how likely one as large is (None where they have none)."""

    what: str
    rms_px: float
    largest_px: float
    expected_px: float | None
    p_value: float | None


def covariance_of(module: HybridModule, names: list[str]) -> Array:
    """Covariance (N, N) of the named parameters, all of which the module's uncertainty holds."""
    uncertainty = module.uncertainty
    assert uncertainty is not None
    index = [uncertainty.parameters.index(name) for name in names]
    if uncertainty.covariance:
        return np.array(uncertainty.covariance)[np.ix_(index, index)]
    return np.diag(np.array(uncertainty.sigma)[index] ** 2)


def estimated_names(module: HybridModule, prefix: str) -> list[str]:
    """Parameters of a block that were estimated."""
    uncertainty = module.uncertainty
    return [name for name in uncertainty.parameters if name.startswith(prefix)] if uncertainty is not None else []


def _lens_move(lens: Lens, other: Lens, uv: Array) -> tuple[Array, Array]:
    """Move (N, 2) px of `uv` (N, 2) from one lens to the other less the turn that best cancels it, and the matrix
    (2N, 2N) that takes the turn off."""
    rays = lens.unproject(uv)
    _, d_point, _ = lens.project_with_jacobians(rays)
    turn = (-d_point @ so3.hat(rays)).reshape(-1, 3)
    keep = np.eye(len(turn)) - turn @ np.linalg.pinv(turn)
    move = (other.project(rays) - uv).ravel()
    return (keep @ move).reshape(-1, 2), keep


def _lens_covariance(module: HybridModule, uv: Array, keep: Array) -> Array | None:
    """Covariance (2N, 2N) of the lens as displacement at `uv` (N, 2), the turn taken off by `keep`."""
    lens, names = module.lens_model(), estimated_names(module, "lens.")
    held = [k for k, name in enumerate(lens.names) if f"lens.{name}" in names]
    if not held:
        return None
    _, _, jacobian = lens.project_with_jacobians(lens.unproject(uv))
    J = keep @ jacobian[..., held].reshape(-1, len(held))
    return J @ covariance_of(module, [f"lens.{lens.names[k]}" for k in held]) @ J.T


def _map_covariance(module: HybridModule, xy: Array, uv: Array) -> Array | None:
    """Covariance (2N, 2N) of the event map at event-grid positions `xy` (N, 2), which it takes to `uv`."""
    names = estimated_names(module, "colour_from_event.")
    if not names or module.colour_from_event is None:
        return None
    array = module.colour_array
    middle = np.array(module.colour_from_event.centre or ((array.width - 1) / 2, (array.height - 1) / 2))
    r2 = np.sum(((uv - middle) / array.half_diagonal_px) ** 2, axis=1)
    zero, one = np.zeros(len(xy)), np.ones(len(xy))
    x, y = xy.T
    moves = {"a": (x, zero), "b": (y, zero), "c": (one, zero), "d": (zero, x), "e": (zero, y), "f": (zero, one),
             "radial": tuple((r2[:, None] * (uv - middle)).T)}  # fmt: skip
    J = np.stack([np.stack(moves[name.split(".")[1]], axis=1).ravel() for name in names], axis=1)
    return J @ covariance_of(module, names) @ J.T


def _field_difference(what: str, move: Array, covariances: list[Array | None]) -> FieldDifference:
    """Size of a move (N, 2) px against the covariances (2N, 2N) of both calibrations."""
    size = np.linalg.norm(move, axis=1)
    rms, largest = float(np.sqrt(np.mean(size**2))), float(size.max())
    known = [covariance for covariance in covariances if covariance is not None]
    if len(known) < 2:
        return FieldDifference(what, rms, largest, None, None)
    total = known[0] + known[1]
    # A weighted sum of chi squares, by the one with its first two moments (Satterthwaite 1946).
    trace, squares = float(np.trace(total)), float(np.sum(total**2))
    if trace <= 0:
        return FieldDifference(what, rms, largest, 0.0, None)
    freedom = trace**2 / squares
    p_value = float(chi2.sf(freedom * float(np.sum(size**2)) / trace, freedom))
    return FieldDifference(what, rms, largest, float(np.sqrt(trace / len(move))), p_value)


def field_differences(modules: tuple[HybridModule, HybridModule]) -> list[FieldDifference]:
    """Lens and map of the first against the second, over the first one's array."""
    first, second = modules
    uv = field_points(first.colour_array.width, first.colour_array.height)
    found = []
    if first.lens is not None and second.lens is not None:
        move, keep = _lens_move(first.lens_model(), second.lens_model(), uv)
        if np.isfinite(move).all():  # else one of the two does not reach the array's edge
            covariances = [_lens_covariance(module, uv, keep) for module in modules]
            found.append(_field_difference("lens field", move, covariances))
    if first.colour_from_event is not None and second.colour_from_event is not None:
        xy = first.event_from_colour_px(uv)
        move = second.colour_from_event_px(xy) - uv
        found.append(_field_difference("event map field", move, [_map_covariance(m, xy, uv) for m in modules]))
    return found
