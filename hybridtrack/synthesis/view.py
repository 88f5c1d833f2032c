"""One camera in one scene under its lamps: light at event pixels over time, light in frames, sharp pictures.

Light is in linear DN above black, as frames show it.
"""

from collections.abc import Iterator
from dataclasses import dataclass
from functools import cached_property

import numpy as np

from hybridtrack.geometry.arrays import FloatArray
from hybridtrack.module import HybridModule
from hybridtrack.synthesis.frame_sensor import mosaic_letters
from hybridtrack.synthesis.lamp import LampRecipe
from hybridtrack.synthesis.motion import Trajectory
from hybridtrack.synthesis.picture_motion import PictureMotion, picture_motion
from hybridtrack.synthesis.raycast import LIST_MARGIN_PX, Aperture, Exposure, PixelRays, RayCaster, pixel_rays
from hybridtrack.synthesis.raycast_kernels import light_between
from hybridtrack.synthesis.scene import CHANNELS, Scene

Array = np.ndarray

STEP_PX = 0.5  # of picture motion between two looks at the scene
BLUR_STEP_PX = 0.65  # of picture motion a node within an exposure
_LONGEST_STEP_NS = 5e6
_STEPS_A_BLOCK = 32
_FEWEST_SAMPLES, _MOST_SAMPLES = 2, 96
_ROWS_A_KNOT = 16


@dataclass(frozen=True)
class Optics:
    """Point spread (one sigma, colour px) and the fall-off of light at the array's corner."""

    point_spread_px: float = 0.6
    vignetting: float = 0.1


def fall_off(module: HybridModule, positions: FloatArray, vignetting: float) -> Array:
    """Relative light (P,) at colour-array positions (P, 2): down by `vignetting` at half the array's diagonal."""
    array = module.colour_array
    middle = np.array([(array.width - 1) / 2.0, (array.height - 1) / 2.0])
    r = np.linalg.norm(positions - middle, axis=-1) / array.half_diagonal_px
    return (1.0 - vignetting * r**2).astype(np.float32)


def frame_channels(module: HybridModule) -> Array | None:
    """Index into `CHANNELS` of every frame pixel's filter (P,), None where all are alike."""
    mode, cluster = module.frame_mode, module.cluster
    letters = mosaic_letters(mode, mode.shape)
    if letters is None:
        return None
    channels = np.vectorize(lambda letter: max(CHANNELS.find(letter), 0), otypes=[np.int64])(letters)
    if mode.binning == 1 and mode.clear_in_frame == "included" and cluster.clear_site is not None:
        rows = (np.arange(mode.height) + mode.crop[1]) % cluster.height == cluster.clear_site[1]
        columns = (np.arange(mode.width) + mode.crop[0]) % cluster.width == cluster.clear_site[0]
        channels[np.ix_(rows, columns)] = 0
    return channels.ravel()


class View:
    """What one module sees from t0 to t1 along a trajectory."""

    def __init__(
        self, scene: Scene, module: HybridModule, trajectory: Trajectory, lamp: LampRecipe, optics: Optics | None = None
    ) -> None:
        self.scene, self.module, self.trajectory, self.lamp = scene, module, trajectory, lamp
        self.optics = optics or Optics()

    def _rays(self, positions: FloatArray, width_px: float, channels: Array | None) -> PixelRays:
        aperture = Aperture(width_px, self.optics.point_spread_px)
        return pixel_rays(self.module.lens_model(), positions.reshape(-1, 2), aperture, channels)

    @cached_property
    def _events(self) -> RayCaster:
        return RayCaster(self.scene, self._rays(self.module.event_pixel_positions(), 1.0, None))

    @cached_property
    def _frames(self) -> RayCaster:
        mode = self.module.frame_mode
        rays = self._rays(self.module.frame_pixel_centres(), float(mode.binning), frame_channels(self.module))
        return RayCaster(self.scene, rays)

    @cached_property
    def _event_gain(self) -> Array:
        return self._gain(self._events)

    @cached_property
    def _frame_gain(self) -> Array:
        return self._gain(self._frames)

    def _gain(self, caster: RayCaster) -> Array:
        return fall_off(self.module, caster.rays.positions, self.optics.vignetting) * np.float32(self.lamp.white_dn)

    def motion(self, t0_ns: float, t1_ns: float) -> PictureMotion:
        """Picture speeds from t0 to t1."""
        size = (self.module.colour_array.width, self.module.colour_array.height)
        return picture_motion(self.scene, self.module.lens_model(), size, self.trajectory, t0_ns, t1_ns)

    def event_light(self, motion: PictureMotion, t0_ns: float, t1_ns: float) -> Iterator[tuple[FloatArray, Array]]:
        """Yield times (T,) and light (T, N) float32 at all event pixels, in blocks that follow on without a gap.

        Between the times light is nearly a straight line: they are half a colour px of motion apart at most, and hold
        the lamps' turning points. Every block starts where the one before ended.
        """
        caster = self._events
        gain = self._event_gain
        looks = motion.instants_ns(t0_ns, t1_ns, STEP_PX, _LONGEST_STEP_NS)
        last_seen: Array | None = None
        for begin in range(0, len(looks) - 1, _STEPS_A_BLOCK):
            times = looks[begin : begin + _STEPS_A_BLOCK + 1]
            fresh = times if last_seen is None else times[1:]
            seen = caster.instants(self.trajectory.poses(fresh))
            if last_seen is not None:
                seen = np.concatenate([last_seen, seen])
            last_seen = seen[-1:]
            yield from self._lit(times, seen, gain)

    def _lit(self, times: FloatArray, seen: Array, gain: Array) -> Iterator[tuple[FloatArray, Array]]:
        """Put the lamps on what was seen (T, N) at `times`, in blocks of bounded size."""
        fine = np.union1d(times, self.lamp.turning_points_ns(times[0], times[-1]))
        place = np.interp(fine, times, np.arange(len(times)))
        index = np.minimum(place.astype(np.int64), len(times) - 1)
        level = self.lamp.level(fine)
        for begin in range(0, len(fine), 2 * _STEPS_A_BLOCK):
            part = slice(begin, begin + 2 * _STEPS_A_BLOCK)
            light = np.empty((len(fine[part]), seen.shape[1]), np.float32)
            light_between(seen, index[part], place[part] - index[part], level[part], gain, light)
            yield fine[part], light

    def frame_light(
        self, motion: PictureMotion, row_starts_ns: FloatArray, exposure_ns: float, full_ns: float
    ) -> Array:
        """Mean light (rows, columns) float32 of a frame whose rows start their exposure at `row_starts_ns` (rows,).

        `exposure_ns` is how long they really expose, `full_ns` the exposure for which a white surface shows the lamps'
        `white_dn`. The motion within an exposure is followed at Gauss-Legendre
        nodes, one for `BLUR_STEP_PX` of it and two at least; the lamps are integrated exactly.
        """
        mode = self.module.frame_mode
        first, last = float(row_starts_ns.min()), float(row_starts_ns.max())
        ways = [motion.way_between(t, t + exposure_ns) for t in np.linspace(first, last, 5)]
        samples = int(np.clip(np.ceil(max(ways) / BLUR_STEP_PX), _FEWEST_SAMPLES, _MOST_SAMPLES))
        nodes, shares = np.polynomial.legendre.leggauss(samples)
        knots = max(-(-mode.height // _ROWS_A_KNOT), 1) + 1
        edges = exposure_ns * np.concatenate([[0.0], np.cumsum(0.5 * shares)])[:, None]
        middles = np.linspace(first, last, knots) + 0.5 * exposure_ns * (nodes[:, None] + 1.0)
        span = last - first
        exposure = Exposure(
            self.trajectory.poses(middles.ravel()).reshape(samples, knots, 4, 4),
            (row_starts_ns - first) / span * (knots - 1) if span > 0 else np.zeros(mode.height),
            np.diff(self.lamp.integral_ns(row_starts_ns + edges), axis=0) / full_ns,
            np.repeat(np.arange(mode.height), mode.width),
        )
        stations = self.trajectory.poses(motion.instants_ns(first, last + exposure_ns, LIST_MARGIN_PX, np.inf))
        light = self._frames.exposures(exposure, stations)
        return (light * self._frame_gain).reshape(mode.shape)

    def sharp_light(self, t_ns: float) -> Array:
        """Light (rows, columns) at one instant for every frame pixel, lamps at their mean: no blur, skew or flicker."""
        light = self._frames.instants(self.trajectory.poses(np.array([t_ns])))[0]
        return (light * self._frame_gain).reshape(self.module.frame_mode.shape)
