"""The light of a blinking board at the event pixels, sampled where it bends, and exposed view by view."""

from collections.abc import Callable
from itertools import pairwise

import numpy as np

from hybridtrack.synthesis.blink import Blink
from hybridtrack.synthesis.board_kernels import FLICKER_DEPTH, FLICKER_RATE, light_over_time
from hybridtrack.synthesis.board_optics import BoardOptics
from hybridtrack.synthesis.board_views import BoardMotion, Segment
from hybridtrack.synthesis.event_pixels import EventPixels
from hybridtrack.synthesis.event_sink import EventSink

Array = np.ndarray
SWAY_STEP_NS = 6e6
FINE_STEP_NS = 250e3
SWEEP_STEP_NS = 250e3  # a screen's flip passes the picture, and is ramped over this long at each pixel
STEPS_PER_FLICKER = 24
MOVE_PX = 2.5  # of picture motion between renders on the way from view to view
CUT_NS = 1000.0
BLOCK_SAMPLES = 48


def largest_step_ns(flicker: Array, scanout_ns: float) -> float:
    """Longest time over which light may be taken as linear between the blink's own kinks."""
    step = np.inf
    if flicker[FLICKER_DEPTH] > 0:
        step = 2 * np.pi / flicker[FLICKER_RATE] / STEPS_PER_FLICKER
    return min(step, SWEEP_STEP_NS) if scanout_ns > 0 else float(step)


def render_times_ns(motion: BoardMotion, segment: Segment, focal_px: float) -> Array:
    """Instants of a segment at which the board is rendered: the ends where nothing moves, else along the path."""
    if motion.is_still and not segment.is_move:
        return np.array([segment.t0_ns, segment.t1_ns])
    span = segment.t1_ns - segment.t0_ns
    if not segment.is_move:
        return np.linspace(segment.t0_ns, segment.t1_ns, 1 + int(np.ceil(span / SWAY_STEP_NS)))
    fine = np.linspace(segment.t0_ns, segment.t1_ns, 1 + int(np.ceil(span / FINE_STEP_NS)))
    poses = motion.poses(fine)
    turn = np.linalg.norm(np.diff(poses[:, :3, :3], axis=0), axis=(1, 2)) / np.sqrt(2)
    shift = np.linalg.norm(np.diff(poses[:, :3, 3], axis=0), axis=1) / np.abs(poses[1:, 2, 3])
    way = np.concatenate([[0.0], np.cumsum(focal_px * (turn + shift))])
    count = max(2, int(np.ceil(way[-1] / MOVE_PX)) + 1, int(np.ceil(span / SWAY_STEP_NS)) + 1)
    return np.unique(np.append(np.interp(np.linspace(0, way[-1], count), way, fine), [fine[0], fine[-1]]))


def sample_times_ns(blink: Blink, t0_ns: float, t1_ns: float, step_ns: float) -> Array:
    """Instants in (t0, t1], t1 included, between which light is linear."""
    times = blink.kinks_ns(t0_ns, t1_ns)
    if np.isfinite(step_ns):
        times = np.union1d(times, np.arange(t0_ns + step_ns, t1_ns, step_ns))
    return np.append(times, t1_ns)


def expose_events(
    motion: BoardMotion,
    blink: Blink,
    flicker: Array,
    scanout_ns: float,
    optics: BoardOptics,
    pixels: EventPixels,
    sink: EventSink,
    progress: Callable[[float], None],
) -> None:
    """Run the event pixels through the whole recording into `sink`."""
    step_ns = largest_step_ns(flicker, scanout_ns)
    focal_px = pixels.module.lens_model().fx
    pulse_a, pulse_b = blink.pulses
    end_ns = 0.0

    def expose(t: Array, weight: Array, here: Array, there: Array) -> None:
        light = np.empty((len(t), pixels.count), np.float32)
        light_over_time(
            t, weight, here, there, scanout_ns, pulse_a, pulse_b, blink.amplitude_dn, blink.first_cycle, flicker, light
        )
        sink.take(pixels.expose(t, light), t[-1])

    for index, segment in enumerate(motion.segments):
        progress(index / len(motion.segments))
        renders = render_times_ns(motion, segment, focal_px)
        still = motion.is_still and not segment.is_move
        there = optics.pictures(motion.poses(renders[:1])).reshape(-1, pixels.count)
        if segment.t0_ns > end_ns or index == 0:
            sink.pause()
            pixels.restart()
            expose(renders[:1], np.zeros(1), there, there)
        elif not segment.is_move and not motion.segments[index - 1].is_move:
            expose(renders[:1] + CUT_NS, np.zeros(1), there, there)
        for t0, t1 in pairwise(renders):
            here = there
            there = here if still else optics.pictures(motion.poses(np.array([t1 - 1.0]))).reshape(-1, pixels.count)
            times = sample_times_ns(blink, max(t0, pixels.now_ns), t1, step_ns)
            for first in range(0, len(times), BLOCK_SAMPLES):
                t = times[first : first + BLOCK_SAMPLES]
                expose(t, np.zeros(len(t)) if still else (t - t0) / (t1 - t0), here, there)
        end_ns = segment.t1_ns
    sink.finish()
    progress(1.0)
