"""Start features: at given points, or at corners where there is room."""

import numpy as np

from hybridtrack.tracking import track_state as ts
from hybridtrack.tracking.core import Core
from hybridtrack.tracking.detection import detect_corners
from hybridtrack.tracking.event_follower import EventFollower
from hybridtrack.tracking.feature_table import FORGOTTEN
from hybridtrack.tracking.frame_step import FrameMatcher, Views, pyramidal_flow
from hybridtrack.tracking.light_levels import FrameClock
from hybridtrack.tracking.log_light import LogLight
from hybridtrack.tracking.points_file import Points

Array = np.ndarray
WIDE_VELOCITY = 1500.0  # frame px/s, deviation of a velocity of which nothing is known
START_SIGMA_PX = 0.1
SAME_INSTANT_NS = 50_000
FEW = 3
FAST_START_PX = 3.0  # movement in an exposure from which the events' common velocity is the better start
COMMON_SHARE = 0.25  # of the common velocity that a feature's own may differ by: depths differ


class FeatureStarter:
    """Fills slots."""

    def __init__(
        self, core: Core, matcher: FrameMatcher, follower: EventFollower | None, points: Points | None
    ) -> None:
        self._core, self._matcher, self._follower, self._points = core, matcher, follower, points
        self._waiting = np.ones(0 if points is None else len(points), bool)
        self._next_id = 0

    def start(self, views: Views, clock: FrameClock) -> list[int]:
        """Start what the frame allows; return the new slots."""
        settled = self._settled()
        if self._points is not None:
            started = self._start_points(views, clock)
        else:
            started = self._start_corners(views, clock) if self._core.options.detect else []
        if started and self._follower is not None:
            self._velocity_limits(started, views.best, clock)
        if started and len(settled) >= FEW:
            self._velocity_of_neighbours(started, settled)
        elif started and self._follower is not None and not self._common_velocity(started, clock):
            self._velocity_in_exposure(started, views.light, clock)
        table = self._core.table
        for slot in started:
            smear_px = float(np.linalg.norm(table.state[slot, 2:4])) * clock.exposure_ns * 1e-9
            self._matcher.take_own(slot, views, table.state[slot, :2], smear_px)
        return started

    def _settled(self) -> Array:
        """Features that have been seen in more than one frame."""
        active = self._core.active()
        return active[self._core.slots.reason[active] == ts.NONE]

    def _start_corners(self, views: Views, clock: FrameClock) -> list[int]:
        core = self._core
        free = np.flatnonzero(core.table.active == 0)
        if len(free) < max(1, 0.05 * len(core.table.active)):
            return []
        taken = core.slots.at_frame[core.active()]
        margin = int(core.radius) + 2
        if min(views.best.shape) <= 2 * margin + 2:
            return []
        corners = detect_corners(views.best, views.light.trust, taken, len(free), margin, core.options.corner_share)
        for slot, uv in zip(free, corners, strict=False):
            self._fill(int(slot), self._next_id, uv, clock)
            self._next_id += 1
        return [int(s) for s in free[: len(corners)]]

    def _start_points(self, views: Views, clock: FrameClock) -> list[int]:
        points, core = self._points, self._core
        assert points is not None
        uv = core.mode.frame_from_colour(points.uv)
        due = np.flatnonzero(self._waiting & (points.t_ns <= clock.middle_ns(uv[:, 1]) + SAME_INSTANT_NS))
        if not len(due):
            return []
        moved = self._carry_to_frame(points.t_ns[due], uv[due], views, clock)
        started = []
        for k, position in zip(due, moved, strict=True):
            self._waiting[k] = False
            if core.inside(position):
                slot = int(np.flatnonzero(core.table.active == 0)[0])
                self._fill(slot, int(points.id[k]), position, clock)
                started.append(slot)
        return started

    def _carry_to_frame(self, t_ns: Array, uv: Array, views: Views, clock: FrameClock) -> Array:
        """Where points seen at `t_ns` (N,) at `uv` (N, 2) are at their rows' middle of exposure in this frame.

        With events, a sharp picture at the points' instant leads to the sharp frame by Lucas-Kanade; without, or
        for stamps long before the frame, they are taken to have stayed.
        """
        moved = uv.copy()
        if self._follower is None:
            return moved
        early = clock.middle_ns(uv[:, 1]) - t_ns
        reach = 2 * clock.exposure_ns + (clock.span_ns[1] - clock.span_ns[0])
        todo = np.flatnonzero((early > SAME_INSTANT_NS) & (early < reach))
        for instant in np.unique(t_ns[todo] // 100_000)[:64]:
            group = todo[t_ns[todo] // 100_000 == instant]
            then = self._follower.sharp_at(views.light, clock, t_ns=int(np.mean(t_ns[group])))
            found, good = pyramidal_flow(_eight_bit(then), _eight_bit(views.best), uv[group], uv[group], 1.0)
            moved[group[good]] = found[good]
        return moved

    def _fill(self, slot: int, identity: int, uv: Array, clock: FrameClock) -> None:
        core, table, slots = self._core, self._core.table, self._core.slots
        table.active[slot] = 1
        table.t_ns[slot] = int(clock.middle_ns(uv[1]))
        table.state[slot] = 0.0
        table.state[slot, :2] = uv
        table.cov[slot] = 0.0
        np.fill_diagonal(table.cov[slot], [START_SIGMA_PX**2] * 2 + [WIDE_VELOCITY**2] * 2 + [0.1**2])
        table.static_cov[slot] = 0.0
        table.level_sigma[slot] = 0.4 * self._follower.theta if self._follower is not None else 0.1
        table.history_t[slot] = FORGOTTEN
        table.recent_speed[slot] = 0.0
        table.history_next[slot] = 0
        slots.id[slot], slots.state[slot], slots.reason[slot] = identity, ts.ALIVE, ts.STARTED
        slots.missed[slot], slots.at_frame[slot] = 0, uv
        core.counters.started += 1

    def _set_velocity(self, slot: int, velocity: Array, sigma: float) -> None:
        table = self._core.table
        table.state[slot, 2:4] = velocity
        table.cov[slot, 2, 2] = table.cov[slot, 3, 3] = sigma**2

    def _velocity_of_neighbours(self, started: list[int], settled: Array) -> None:
        """Give new features the median velocity of the nearest settled ones."""
        states = self._core.table.state[settled]
        for slot in started:
            near = np.argsort(np.linalg.norm(states[:, :2] - self._core.table.state[slot, :2], axis=1))[:7]
            velocities = states[near, 2:4]
            middle = np.median(velocities, axis=0)
            self._set_velocity(slot, middle, 50.0 + 2.0 * float(np.median(np.linalg.norm(velocities - middle, axis=1))))

    def _velocity_limits(self, started: list[int], sharp: Array, clock: FrameClock) -> None:
        """Deviation of each new feature's velocity: how fast its slopes must move to give the events of the exposure.

        A pixel fires at slope times speed over threshold (Gehrig et al. 2018); two more events may have gone amiss.
        """
        assert self._follower is not None
        uv = self._core.table.state[started, :2]
        slope = np.hypot(*np.gradient(sharp))
        reach = int(self._core.radius)
        events, pixels = self._follower.activity(clock, uv, self._core.radius)
        for slot, (u, v), count, size in zip(started, uv, events, pixels, strict=True):
            row, column = round(float(v)), round(float(u))
            mean = slope[max(row - reach, 0) : row + reach + 1, max(column - reach, 0) : column + reach + 1].mean()
            rate = (count + 2.0) / max(size, 1) / (clock.exposure_ns * 1e-9)
            sigma = 2.0 * rate * self._follower.theta / max(float(mean), 1e-3)
            self._set_velocity(slot, np.zeros(2), float(np.clip(sigma, 20.0, WIDE_VELOCITY)))

    def _common_velocity(self, started: list[int], clock: FrameClock) -> bool:
        """Give new features the picture's common velocity where it is fast; return whether it is."""
        assert self._follower is not None
        middle = int(clock.middle_ns(np.array(0.5 * self._core.mode.height)))
        found = self._follower.common_motion(clock, middle)
        if found is None or np.linalg.norm(found.velocity) * clock.exposure_ns * 1e-9 < FAST_START_PX:
            return False
        sigma = COMMON_SHARE * float(np.linalg.norm(found.velocity)) + found.step
        for slot in started:
            self._set_velocity(slot, found.velocity, sigma)
        return True

    def _velocity_in_exposure(self, started: list[int], light: LogLight, clock: FrameClock) -> None:
        """Measure new features' velocity between sharp pictures near both ends of this exposure."""
        assert self._follower is not None
        first, last = (_eight_bit(self._follower.sharp_at(light, clock, share)) for share in (0.05, 0.95))
        slots = np.array(started)
        uv = self._core.table.state[slots, :2]
        found, good = pyramidal_flow(first, last, uv, uv, 1.0)
        events, pixels = self._follower.activity(clock, uv, self._core.radius)
        activity = events / np.maximum(pixels, 1)
        good &= activity >= max(0.3, float(np.median(activity)))
        if good.sum() < FEW:
            return
        # With few events in the exposure the two pictures differ less than they should: only lively patches count.
        velocities = (found[good] - uv[good]) / (0.9 * clock.exposure_ns * 1e-9)
        middle = np.median(velocities, axis=0)
        spread = float(np.median(np.linalg.norm(velocities - middle, axis=1)))
        for slot in started:
            self._set_velocity(slot, middle, 100.0 + 2.0 * spread + 0.3 * float(np.linalg.norm(middle)))


def _eight_bit(log_light: Array) -> Array:
    low, high = np.percentile(log_light, [1.0, 99.0])
    return np.clip((log_light - low) * (255.0 / max(high - low, 1e-3)), 0, 255).astype(np.uint8)
