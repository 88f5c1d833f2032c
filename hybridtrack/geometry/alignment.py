"""Closed-form alignment of matched points by a rigid motion or a similarity (Umeyama 1991).

>>> import numpy as np
>>> source = np.array([[0.0, 0, 0], [1, 0, 0], [0, 1, 0], [0, 0, 1]])
>>> np.round(similarity(source, 2.0 * source + [0.0, 0.0, 5.0])[2], 6) + 0.0
array([0., 0., 2., 5.])
>>> rigid(source[:2], source[:2])
Traceback (most recent call last):
hybridtrack.errors.DegenerateDataError: Expected at least 3 matched points with positive weight, got 2.
"""

import numpy as np
from numpy.typing import ArrayLike

from hybridtrack.errors import DegenerateDataError, ShapeError
from hybridtrack.geometry import se3, sim3
from hybridtrack.geometry.arrays import FloatArray, with_trailing_shape
from hybridtrack.geometry.so3 import nearest_rotation_and_spectrum

_COLLINEAR_BELOW = 1e-8  # second singular value of the centred points over the first


def _checked_pair(source: ArrayLike, target: ArrayLike) -> tuple[FloatArray, FloatArray]:
    source = with_trailing_shape(source, "source", ("N", 3))
    target = with_trailing_shape(target, "target", ("N", 3))
    if source.ndim != 2 or source.shape != target.shape:
        raise ShapeError(f"Expected `source` and `target` of one shape (N, 3), got {source.shape} and {target.shape}.")
    if not (np.all(np.isfinite(source)) and np.all(np.isfinite(target))):
        raise ShapeError("Expected `source` and `target` to be finite, got NaN or infinity.")
    return source, target


def _checked_weights(weights: ArrayLike | None, count: int) -> FloatArray:
    """Weights (N,) that sum to one."""
    w = np.ones(count) if weights is None else np.asarray(weights, dtype=np.float64)
    if w.shape != (count,):
        raise ShapeError(f"Expected `weights` of shape ({count},), got {w.shape}.")
    if not np.all(np.isfinite(w)) or np.any(w < 0.0):
        raise ShapeError("Expected `weights` to be finite and not negative, got one that is not.")
    positive = int(np.count_nonzero(w))
    if positive < 3:
        raise DegenerateDataError(f"Expected at least 3 matched points with positive weight, got {positive}.")
    return w / w.sum()


def _centred(points: FloatArray, w: FloatArray, name: str) -> tuple[FloatArray, FloatArray]:
    """Points about their centroid times the root of their weight, and the centroid; refuses collinear."""
    centroid = w @ points
    scaled = np.sqrt(w)[:, None] * (points - centroid)
    spectrum = np.linalg.svd(scaled, compute_uv=False)
    rounding = 8.0 * np.finfo(np.float64).eps * np.abs(points).max()
    if spectrum[1] <= max(_COLLINEAR_BELOW * spectrum[0], rounding):
        raise DegenerateDataError(f"Expected `{name}` to span a plane at least, got points on one line.")
    return scaled, centroid


def rigid(source: ArrayLike, target: ArrayLike, weights: ArrayLike | None = None) -> FloatArray:
    """T (4, 4) that minimises the sum of `weights` (N,) * |target - T source|^2 over rigid motions.

    `source`, `target`: (N, 3) in m. DegenerateDataError for fewer than 3 points, or points on a line.
    """
    source, target = _checked_pair(source, target)
    w = _checked_weights(weights, len(source))
    source_centred, source_centroid = _centred(source, w, "source")
    target_centred, target_centroid = _centred(target, w, "target")
    R, _ = nearest_rotation_and_spectrum(target_centred.T @ source_centred)
    return se3.compose(R, target_centroid - R @ source_centroid)


def similarity(source: ArrayLike, target: ArrayLike) -> FloatArray:
    """S (4, 4) that minimises the sum of |target - S source|^2 over similarities (Umeyama 1991).

    `source`, `target`: (N, 3). DegenerateDataError for fewer than 3 points, or points on a line.
    """
    source, target = _checked_pair(source, target)
    w = _checked_weights(None, len(source))
    source_centred, source_centroid = _centred(source, w, "source")
    target_centred, target_centroid = _centred(target, w, "target")
    R, spectrum = nearest_rotation_and_spectrum(target_centred.T @ source_centred)
    s = spectrum.sum() / np.sum(source_centred**2)
    return sim3.compose(s, R, target_centroid - s * R @ source_centroid)
