"""Find every feature in a new frame, decide whether to believe it, and join it to the filter.

Two ways lead to a feature: its own template, aligned from where the filter expects it (hybrid mode) or from where
pyramidal Lucas-Kanade found it (frames mode); and, where that fails, Lucas-Kanade from the frame before, started
from the prediction and from rest. What the filter expects and what the frame shows are joined by covariance if they
agree.
"""

from dataclasses import dataclass

import numpy as np

from hybridtrack.tracking import track_state as ts
from hybridtrack.tracking.advance_kernels import observe_position, rewind, trajectory
from hybridtrack.tracking.core import Core
from hybridtrack.tracking.event_lag import LEAST_SPEED, EventLag
from hybridtrack.tracking.frame_step import SHARP_PX, FrameMatcher, Match, pyramidal_flow
from hybridtrack.tracking.light_levels import FrameClock
from hybridtrack.tracking.log_light import LogLight

Array = np.ndarray
GATE = 4.0  # deviations by which a frame may differ from the prediction
ALWAYS_AGREE_PX = 0.5
FLOW_SIGMA_PX = 0.3  # deviation of pyramidal Lucas-Kanade from frame to frame
FLOW_AGREES_PX = 1.5
SMEAR_DIFFERENCE_PX = 0.35
EVENT_DOUBT = 4.0  # by which the variance of a position carried by events is multiplied when a frame judges it
TRAIL_SIGMA_PX = 1.0  # spread of features about their common lag, in position
RENEW_AFTER_FRAMES = 3
MISS_SIGMA_PX, MISS_SIGMA_PX_S = 1.0, 100.0  # doubt of position and velocity that a frame without the feature adds
SURE_CORRELATION = 0.85


@dataclass
class Expectation:
    """Where a feature is expected in a frame: `slot`, `t_ns`, position (2,), and its path over the exposure."""

    slot: int
    t_ns: int
    position: Array
    path: Array
    smear: float


class FrameLocator:
    """Locates features frame by frame."""

    def __init__(self, core: Core, matcher: FrameMatcher, lag: EventLag | None) -> None:
        self._core, self._matcher, self._lag = core, matcher, lag
        self._trails: list[tuple[float, float]] = []
        self._picture: Array | None = None

    def expect(self, slot: int, clock: FrameClock) -> Expectation | None:
        """Take a feature to its row's middle of exposure; None where it only started after that."""
        record, position = self._core.table.rows[slot], np.zeros((1, 2))
        position[0] = self._core.table.state[slot, :2]
        t_ns = 0
        for _ in range(4):
            t_ns = int(clock.middle_ns(np.clip(position[0, 1], -0.5, clock.height - 0.5)))
            trajectory(record, np.array([t_ns]), position)
        path = self._matcher.path(slot, clock, t_ns)
        if not rewind(record, t_ns, self._core.pace):
            return None
        return Expectation(slot, t_ns, self._core.table.state[slot, :2].copy(), path, self._matcher.smear_px(path))

    def locate(self, light: LogLight, clock: FrameClock, picture: Array) -> list[Expectation]:
        """Locate all features; return what was expected of those that the frame concerns."""
        slots = self._core.active()
        expected = [e for e in (self.expect(int(s), clock) for s in slots) if e is not None]
        if self._core.options.mode == "events":
            return expected
        flow = self._flow(expected, picture) if self._core.options.mode == "frames" else {}
        rest = [e for e in expected if not self._try_own(e, light, flow.get(e.slot))]
        if self._core.options.mode == "hybrid":
            flow = self._flow(rest, picture)
        self._learn_lag()
        for e in rest:
            self._second_try(e, light, flow.get(e.slot))
        return expected

    def _note_trail(self, e: Expectation, match: Match) -> None:
        """Keep by how much time a moving feature trailed its frame, and the deviation of that."""
        velocity = self._core.table.state[e.slot, 2:4]
        speed = float(np.hypot(*velocity))
        if speed > LEAST_SPEED and self._core.slots.reason[e.slot] != ts.STARTED:
            trail = float((match.position - e.position) @ velocity) / speed**2
            self._trails.append((trail, TRAIL_SIGMA_PX / speed))

    def _learn_lag(self) -> None:
        if self._lag is not None and self._trails:
            trail_s, sigma_s = (np.array(column) for column in zip(*self._trails, strict=True))
            self._lag.learn(trail_s, sigma_s)
        self._trails.clear()

    def remember(self, picture: Array) -> None:
        """Keep a frame for Lucas-Kanade to the next one; positions are the slots' `at_frame`."""
        self._picture = picture

    def _flow(self, expected: list[Expectation], picture: Array) -> dict[int, Array]:
        """Positions by Lucas-Kanade from the frame before, where forward and backward agree."""
        if self._picture is None or not expected:
            return {}
        slots = np.array([e.slot for e in expected])
        before, guess = self._core.slots.at_frame[slots], np.array([e.position for e in expected])
        gate = self._core.options.forward_backward_px
        found, good = pyramidal_flow(self._picture, picture, before, guess, gate)
        if not good.all():
            again, good_again = pyramidal_flow(self._picture, picture, before[~good], before[~good], gate)
            found[~good] = again
            good[np.flatnonzero(~good)] = good_again
        return {int(s): f for s, f, g in zip(slots, found, good, strict=True) if g and self._core.inside(f)}

    def _match(self, e: Expectation, light: LogLight, start: Array) -> Match:
        slots = self._core.slots
        template_smear = 0.0 if slots.sharpened[e.slot] else slots.smear[e.slot]
        smeared = e.smear > SHARP_PX and e.smear - template_smear > SMEAR_DIFFERENCE_PX
        return self._matcher.match(e.slot, light, start, e.path if smeared else None)

    def _believable(self, match: Match, least: float) -> bool:
        return match.converged and match.correlation >= least and match.share >= 0.5

    def _agrees(self, e: Expectation, match: Match) -> bool:
        """Whether the frame and the prediction agree within their deviations."""
        p = self._core.table.cov[e.slot, :2, :2] + self._core.table.static_cov[e.slot]
        away = match.position - e.position
        s = p + np.array([[match.cov[0], match.cov[1]], [match.cov[1], match.cov[2]]])
        return bool(np.hypot(*away) < ALWAYS_AGREE_PX or away @ np.linalg.solve(s, away) < GATE**2)

    def _try_own(self, e: Expectation, light: LogLight, flow: Array | None) -> bool:
        """Align the own template from where it is expected, or from where Lucas-Kanade found it."""
        match = self._match(e, light, e.position if flow is None else flow)
        if not self._believable(match, self._core.options.min_correlation):
            return False
        if flow is not None and np.hypot(*(match.position - flow)) > FLOW_AGREES_PX:
            return False
        if flow is None and not self._agrees(e, match):
            return False
        self._note_trail(e, match)
        self._accept(e, match, ts.ALIVE, ts.NONE)
        return True

    def _second_try(self, e: Expectation, light: LogLight, flow: Array | None) -> None:
        """What to do with a feature that its own template did not settle."""
        if flow is None:
            self._miss(e, light)
            return
        match = self._match(e, light, flow)
        near = np.hypot(*(match.position - flow)) <= FLOW_AGREES_PX
        if near and self._believable(match, SURE_CORRELATION):
            # Template and Lucas-Kanade, which know nothing of each other, contradict the prediction together.
            self._widen(e, flow)
            self._accept(e, match, ts.WEAK, ts.FRAME_DISAGREES)
        elif self._core.options.mode == "frames" or self._agrees(e, _flow_match(flow)):
            self._widen(e, flow)
            observe_position(self._core.table.rows[e.slot], flow[0], flow[1], FLOW_SIGMA_PX**2, 0.0, FLOW_SIGMA_PX**2)
            self._core.slots.missed[e.slot] += 1
            self._mark(e.slot, ts.WEAK, ts.FRAME_UNMATCHED)
        else:
            self._miss(e, light)

    def _widen(self, e: Expectation, position: Array) -> None:
        """Let the prediction be as wrong as it was found to be."""
        away = float(np.sum((position - self._core.table.state[e.slot, :2]) ** 2))
        cov = self._core.table.cov[e.slot]
        dt = 0.01
        for k in range(2):
            cov[k, k] += away
            cov[k + 2, k + 2] += away / dt**2

    def _accept(self, e: Expectation, match: Match, state: int, reason: int) -> None:
        """Join a match to the filter."""
        table = self._core.table
        # Events of one interval share the errors of the levels that they started from.
        table.cov[e.slot, :2, :2] = EVENT_DOUBT * table.cov[e.slot, :2, :2] + table.static_cov[e.slot]
        observe_position(table.rows[e.slot], *match.position, *match.cov)
        # The template's own noise is in every frame's match and does not average out.
        floor = 0.5 * match.cov
        for k, value in ((0, floor[0]), (1, floor[2])):
            table.cov[e.slot, k, k] = max(table.cov[e.slot, k, k], value)
        table.warp[e.slot] = match.shape
        self._core.slots.missed[e.slot] = 0
        self._mark(e.slot, state, reason)

    def _miss(self, e: Expectation, light: LogLight) -> None:
        """The frame does not show the feature where it could be."""
        u, v = (
            round(float(c)) for c in np.clip(e.position, 0, [self._core.mode.width - 1, self._core.mode.height - 1])
        )
        self._core.slots.missed[e.slot] += 1
        cov = self._core.table.cov[e.slot]
        for k in range(2):
            cov[k, k] += MISS_SIGMA_PX**2
            cov[k + 2, k + 2] += MISS_SIGMA_PX_S**2
        reason = ts.FRAME_UNMATCHED
        if light.trust[v, u] == 0.0:
            reason = ts.SATURATED
        elif e.smear > 8.0:
            reason = ts.FRAME_BLURRED
        self._mark(e.slot, ts.WEAK, reason)

    def _mark(self, slot: int, state: int, reason: int) -> None:
        self._core.slots.state[slot], self._core.slots.reason[slot] = state, reason

    def needs_renewal(self, slot: int) -> bool:
        """Whether Lucas-Kanade holds a feature that no longer looks like its own template."""
        return (
            self._core.slots.reason[slot] == ts.FRAME_UNMATCHED and self._core.slots.missed[slot] >= RENEW_AFTER_FRAMES
        )


def _flow_match(position: Array) -> Match:
    cov = np.array([FLOW_SIGMA_PX**2, 0.0, FLOW_SIGMA_PX**2])
    return Match(position, cov, np.eye(2), 1.0, 1.0, True)
