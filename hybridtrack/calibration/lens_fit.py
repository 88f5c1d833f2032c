"""Lens and poses from board corners: bundle adjustment with the model chosen by held-out error.

Covariance: from the Jacobian weighted by the corners' covariances, these enlarged until the residual is as large as
expected, and enlarged again where views pull on the lens harder than the scatter inside them explains (a sandwich
clustered by view, pooled to one factor because a dozen views can't support a full matrix).
"""

from dataclasses import replace

import numpy as np

from hybridtrack.calibration.bundle import SHAPE_NAMES, Solution, ViewPoints, adjust, whitening, with_noise_floor
from hybridtrack.calibration.coverage import Coverage, coverage_findings, coverage_of
from hybridtrack.calibration.lens_choice import MODELS, Candidate, choose, fit_candidates, fit_model
from hybridtrack.calibration.view_data import BoardCorners, LensFit
from hybridtrack.errors import BoardNotFoundError, DegenerateDataError
from hybridtrack.module import HybridModule, Target

Array = np.ndarray

_LEAST_VIEWS = 3
_LEAST_CORNERS = 8
_WORST_CONDITION = 2e4
_WORST_FOCAL_SHARE = 0.03
_WORST_EDGE_PX = 20.0
_LEAST_FACING_DEG = 6.0


def _noise_floor(solution: Solution, views: list[ViewPoints]) -> float:
    """The deviation (px) that, added to each axis of each corner, makes the residual as large as expected."""
    squares, variances = [], []
    for points, error, used in zip(views, solution.residuals, solution.used, strict=True):
        W_inverse = np.linalg.inv(points.whiten[used])
        variances.append(np.einsum("nij,nij->n", W_inverse, W_inverse) / 2.0)
        squares.append(np.sum(error[used] ** 2, axis=-1) / 2.0)
    square, variance = np.concatenate(squares), np.concatenate(variances)
    share = solution.degrees_of_freedom / max(2 * len(square), 1)
    low, high = 0.0, float(np.sqrt(np.mean(square) / share)) + 1e-12
    if np.mean(square / variance) <= share:
        return 0.0
    for _ in range(60):
        floor = 0.5 * (low + high)
        low, high = (floor, high) if np.mean(square / (variance + floor**2)) > share else (low, floor)
    return 0.5 * (low + high)


def settle(solution: Solution, views: list[ViewPoints]) -> tuple[Solution, list[ViewPoints]]:
    """Adjust again with corner covariances enlarged to match the residual; returns what they became."""
    for _ in range(2):
        floor = _noise_floor(solution, views)
        views = with_noise_floor(views, floor) if floor > 0 else views
        solution = adjust(solution.scene, views, solution.freedom)
    return solution, views


def _cluster_factor(solution: Solution, count: int) -> float:
    """How much larger views' pulls on the shared terms are than their own scatter explains; at least 1."""
    shared = solution.shared
    covariance = solution.covariance[:shared, :shared]
    pulls = solution.scores
    # Pulls sum to zero at the optimum, and their mean square is the information, less one share of it.
    expected = shared * max(1.0 - 1.0 / count, 0.5)
    return max(1.0, float(np.einsum("vi,ij,vj->", pulls, covariance, pulls)) / expected)


def _refuse_degenerate(coverage: Coverage) -> None:
    if coverage.facing_deg < _LEAST_FACING_DEG:
        raise DegenerateDataError(
            "lens: expected views in which the board faces different ways, got normals within "
            f"{coverage.facing_deg:.1f} degrees of each other, from which no focal length follows; add views tilted by "
            "20 to 35 degrees"
        )
    if coverage.focal_share > _WORST_FOCAL_SHARE or coverage.condition > _WORST_CONDITION:
        raise DegenerateDataError(
            f"lens: expected views that determine the focal length, got one uncertain by "
            f"{100 * coverage.focal_share:.2g} % (condition {coverage.condition:.1e}); add views tilted by 20 to 35 "
            "degrees, and some that fill the picture"
        )
    if coverage.edge_sigma_px > _WORST_EDGE_PX:
        raise DegenerateDataError(
            f"lens: expected views that reach the edges of the picture, got a deviation of "
            f"{coverage.edge_sigma_px:.0f} px there; add views with the board in each corner of the picture"
        )


def _view_points(boards: list[BoardCorners], target: Target) -> list[ViewPoints]:
    corners = target.corners_m()
    return [
        ViewPoints(corners[board.ij[:, 1] - 1, board.ij[:, 0] - 1], board.uv, whitening(board.covariance))
        for board in boards
    ]


def _shape_sigma(target: Target) -> Array:
    """Prior deviations of aspect and bows that the target states."""
    squares = np.sqrt(min(target.columns, target.rows)) * min(target.square_xy_m)
    aspect = (target.square_sigma_m or 0.0) * np.sqrt(2.0) / squares
    return np.array([aspect, target.flatness_sigma_m or 0.0, target.flatness_sigma_m or 0.0])


def _model_finding(chosen: Candidate, candidates: list[Candidate]) -> str:
    roots = [float(np.sqrt(np.mean(c.held_out) / 2.0)) for c in candidates]
    errors = ", ".join(
        f"{c.name} {root:.3g}" if np.isfinite(root) else f"{c.name} rejected"
        for c, root in zip(candidates, roots, strict=True)
    )
    return f"lens: model {chosen.name} chosen by error on views held out, in corner deviations per axis: {errors}"


def fit_view_points(
    views: list[ViewPoints],
    view_numbers: Array,
    size: tuple[int, int],
    model: str | None = None,
    shape_sigma: Array | None = None,
) -> LensFit:
    """Fit lens and poses to corners of a flat board on an array of `size` (width, height).

    `model` is one of `lens_choice.MODELS`, or None to choose. Raises DegenerateDataError where the views do not
    determine a lens."""
    sigma = np.zeros(3) if shape_sigma is None else shape_sigma
    findings = []
    if model is None:
        rough = fit_model("k1", views, size, sigma)
        scaled = with_noise_floor(views, _noise_floor(rough, views)) if len(views) < 5 else views
        candidates = fit_candidates(scaled, size, sigma)
        chosen = choose(candidates)
        findings.append(_model_finding(chosen, candidates))
        solution, model = chosen.solution, chosen.name
    else:
        solution = fit_model(model, views, size, sigma)
        if not solution.scene.lens.is_monotonic_over(*size):
            raise DegenerateDataError(f"lens: expected a model monotonic over the array, got '{model}' that folds over")
    solution, views = settle(solution, views)
    factor = _cluster_factor(solution, len(views))
    solution = replace(solution, covariance=solution.covariance * factor)
    coverage = coverage_of(solution, views, size)
    _refuse_degenerate(coverage)
    findings += coverage_findings(coverage)
    lost = sum(int((~u).sum()) for u in solution.used)
    if lost:
        findings.append(f"lens: {lost} corners lie too far from the fit and were left out")
    names = [f"lens.{n}" for n, free in zip(solution.scene.lens.names, solution.freedom.lens, strict=True) if free]
    shape = [n for n, free in zip(SHAPE_NAMES, solution.freedom.shape, strict=True) if free]
    if shape:
        values = dict(zip(SHAPE_NAMES, solution.scene.shape, strict=True))
        findings.append("lens: board shape estimated, " + ", ".join(f"{n} {values[n]:.2g}" for n in shape))
    lens_size, shared = len(names), solution.shared
    keep = np.r_[np.arange(lens_size), np.arange(shared, len(solution.covariance))]
    joint = solution.covariance[np.ix_(keep, keep)]
    residuals = [e[u] for e, u in zip(solution.residuals, solution.used, strict=True)]
    return LensFit(
        lens=solution.scene.lens, views=np.asarray(view_numbers), camera_from_board=solution.scene.poses,
        residuals_px=np.concatenate(residuals),
        residual_view=np.repeat(np.asarray(view_numbers), [len(r) for r in residuals]),
        residual_uv=np.concatenate([p.uv[u] for p, u in zip(views, solution.used, strict=True)]),
        parameters=tuple(names), covariance=joint[:lens_size, :lens_size], condition=solution.condition,
        findings=findings, joint_covariance=joint, model=model,
    )  # fmt: skip


def fit_lens(boards: list[BoardCorners], target: Target, nominal: HybridModule, model: str | None = None) -> LensFit:
    """Fit lens and poses to the boards found, the model chosen by held-out error unless `model` names one.

    Raises BoardNotFoundError for fewer than three boards, DegenerateDataError where the views do not determine a lens.
    """
    usable = [board for board in boards if len(board.ij) >= _LEAST_CORNERS]
    if len(usable) < _LEAST_VIEWS:
        raise BoardNotFoundError(
            f"lens: expected at least {_LEAST_VIEWS} views with {_LEAST_CORNERS} corners of the board or more, "
            f"got {len(usable)}; add views in which the whole board is seen"
        )
    size = (nominal.colour_array.width, nominal.colour_array.height)
    numbers = np.array([board.view for board in usable])
    return fit_view_points(_view_points(usable, target), numbers, size, model, _shape_sigma(target))


__all__ = ["MODELS", "fit_lens", "fit_view_points"]
