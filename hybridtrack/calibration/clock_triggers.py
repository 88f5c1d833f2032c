"""Hardware edges against frames: the frame offset straight from the event clock.

A sensor may tell the event clock of each exposure by an edge. A channel is matched to the frames by the pattern of
their intervals: the shift between stamps and edges under which most frames have an edge. The width of a pulse tells
what it marks: one row's exposure, the time in which all rows are exposed (a strobe), or that in which any is.
Edges see no photoreceptor, so that they hold no event latency, and no blinking, so that they know no whole periods.
"""

from dataclasses import dataclass, replace

import numpy as np

from hybridtrack.module import Timing
from hybridtrack.recording import FrameTable, Triggers

Array = np.ndarray

NEAR_NS = 100_000.0  # an edge this close to where it is expected belongs to the frame
LEAST_SHARE = 0.9  # of the frames must have an edge
LEAST_FRAMES = 8
TRIED = 24  # first edges, and first frames, from which shifts are tried
WIDTH_NS = 150_000.0  # how far a pulse's width may be off what it marks
EDGE_FLOOR_NS = 1_000.0  # delay of a driver and its line: not told by the edges themselves


@dataclass(frozen=True)
class EdgeOffset:
    """Frame offset `offset_ns` by edges, with `sigma_ns`; on `channel`, edge `edge` (+1 rising, -1 falling), which
    marks `meaning`. `is_certain`: the pulse's width says so, and no other shift between edges and frames does as well.
    """

    offset_ns: float
    sigma_ns: float
    channel: int
    edge: int
    meaning: str
    is_certain: bool


@dataclass(frozen=True)
class EdgeMatch:
    """`delay_ns` from stamp to edge with the `scatter_ns` over `count` frames; whether the shift is the only one."""

    delay_ns: float
    scatter_ns: float
    count: int
    is_only: bool


def residuals(stamp_ns: Array, edge_ns: Array, shift_ns: float) -> Array:
    """From where each frame's edge is expected under a shift to the nearest edge (N,) ns; both inputs sorted."""
    expected = stamp_ns + shift_ns
    after = np.clip(np.searchsorted(edge_ns, expected), 1, len(edge_ns) - 1)
    before = edge_ns[after - 1] - expected
    behind = edge_ns[after] - expected
    return np.where(np.abs(before) < np.abs(behind), before, behind)


def match_edges(stamp_ns: Array, edge_ns: Array, near_ns: float | None = None) -> EdgeMatch | None:
    """Shift of edges (K,) against stamps (N,), both sorted and ns; None where too few frames have an edge.

    Of shifts that explain as many frames as each other, the one nearest `near_ns` is taken and called not the only one.
    """
    if len(stamp_ns) < LEAST_FRAMES or len(edge_ns) < LEAST_FRAMES:
        return None
    tries = np.concatenate(
        [
            (edge_ns[:TRIED, None] - stamp_ns[None, :TRIED]).ravel(),
            (edge_ns[-TRIED:, None] - stamp_ns[None, -TRIED:]).ravel(),
        ]
    )
    tries = np.unique(np.round(tries / (0.5 * NEAR_NS))) * 0.5 * NEAR_NS
    hits = np.array([np.count_nonzero(np.abs(residuals(stamp_ns, edge_ns, shift)) < NEAR_NS) for shift in tries])
    if hits.max() < LEAST_SHARE * len(stamp_ns):
        return None
    best = tries[hits == hits.max()]
    is_only = float(np.ptp(best)) < 2.5 * NEAR_NS
    chosen = float(np.median(best)) if is_only or near_ns is None else float(best[np.argmin(np.abs(best - near_ns))])
    for _ in range(3):
        off = residuals(stamp_ns, edge_ns, chosen)
        chosen += float(np.median(off[np.abs(off) < NEAR_NS]))
    off = residuals(stamp_ns, edge_ns, chosen)
    off = off[np.abs(off) < NEAR_NS]
    scatter = 1.4826 * float(np.median(np.abs(off - np.median(off))))
    return EdgeMatch(chosen, scatter, len(off), is_only)


def pulse_width_ns(rising_ns: Array, falling_ns: Array) -> float | None:
    """Median time from a rising edge to the next falling one, None where either is missing."""
    if len(rising_ns) == 0 or len(falling_ns) == 0:
        return None
    after = np.searchsorted(falling_ns, rising_ns, side="right")
    known = after < len(falling_ns)
    return float(np.median(falling_ns[after[known]] - rising_ns[known])) if np.any(known) else None


def meaning_of(width_ns: float | None, exposure_ns: float, readout_ns: float) -> tuple[str, float, bool]:
    """What the edge that opens a pulse marks, how long after the first row's start it comes, and if the width tells.

    `readout_ns`: from the first row's start of exposure to the last's.
    """
    kinds = (
        ("the first row's exposure", exposure_ns, 0.0),
        ("the exposure of any row", exposure_ns + readout_ns, 0.0),
        ("the exposure of all rows at once", exposure_ns - readout_ns, readout_ns),
    )
    if width_ns is not None:
        close = [kind for kind in kinds if kind[1] > 0 and abs(kind[1] - width_ns) < WIDTH_NS]
        if close and all(kind[2] == close[0][2] for kind in close):
            return close[0][0], close[0][2], True
    return "the first row's exposure, as is assumed", 0.0, False


def offset_by_edges(triggers: Triggers | None, frames: FrameTable, timing: Timing, height: int) -> EdgeOffset | None:
    """The frame offset by the channel that has an edge for each frame, None where there is none.

    `timing`: clocks by light; its drift is taken off the stamps, its offset decides between shifts that are alike.
    """
    if triggers is None or len(triggers.t) == 0:
        return None
    origin = int(frames.t_start_ns[0])
    stamp = np.sort(frames.t_start_ns - origin).astype(float)
    stamp += (timing.frame_drift_ppm or 0.0) * 1e-6 * (stamp + float(origin - (timing.drift_epoch_ns or origin)))
    exposure = float(np.median(frames.exposure_ns)) + (timing.exposure_correction_ns or 0.0)
    readout = (height - 1) * (timing.line_time_ns or 0.0)
    found: list[EdgeOffset] = []
    for channel in np.unique(triggers.channel):
        of_channel = triggers.channel == channel
        rising, falling = (
            np.sort(triggers.t[of_channel & (triggers.edge == e)] - origin).astype(float) for e in (1, -1)
        )
        of_one = []
        # A line may be active low: its falling edge then opens the pulse.
        for opens, closes, edge in ((rising, falling, 1), (falling, rising, -1)):
            meaning, late, certain = meaning_of(pulse_width_ns(opens, closes), exposure, readout)
            match = match_edges(stamp, opens, (timing.frame_offset_ns or 0.0) + late)
            if match is None:
                continue
            sigma = float(np.hypot(match.scatter_ns / np.sqrt(match.count), EDGE_FLOOR_NS))
            known = certain and match.is_only
            of_one.append(EdgeOffset(match.delay_ns - late, sigma, int(channel), edge, meaning, known))
        if sum(edges.is_certain for edges in of_one) > 1:
            of_one = [replace(edges, is_certain=False) for edges in of_one]
        found += of_one
    # A channel whose pulse says what it is goes before one that does not; rising before falling.
    return max(found, key=lambda edges: (edges.is_certain, edges.edge, -edges.sigma_ns), default=None)
