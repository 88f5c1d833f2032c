"""How sure the event map is: noise, deviations of poses and lens, and how much the views disagree beyond both."""

from dataclasses import dataclass

import numpy as np

from hybridtrack.calibration.event_map_normal import MAP_TERMS, MapNormal
from hybridtrack.calibration.parallax import ViewPulls
from hybridtrack.calibration.view_data import LensFit

Array = np.ndarray


def nuisance_covariance(lens_fit: LensFit, order: Array) -> Array:
    """Joint covariance of the poses of the used views (6 each), then the lens."""
    size = len(lens_fit.parameters)
    poses = (size + 6 * order[:, None] + np.arange(6)).ravel()
    at = np.concatenate([poses, np.arange(size)])
    return lens_fit.joint_covariance[np.ix_(at, at)]


def _nuisance_columns(normal: MapNormal) -> Array:
    """Cross terms (V, S, 6V + P) of each view with all nuisances."""
    views, size, width = normal.nuisance.shape
    lens = width - 6
    out = np.zeros((views, size, 6 * views + lens))
    for v in range(views):
        out[v, :, 6 * v : 6 * v + 6] = normal.nuisance[v, :, :6]
        out[v, :, 6 * views :] = normal.nuisance[v, :, 6:]
    return out


@dataclass(frozen=True)
class MapCovariance:
    """`covariance` (7, 7) of the coefficients, not yet scaled; `cross` (7, P) with the lens; `factor` by which views
    scatter over what noise and poses explain, with its `degrees` of freedom; and the views' `pulls`."""

    covariance: Array
    cross: Array
    factor: float
    degrees: int
    pulls: ViewPulls


def map_covariance(normal: MapNormal, nuisance: Array) -> MapCovariance:
    """How sure the map's coefficients are, given the joint covariance of poses and lens."""
    views = len(normal.scores)
    inverse = np.linalg.inv(normal.matrix)
    columns = _nuisance_columns(normal)
    gain = (inverse @ columns.sum(0))[:MAP_TERMS]
    covariance = inverse[:MAP_TERMS, :MAP_TERMS] + gain @ nuisance @ gain.T
    cross = -gain @ nuisance[:, 6 * views :]
    # Scores of the map with all else of z eliminated.
    rest = normal.matrix[MAP_TERMS:, MAP_TERMS:]
    T = np.concatenate([np.eye(MAP_TERMS), -normal.matrix[:MAP_TERMS, MAP_TERMS:] @ np.linalg.inv(rest)], axis=1)
    scores, spread = normal.scores @ T.T, T @ normal.spread @ T.T
    pulled = T @ columns
    total = 0.0
    for v in range(views):
        scatter = spread[v] + pulled[v] @ nuisance @ pulled[v].T
        total += float(scores[v] @ np.linalg.solve(0.5 * (scatter + scatter.T), scores[v]))
    degrees = MAP_TERMS * (views - 1)
    pulls = ViewPulls(scores, spread, spread, pulled, nuisance, total, degrees)
    return MapCovariance(covariance, cross, total / degrees, degrees, pulls)
