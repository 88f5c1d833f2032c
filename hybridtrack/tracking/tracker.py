"""The hybrid tracker: frames say exactly where features are, now and then; events carry them from frame to frame.

At a frame, every feature is taken back to the middle of its row's exposure, its own template (from where it was seen
best) is aligned to the frame, and the position joins the filter by its covariance. The frame, sharpened by the double
integral of events over its exposure, then sets the log light of every event pixel, and the events since are run again
from there. Between frames each event is a measurement of its feature's position (`advance_kernels`).
"""

import numpy as np

from hybridtrack.module import HybridModule
from hybridtrack.recording import Events
from hybridtrack.tracking import track_state as ts
from hybridtrack.tracking.advance_kernels import remember
from hybridtrack.tracking.core import Core, Counters, new_core
from hybridtrack.tracking.event_follower import EventFollower
from hybridtrack.tracking.feature_start import FeatureStarter
from hybridtrack.tracking.frame_locator import Expectation, FrameLocator
from hybridtrack.tracking.frame_step import FrameMatcher, Views, eight_bit, static_covariance
from hybridtrack.tracking.light_levels import FrameClock, check_for_events, frame_clock
from hybridtrack.tracking.log_light import LogLightReader
from hybridtrack.tracking.options import TrackerOptions
from hybridtrack.tracking.points_file import Points
from hybridtrack.tracking.tracks_file import Tracks

Array = np.ndarray
FRAME_PATCH_SMEAR_PX = 1.5  # up to this movement in the exposure the frame itself is the best template for events
SHARPER = 0.5  # share of the own template's smear at which a newer, sharper view replaces it


class Tracker:
    """Follows features through frames and events as they come.

    Events must be pushed in order, and those of a frame's exposure before the frame. Both calls return the lines that
    they give rise to. With `points` only these are followed, under their own ids; without, corners are.
    Raises NotCalibratedError where the module lacks the clocks or, but in mode `frames`, the map or the thresholds.
    """

    def __init__(
        self, module: HybridModule, options: TrackerOptions | None = None, points: Points | None = None
    ) -> None:
        self.options = options or TrackerOptions()
        module.known_timing()
        if self.options.mode != "frames":
            check_for_events(module)
        capacity = self.options.max_features if points is None else max(len(points), 1)
        self._core: Core = new_core(module, self.options, capacity)
        self._reader = LogLightReader(module)
        self._matcher = FrameMatcher(self._core)
        self._follower = EventFollower(self._core) if self.options.mode != "frames" else None
        self._locator = FrameLocator(self._core, self._matcher, self._follower.lag if self._follower else None)
        self._starter = FeatureStarter(self._core, self._matcher, self._follower, points)

    @property
    def counters(self) -> Counters:
        """What was done so far."""
        return self._core.counters

    @property
    def event_lag_ns(self) -> int:
        """How late events were found to be beyond what the module says; 0 without events."""
        return 0 if self._follower is None else self._follower.lag.ns

    def push_events(self, events: Events) -> Tracks:
        """Take events, none older than those before; return the lines between frames. Mode `frames` ignores them.

        Raises OptionError for events out of order or outside the grid.
        """
        if self._follower is None or not len(events):
            return Tracks.empty()
        return self._follower.push(events)

    def push_lost_events(self, t0_ns: int, t1_ns: int) -> None:
        """Say that the module dropped events in an interval, before the events that follow it are pushed."""
        if self._follower is not None:
            self._follower.add_gap(t0_ns, t1_ns)

    def push_frame(self, image: Array, t_start_ns: int, exposure_ns: int) -> Tracks:
        """Take a frame (H, W) or (H, W, 3), stamped on the frame clock, after its exposure's events; return its lines.

        Raises ModuleMismatchError for a picture of another size.
        """
        core, light = self._core, self._reader.read(image)
        clock = frame_clock(core.module, t_start_ns, exposure_ns)
        sharp, bracket, last = None, None, None
        if self._follower is not None:
            self._follower.pace_ramps()
            bracket, last = self._follower.bracket(clock)
            sharp = self._follower.sharpen(light, bracket)
        views = Views(light, sharp)
        picture = eight_bit(image, core.mode.white_dn)
        expected = self._locator.locate(light, clock, picture)
        ended = self._judge(expected)
        started = self._starter.start(views, clock)
        lines = self._lines([e.slot for e in expected], started)
        for slot in ended:
            core.release(slot)
        self._renew(expected, views)
        self._prepare(views.best, clock)
        self._locator.remember(picture)
        if self._follower is not None and bracket is not None and last is not None:
            self._follower.restart(light, clock, bracket, last)
            velocity = core.table.state[started, 2:4]
            core.slots.smear[started] = np.linalg.norm(velocity, axis=1) * clock.exposure_ns * 1e-9
        core.counters.frames += 1
        return lines

    def _judge(self, expected: list[Expectation]) -> list[int]:
        """Set the states of features that end at this frame; return their slots."""
        core, ended = self._core, []
        for e in expected:
            position, cov = core.table.state[e.slot, :2], core.table.cov[e.slot]
            core.slots.at_frame[e.slot] = position
            sigma_px = core.mode.binning * float(np.sqrt(max(np.linalg.eigvalsh(cov[:2, :2])[1], 0.0)))
            if not core.inside(position):
                self._end(e.slot, ts.OUT_OF_VIEW, ts.LEFT_PICTURE)
                core.counters.out_of_view += 1
            elif sigma_px > core.options.lost_sigma_px or not np.isfinite(sigma_px):
                self._end(e.slot, ts.LOST, ts.UNCERTAIN)
                core.counters.lost += 1
            elif core.slots.missed[e.slot] >= core.options.lost_after_frames:
                self._end(e.slot, ts.LOST, core.slots.reason[e.slot])
                core.counters.lost += 1
            else:
                continue
            ended.append(e.slot)
        return ended

    def _end(self, slot: int, state: int, reason: int) -> None:
        self._core.slots.state[slot], self._core.slots.reason[slot] = state, reason

    def _lines(self, located: list[int], started: list[int]) -> Tracks:
        """The frame's lines, each at its row's middle of exposure."""
        core = self._core
        slots = np.array(located + started, int)
        if not len(slots):
            return Tracks.empty()
        cov = core.table.cov[slots]
        flat = np.stack([cov[:, 0, 0], cov[:, 0, 1], cov[:, 1, 1]], axis=1)
        source = {"hybrid": ts.FROM_BOTH, "frames": ts.FROM_FRAME, "events": ts.FROM_EVENTS}[self.options.mode]
        lines = core.lines(slots, core.table.t_ns[slots], core.table.state[slots, :2], flat, source)
        alone = np.isin(core.slots.reason[slots], (ts.FRAME_UNMATCHED, ts.FRAME_BLURRED, ts.SATURATED))
        lines.source[alone & (lines.source == ts.FROM_BOTH)] = ts.FROM_EVENTS
        lines.source[len(located) :] = ts.FROM_FRAME
        return lines

    def _renew(self, expected: list[Expectation], views: Views) -> None:
        """Take new own templates: where the frame is sharper than they are, or where they no longer fit."""
        core = self._core
        for e in expected:
            if not core.table.active[e.slot]:
                continue
            slots = core.slots
            sharper = (
                slots.state[e.slot] == ts.ALIVE
                and slots.smear[e.slot] > 1.0
                and (e.smear < SHARPER * slots.smear[e.slot])
            )
            if sharper or (self.options.mode != "events" and self._locator.needs_renewal(e.slot)):
                self._matcher.take_own(e.slot, views, core.table.state[e.slot, :2], e.smear)
                slots.missed[e.slot] = 0

    def _prepare(self, sharp: Array, clock: FrameClock) -> None:
        """Set what events are compared to until the next frame."""
        core, table = self._core, self._core.table
        pace = core.pace
        density = abs(pace.x_u * pace.y_v - pace.x_v * pace.y_u)
        for slot in core.active():
            remember(table.rows[slot], core.pace)
            if self._follower is None:
                continue
            smear = float(np.linalg.norm(table.state[slot, 2:4])) * clock.exposure_ns * 1e-9
            usable = core.slots.reason[slot] in (ts.NONE, ts.STARTED) and smear < FRAME_PATCH_SMEAR_PX
            self._matcher.prepare_work(slot, sharp, from_frame=usable and self.options.mode == "hybrid")
            table.static_cov[slot] = static_covariance(
                core.features.work[slot], table.work_warp[slot], core.radius, density, table.level_sigma[slot]
            )
