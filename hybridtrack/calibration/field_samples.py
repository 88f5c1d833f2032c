"""Whether a calibration still holds, told from ordinary motion with no target at hand.

Between two frames the events of an event pixel say how its log light changed; so do the two frames at the place that
the map gives it. Where the map is off by (du, dv), or event stamps are late by dt, the two differ:

    change by events = gain . change by frames + slope of that change . (du, dv)
                       - (rate after - rate before) . (dt + tau reference / light)

The last term is the photoreceptor's lag, longer in dim light (Lichtsteiner, Posch and Delbruck 2008). All are
linear: one least-squares problem over all pixels and pairs of frames gives the shifts, and its scatter over
stretches of time their covariance. A shift of the map and one of the clock are told apart where the motion changes
its direction or speed.

What this rests on (light straight between two events of a pixel, a lag in place of a low pass) leaves errors that do
not fall with more data. They were measured on rides of which the truth is known and are part of every deviation; the
clock's is large: shifts of the clock under a millisecond are not seen.
"""

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np

from hybridtrack.calibration.field_check_kernels import average_levels
from hybridtrack.calibration.field_frames import FieldFrame, FieldFrames
from hybridtrack.errors import DegenerateDataError
from hybridtrack.module import HybridModule
from hybridtrack.recording import Recording

Array = np.ndarray

NAMES = ("gain", "du", "dv", "dt", "tau")
GAIN, DU, DV, DT, TAU = range(5)
BLOCK_FRAMES = 16
LONGEST_NS = 8e6  # between two events of a pixel whose light in between counts as known
WHOLE = 0.995
CLIP = 2.0
ROUNDS = 6
WORST_CONDITION = 1e6


def pair_columns(before: FieldFrame, after: FieldFrame, reference_dn: float) -> Array:
    """Columns (5, rows, columns) of the linear model for one pair of frames, in NAMES' order; dt and tau in us."""
    slope = after.slope - before.slope
    return np.stack(
        [
            after.log_light - before.log_light,
            slope[..., 0],
            slope[..., 1],
            -1e3 * (after.rate - before.rate),
            -1e3 * reference_dn * (after.rate / after.light_dn - before.rate / before.light_dn),
        ]
    )


@dataclass(frozen=True)
class FieldSetting:
    """What the check is made with: thresholds (rows, columns), `healthy` pixels, the light at which dt holds."""

    on: Array
    off: Array
    healthy: Array
    reference_dn: float

    @property
    def theta(self) -> float:
        """Mean threshold."""
        return 0.5 * float(np.nanmedian(self.on) + np.nanmedian(self.off))


class FieldBlocks:
    """Reads a recording stretch by stretch and gathers the samples of the linear model."""

    def __init__(self, recording: Recording, module: HybridModule, setting: FieldSetting, shift_px: Array) -> None:
        """`shift_px` (2,): where the map was moved to already."""
        self.recording, self.module, self.setting = recording, module, setting
        self.frames = FieldFrames(recording, module, shift_px)
        table, timing, mode = recording.frames, module.known_timing(), module.frame_mode
        row = np.clip(self.frames.place[..., 1], 0, mode.height - 1)
        before = row if mode.row_order == 1 else mode.height - 1 - row
        line = (timing.line_time_ns or 0.0) if mode.shutter == "rolling" else 0.0
        self.delay_ns = np.ascontiguousarray(before, float) * line
        # Events are compared by their stamps: an exposure is as late among them as they are.
        self.start_ns = timing.exposure_start_ns(table.t_start_ns, 0) + (timing.event_latency_ns or 0.0)
        self.length_ns = timing.true_exposure_ns(table.exposure_ns)
        self.origin_ns = int(table.t_start_ns[0])

    def levels(self, first: int, count: int) -> Array:
        """Log light by events (F, rows, columns), averaged over the exposures of frames from `first` on, but for a
        constant of the pixel; NaN where not known."""
        shape, inside = self.module.event_grid.shape, slice(first, first + count)
        integral, covered = np.zeros((count, *shape)), np.zeros((count, *shape))
        start, length = (self.start_ns - self.origin_ns)[inside], self.length_ns[inside]
        t0 = self.origin_ns + int(start[0] - LONGEST_NS)
        t1 = self.origin_ns + int(start[-1] + length[-1] + self.delay_ns.max() + LONGEST_NS)
        last_ns, level, frame = np.full(shape, -np.inf), np.zeros(shape), np.zeros(shape, np.int64)
        for e in self.recording.event_blocks(t0, t1):
            columns = e.t, e.x, e.y, e.on, self.origin_ns, start, length, self.delay_ns
            average_levels(
                *columns, self.setting.on, self.setting.off, LONGEST_NS, last_ns, level, frame, integral, covered
            )
        known = covered > WHOLE * length[:, None, None]
        return np.where(known, integral / np.maximum(covered, 1.0), np.nan)

    def samples(self, first: int, pairs: int) -> tuple[Array, Array, Array]:
        """Columns (5, N), measured changes (N,) and weights (N,) of a stretch of pairs from frame `first` on."""
        measured = np.diff(self.levels(first, pairs + 1), axis=0)
        columns, values, weights = [], [], []
        before = self.frames.frame(first)
        for p in range(pairs):
            after = self.frames.frame(first + p + 1)
            setting = self.setting
            design = pair_columns(before, after, setting.reference_dn)
            with np.errstate(invalid="ignore"):
                used = setting.healthy & np.all(np.isfinite(design), axis=0) & np.isfinite(measured[p])
                dim = 1.0 / np.minimum(before.light_dn, after.light_dn)[used]
            columns.append(design[:, used])
            values.append(measured[p][used])
            # A residual of the comparator's, and the frames' noise, which grows towards the dark.
            weights.append(1.0 / (setting.theta**2 / 6.0 + 1.0 * dim + 2.0 * dim**2))
            before = after
        return np.concatenate(columns, axis=1), np.concatenate(values), np.concatenate(weights)


@dataclass(frozen=True, eq=False)
class FieldSamples:
    """Samples of all stretches: `design` (5, N), `measured` (N,), `weight` (N,), and which `block` each is from."""

    design: Array
    measured: Array
    weight: Array
    block: Array


def gather(blocks: FieldBlocks, firsts: Array, pairs: int, tell: Callable[[float], None]) -> FieldSamples:
    """Samples of stretches of `pairs` pairs of frames from frames `firsts` on."""
    parts = []
    for number, first in enumerate(firsts):
        design, measured, weight = blocks.samples(int(first), pairs)
        parts.append((design, measured, weight, np.full(len(measured), number)))
        tell((number + 1) / len(firsts))
    design, measured, weight, block = (np.concatenate(column, axis=-1) for column in zip(*parts, strict=True))
    return FieldSamples(design, measured, weight, block)


def solve(samples: FieldSamples) -> tuple[Array, Array]:
    """Parameters (5,) and their covariance, a sandwich with stretches of time as clusters; Huber weights (1964).

    Raises DegenerateDataError where the samples do not determine them.
    """
    known, robust = np.zeros(5), np.ones(len(samples.measured))
    for _ in range(ROUNDS):
        weighted = samples.design * (samples.weight * robust)
        normal = weighted @ samples.design.T
        size = np.sqrt(np.maximum(np.diag(normal), 1e-300))
        if np.linalg.cond(normal / np.outer(size, size)) > WORST_CONDITION:
            raise DegenerateDataError("the motion does not tell the map's shift, the clock's and the lag apart")
        known = np.linalg.solve(normal, weighted @ samples.measured)
        misfit = np.abs(samples.measured - known @ samples.design) * np.sqrt(samples.weight)
        robust = np.minimum(1.0, CLIP * max(float(np.median(misfit)), 1e-9) * 1.4826 / np.maximum(misfit, 1e-9))
    weighted = samples.design * (samples.weight * robust)
    left = samples.measured - known @ samples.design
    count = int(samples.block.max()) + 1
    scores = np.stack([np.bincount(samples.block, row * left, minlength=count) for row in weighted])
    inverse = np.linalg.inv(weighted @ samples.design.T)
    return known, inverse @ (scores @ scores.T * (count / max(count - 1, 1))) @ inverse
