"""Frames of a blinking board: every row integrates the blink over its own exposure, exactly."""

from collections.abc import Callable
from dataclasses import dataclass
from itertools import pairwise

import numpy as np

from hybridtrack.errors import OptionError
from hybridtrack.module import HybridModule
from hybridtrack.recording import RecordingWriter
from hybridtrack.synthesis.blink import Blink
from hybridtrack.synthesis.board_kernels import add_exposure
from hybridtrack.synthesis.board_optics import BoardOptics
from hybridtrack.synthesis.board_views import BoardMotion
from hybridtrack.synthesis.frame_sensor import FrameSensor
from hybridtrack.synthesis.recipe_parts import FrameRecipe

Array = np.ndarray
BLUR_PX = 0.35  # of picture motion between renders within an exposure
MOST_RENDERS = 5
FAST_PX = 2.0  # from this motion in an exposure on, frame pixels are rendered whole
BLOCK_FRAMES = 16


@dataclass(frozen=True)
class FrameClock:
    """Stamps of frames and, through the true clocks, when their rows expose."""

    module: HybridModule
    period_ns: float
    exposure_ns: int
    first_ns: float

    @classmethod
    def of_recipe(cls, recipe: FrameRecipe, module: HybridModule) -> "FrameClock":
        """Raises OptionError where exposure and rows do not fit into a frame's period."""
        clock = cls(module, 1e9 / recipe.rate_hz, round(1e6 * recipe.exposure_ms), 1e6 * recipe.first_ms)
        timing = module.known_timing()
        rows_ns = (timing.line_time_ns or 0.0) * module.frame_mode.height
        if max(rows_ns, float(timing.true_exposure_ns(np.array(float(clock.exposure_ns))))) > clock.period_ns:
            raise OptionError(
                f"frames.rate_hz {recipe.rate_hz:g} leaves {clock.period_ns / 1e6:.2f} ms a frame: less than exposure "
                f"or readout of {module.frame_mode.height} rows takes"
            )
        return clock

    def stamps_ns(self, end_ns: float) -> Array:
        """Stamps (F,) int64, frame clock, of frames that may start before `end_ns`."""
        offset = self.module.known_timing().frame_offset_ns or 0.0
        first = int(np.floor(-(self.first_ns + offset) / self.period_ns))
        last = int(np.ceil((end_ns - self.first_ns - offset) / self.period_ns))
        return np.rint(self.first_ns + self.period_ns * np.arange(first, last + 1)).astype(np.int64)

    def row_starts_ns(self, stamp_ns: float) -> Array:
        """Start of exposure (rows,) of every row, event clock, in order of place."""
        mode = self.module.frame_mode
        before = mode.read_order(np.arange(mode.height)) if mode.shutter == "rolling" else np.zeros(mode.height)
        return self.module.known_timing().exposure_start_ns(np.array(float(stamp_ns)), before)

    @property
    def true_exposure_ns(self) -> float:
        """What the stamped exposure really is."""
        return float(self.module.known_timing().true_exposure_ns(np.array(float(self.exposure_ns))))


@dataclass
class BoardFrames:
    """Renders frames of the board; keeps the pictures of the view at hand."""

    module: HybridModule
    optics: BoardOptics
    quick_optics: BoardOptics
    sensor: FrameSensor
    motion: BoardMotion
    blink: Blink
    flicker: Array
    scanout_ns: float
    _view: int = -1
    _pictures: Array | None = None

    def _binned(self, poses: Array, pose_rows: Array | None) -> Array:
        pictures = self.optics.pictures(poses, pose_rows)
        return np.stack([self.sensor.light_from_colour(picture) for picture in pictures]).astype(np.float32)

    def _add(self, starts: Array, duration_ns: float, share: float, pictures: Array, out: Array) -> None:
        pulse_a, pulse_b = self.blink.pulses
        add_exposure(
            starts,
            duration_ns,
            share,
            pictures,
            self.scanout_ns,
            pulse_a,
            pulse_b,
            self.blink.amplitude_dn,
            self.blink.before_dn,
            self.blink.first_cycle,
            self.flicker,
            out,
        )

    def is_still(self, t0_ns: float, t1_ns: float) -> bool:
        """Whether one picture of the view holds from t0 to t1."""
        first, last = self.motion.segment_at(np.array([t0_ns, t1_ns]))
        return bool(self.motion.is_still and first == last and not self.motion.segments[first].is_move)

    def moved_px(self, t0_ns: float, t1_ns: float, exposure_ns: float) -> float:
        """About how far the picture moves during an exposure that lies in t0..t1."""
        poses = self.motion.poses(np.linspace(t0_ns, t1_ns, 3))
        turn = np.linalg.norm(np.diff(poses[:, :3, :3], axis=0), axis=(1, 2)).sum() / np.sqrt(2)
        shift = np.linalg.norm(np.diff(poses[:, :3, 3], axis=0), axis=1).sum() / abs(poses[1, 2, 3])
        return float(self.module.lens_model().fx * (turn + shift) * exposure_ns / (t1_ns - t0_ns))

    def light(self, starts_ns: Array, exposure_ns: float) -> Array:
        """Mean light (rows, columns) in DN of a frame whose rows expose from `starts_ns` (rows,)."""
        mode = self.module.frame_mode
        out = np.zeros(mode.shape)
        t0_ns, t1_ns = starts_ns.min(), starts_ns.max() + exposure_ns
        if self.is_still(t0_ns, t1_ns):
            view = self.motion.segments[int(self.motion.segment_at(starts_ns[:1])[0])].view
            if view != self._view or self._pictures is None:
                self._view, self._pictures = view, self._binned(self.motion.views[view], None)
            self._add(starts_ns, exposure_ns, 1.0 / exposure_ns, self._pictures, out)
            return out
        moved_px = self.moved_px(t0_ns, t1_ns, exposure_ns)
        renders = int(np.clip(np.ceil(moved_px / BLUR_PX), 1, MOST_RENDERS))
        colour_rows = np.arange(self.optics.shape[0])
        pose_rows = np.clip((colour_rows - mode.crop[1]) // mode.binning, 0, mode.height - 1)
        part = exposure_ns / renders
        for k in range(renders):
            poses = self.motion.poses(starts_ns + (k + 0.5) * part)
            if moved_px < FAST_PX:
                pictures = self._binned(poses, pose_rows)
            else:
                pictures = self.quick_optics.pictures(poses, np.arange(mode.height))
            self._add(starts_ns + k * part, part, 1.0 / exposure_ns, pictures, out)
        return out


def record_frames(
    frames: BoardFrames, clock: FrameClock, writer: RecordingWriter, progress: Callable[[float], None]
) -> None:
    """Write every frame whose rows all expose inside what is recorded."""
    segments = frames.motion.segments
    stamps = clock.stamps_ns(segments[-1].t1_ns)
    exposure = clock.true_exposure_ns
    held: list[tuple[Array, int, int]] = []

    def write() -> None:
        if held:
            images, times, numbers = zip(*held, strict=True)
            count = len(held)
            exposures = np.full(count, clock.exposure_ns, np.int64)
            writer.append_frames(
                np.stack(images), np.array(times, np.int64), exposures, np.array(numbers, np.uint64), np.ones(count)
            )
            held.clear()

    for number, stamp in enumerate(stamps):
        starts = clock.row_starts_ns(float(stamp))
        if not is_recorded(frames.motion, starts.min(), starts.max() + exposure):
            continue
        image = frames.sensor.record(frames.light(starts, exposure), number)
        held.append((image, int(stamp), number))
        if len(held) == BLOCK_FRAMES:
            write()
            progress(number / len(stamps))
    write()
    progress(1.0)


def is_recorded(motion: BoardMotion, t0_ns: float, t1_ns: float) -> bool:
    """Whether t0..t1 lies in the recording without touching a gap."""
    first, last = motion.segment_at(np.array([t0_ns, t1_ns]))
    parts = motion.segments[first : last + 1]
    joined = all(a.t1_ns >= b.t0_ns for a, b in pairwise(parts))
    return bool(joined and t0_ns >= parts[0].t0_ns and t1_ns <= parts[-1].t1_ns)
