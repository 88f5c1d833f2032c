"""What one frame says about each feature: where it is, and with what template to go on."""

from dataclasses import dataclass
from typing import Any

import cv2
import numpy as np

from hybridtrack.tracking.advance_kernels import trajectory
from hybridtrack.tracking.alignment_kernels import align, cut_patch, smear, with_slopes
from hybridtrack.tracking.core import Core
from hybridtrack.tracking.light_levels import FrameClock
from hybridtrack.tracking.log_light import LogLight

Array = np.ndarray
PYRAMID_WINDOW, PYRAMID_LEVELS = 21, 4
SHAPE_SIGMA = 0.02  # expected change of a patch's shape from frame to frame
SHAPE_SIGMA_SMEARED = 0.005  # the same in a smeared frame, which tells little of it
NOISE_FACTOR = 2.5  # neighbours in a picture share noise and misfit, which the normal equations take as independent
SMEAR_NOISE = 0.5  # added share of that for each px of smear, along which misfit repeats
ALIGNMENT_FLOOR_PX = 0.01
SHARP_PX = 0.7  # movement within the exposure that the templates need not model
SHARPEN_FROM_PX = 3.0


@dataclass(frozen=True)
class Match:
    """A template found in a frame: `position` (2,), `cov` (3,) uu uv vv, `shape` (2, 2), correlation, share seen."""

    position: Array
    cov: Array
    shape: Array
    correlation: float
    share: float
    converged: bool


def eight_bit(image: Array, white_dn: float) -> Array:
    """The picture as grey of 8 bits, as pyramidal Lucas-Kanade takes it."""
    grey = image if image.ndim == 2 else cv2.cvtColor(image, cv2.COLOR_RGB2GRAY)
    return grey if grey.dtype == np.uint8 else np.clip(grey * (255.0 / white_dn), 0, 255).astype(np.uint8)


def pyramidal_flow(before: Array, after: Array, points: Array, guess: Array, gate_px: float) -> tuple[Array, Array]:
    """Pyramidal Lucas-Kanade from `points` (N, 2), started at `guess`: positions (N, 2) and whether forward and
    backward agree within `gate_px` (N,)."""
    if not len(points):
        return np.empty((0, 2)), np.empty(0, bool)
    flow: Any = cv2.calcOpticalFlowPyrLK  # its stub allows no array of points
    size, top, flags = (PYRAMID_WINDOW, PYRAMID_WINDOW), PYRAMID_LEVELS - 1, cv2.OPTFLOW_USE_INITIAL_FLOW
    first = guess.astype(np.float32).reshape(-1, 1, 2)
    start = points.astype(np.float32).reshape(-1, 1, 2)
    found, ok, _ = flow(before, after, start, first, winSize=size, maxLevel=top, flags=flags)
    # The way back starts from the same displacement, so that both ways search the same distance.
    back_guess = found - (guess - points).astype(np.float32).reshape(-1, 1, 2)
    back, ok_back, _ = flow(after, before, found, back_guess, winSize=size, maxLevel=top, flags=flags)
    error = np.linalg.norm((back - start).reshape(-1, 2), axis=1)
    good = (ok.ravel() > 0) & (ok_back.ravel() > 0) & (error <= gate_px)
    return found.reshape(-1, 2).astype(float), good


@dataclass(frozen=True)
class Views:
    """One frame as it is, and made sharp by events (H, W), None without events."""

    light: LogLight
    sharp: Array | None

    @property
    def best(self) -> Array:
        """The sharp picture where there is one."""
        return self.light.log_light if self.sharp is None else self.sharp


class FrameMatcher:
    """Aligns features' own templates to one frame, smeared by their movement during its exposure."""

    def __init__(self, core: Core) -> None:
        self._features, self._slots, self._radius = core.features, core.slots, core.radius
        size = core.features.own.shape[1]
        self._smeared = np.zeros((size, size), np.float32)
        self._template = np.zeros((size, size, 3), np.float32)
        self._out = np.zeros(7)

    def path(self, slot: int, clock: FrameClock, middle_ns: int, count: int = 9) -> Array:
        """Positions (count, 2) of a feature, equally spaced over its row's exposure."""
        half = clock.exposure_ns * (1.0 - 1.0 / count) * 0.5
        times = (middle_ns + np.linspace(-half, half, count)).astype(np.int64)
        path = np.zeros((count, 2))
        trajectory(self._features.table.rows[slot], times, path)
        return path

    def smear_px(self, path: Array) -> float:
        """How far the feature moves during the exposure."""
        return float(np.linalg.norm(path.max(axis=0) - path.min(axis=0))) * len(path) / (len(path) - 1)

    def match(self, slot: int, light: LogLight, start: Array, path: Array | None) -> Match:
        """Align from `start` (2,). `path` (K, 2) smears the template; None: as it is."""
        features, table = self._features, self._features.table
        position, shape = np.array(start, float), table.warp[slot].copy()
        values = features.own[slot]
        if path is not None:
            values = self._smear(slot, path)
        with_slopes(values, self._template)
        shape_sigma = SHAPE_SIGMA if path is None else SHAPE_SIGMA_SMEARED
        converged = align(
            light.log_light,
            light.trust,
            self._template,
            table.own_offset[slot],
            self._radius,
            position,
            shape,
            shape_sigma,
            15,
            self._out,
        )
        factor = NOISE_FACTOR * (1.0 if path is None else 1.0 + SMEAR_NOISE * self.smear_px(path))
        cov = self._out[:3] * factor + np.array([1.0, 0.0, 1.0]) * ALIGNMENT_FLOOR_PX**2
        return Match(position, cov, shape, float(self._out[3]), float(self._out[4]), bool(converged))

    def _smear(self, slot: int, path: Array) -> Array:
        steps = int(np.clip(np.ceil(self.smear_px(path) / 0.8), 2, 32))
        spaced = np.linspace(0, len(path) - 1, steps)
        dense = np.stack([np.interp(spaced, np.arange(len(path)), path[:, k]) for k in range(2)], axis=1)
        shifts = (dense - dense.mean(axis=0)) @ np.linalg.inv(self._features.table.warp[slot]).T
        smear(self._features.own[slot], shifts, self._smeared)
        return self._smeared

    def take_own(self, slot: int, views: Views, position: Array, smear_px: float) -> None:
        """Make the frame around `position`, seen while the feature moved by `smear_px`, its own template.

        Little smear is left in: events of few thresholds blur more than they sharpen.
        """
        sharpen = views.sharp is not None and smear_px >= SHARPEN_FROM_PX
        picture = views.sharp if sharpen and views.sharp is not None else views.light.log_light
        self._slots.smear[slot], self._slots.sharpened[slot] = smear_px, sharpen
        features, table = self._features, self._features.table
        table.own_offset[slot] = cut_patch(picture, position[0], position[1], features.own[slot])
        table.warp[slot] = np.eye(2)

    def prepare_work(self, slot: int, picture: Array, from_frame: bool) -> None:
        """Set what events are compared to: the frame around the feature, or its own template."""
        features, table = self._features, self._features.table
        table.from_frame[slot] = from_frame
        if from_frame:
            position = table.state[slot, :2]
            table.work_offset[slot] = cut_patch(picture, position[0], position[1], self._smeared)
            with_slopes(self._smeared, features.work[slot])
            table.work_warp[slot] = np.eye(2)
            table.state[slot, 4] = 0.0
            table.cov[slot, 4, :] = table.cov[slot, :, 4] = 0.0
            table.cov[slot, 4, 4] = 0.01**2
        else:
            with_slopes(features.own[slot], features.work[slot])
            table.work_offset[slot] = table.own_offset[slot]
            table.work_warp[slot] = table.warp[slot]
            table.cov[slot, 4, 4] = max(table.cov[slot, 4, 4], 0.1**2)
        table.anchor_uv[slot] = table.state[slot, :2]
        table.updates[slot] = 0


def static_covariance(work: Array, shape: Array, radius: float, pixels_per_px2: float, level_sigma: float) -> Array:
    """Position error (2, 2), frame px^2, from errors of the levels that stay while the patch is followed.

    Normal equations of a translation over the event pixels under the template (S, S, 3), levels off by `level_sigma`.
    """
    middle, reach = work.shape[0] // 2, int(radius)
    inner = (
        work[middle - reach : middle + reach + 1, middle - reach : middle + reach + 1, 1:].reshape(-1, 2).astype(float)
    )
    inner = (inner - inner.mean(axis=0)) @ np.linalg.inv(shape)
    information = inner.T @ inner * pixels_per_px2 + 1e-6 * np.eye(2)
    return level_sigma**2 * np.linalg.inv(information)
