"""Find the views: stretches in which the blinking pattern holds still, with no list from the user.

Events are folded at the blink frequency in blocks of two cycles. Each block's signed amplitude image, smoothed, is
compared with the one before: their correlation and the shift between them (one step of Lucas and Kanade 1981 for a
pure translation). A view is a maximal run of blocks with a pattern, where both stay within hand sway; what lies
between is transit. Where the pattern sways by several event pixels over the run, the stillest part is taken.
On a target of several steps of light the small ones show too little: such blocks are passed over, and the next strong
one is compared with the last.
Only numbers per block are kept, so that memory does not grow with the recording.
"""

from collections.abc import Iterator
from dataclasses import dataclass

import numpy as np
from scipy.ndimage import gaussian_filter

from hybridtrack.calibration.blink import Blink
from hybridtrack.calibration.kernels import OFF_BRIGHT, OFF_DARK, ON_BRIGHT, ON_DARK, fold_events
from hybridtrack.errors import BoardNotFoundError
from hybridtrack.recording import Events, Recording

Array = np.ndarray

BLOCK_CYCLES = 2
SMOOTH_PX = 1.5
ACTIVE_SHARE = 0.004  # of the event grid must blink for a block to count
ACTIVE_EVENTS = 0.5  # events per flip that make a pixel active
WEAK_S = 0.35  # longest stretch of small steps that is passed over
WEAK_PART = 0.6  # of the last strong block's amplitude
ALIKE, UNLIKE = 0.9, 0.4  # correlations of blocks that show the board at one place, and at two


@dataclass(frozen=True)
class ViewOptions:
    """How still a view must be; lengths in seconds, shifts in event px.

    `correlation`: least correlation of successive blocks. `sway_per_block_px`: largest shift between them.
    `sway_px`: largest shift over a whole view before only its stillest part is used. `shortest_s`, `stillest_s`:
    shortest run that is a view, and shortest part taken of one that sways.
    """

    correlation: float = 0.6
    sway_per_block_px: float = 2.0
    sway_px: float = 0.5
    shortest_s: float = 0.16
    stillest_s: float = 0.22


@dataclass(frozen=True)
class Block:
    """One block of whole cycles: start, how many pixels blink, and what changed since the block before; `weak` ones
    tell nothing."""

    cycle: int
    active: int
    correlation: float
    shift_px: Array
    weak: bool = False


@dataclass(frozen=True)
class View:
    """A view's interval on the event clock, the sway within it in event px, and whether it is part of a longer run."""

    t0_ns: int
    t1_ns: int
    sway_px: float
    is_part: bool


@dataclass(frozen=True)
class ViewFold:
    """Events of a view by what they are: `planes` (4, rows, columns) uint32 (order in kernels.py) over `cycles`."""

    planes: Array
    cycles: int

    def amplitude(self) -> Array:
        """Events per flip that agree with set A minus those that oppose it (rows, columns)."""
        return signed_amplitude(self.planes, self.cycles)

    def snr(self) -> Array:
        """|amplitude| over its deviation (rows, columns), counts taken as Poisson, which bounds a comparator's
        scatter.
        """
        total = self.planes.sum(axis=0, dtype=float)
        return np.abs(self.amplitude()) * 2 * self.cycles / np.sqrt(np.maximum(total, 1.0))

    def on_count(self) -> Array:
        """ON events per cycle (rows, columns)."""
        return (self.planes[ON_BRIGHT] + self.planes[ON_DARK]) / self.cycles

    def off_count(self) -> Array:
        """OFF events per cycle (rows, columns)."""
        return (self.planes[OFF_BRIGHT] + self.planes[OFF_DARK]) / self.cycles


def signed_amplitude(planes: Array, cycles: int) -> Array:
    """Events per flip in step with set A less those against it."""
    p = planes.astype(np.float32)
    return (p[ON_BRIGHT] + p[OFF_DARK] - p[ON_DARK] - p[OFF_BRIGHT]) / np.float32(2 * cycles)


def add_events(events: Events, blink: Blink, planes: Array) -> None:
    """Count events into `planes` (4, rows, columns)."""
    phase = blink.epoch_phase + blink.fold_lead
    fold_events(events.t, events.x, events.y, events.on, blink.epoch_ns, phase, blink.hz, blink.duty, planes)


def translation_px(before: Array, after: Array) -> Array:
    """Shift (x, y) that takes `before` to `after`, both smooth images, to first order."""
    middle = 0.5 * (before + after)
    dy, dx = np.gradient(middle)
    difference = after - before
    normal = np.array([[np.sum(dx * dx), np.sum(dx * dy)], [np.sum(dx * dy), np.sum(dy * dy)]])
    right = -np.array([np.sum(dx * difference), np.sum(dy * difference)])
    if np.linalg.det(normal) <= 1e-12 * normal.trace() ** 2:
        return np.zeros(2)
    return np.linalg.solve(normal, right)


def compare(before: Array | None, after: Array) -> tuple[float, Array]:
    """Correlation of two smoothed amplitude images about their means, and the shift between them."""
    if before is None:
        return 0.0, np.zeros(2)
    a, b = before - before.mean(dtype=float), after - after.mean(dtype=float)
    scale = float(np.sqrt(np.sum(a**2, dtype=float) * np.sum(b**2, dtype=float)))
    correlation = float(np.sum(a * b, dtype=float)) / scale if scale > 0 else 0.0
    return correlation, translation_px(before, after)


def cycle_blocks(recording: Recording, blink: Blink) -> Iterator[tuple[int, list[Events]]]:
    """Yield blocks of `BLOCK_CYCLES` whole cycles: number of the first cycle, and its events in pieces."""
    period = blink.period_ns
    t0_ns, t1_ns = recording.event_span_ns
    cycle = int(np.ceil(blink.phase(t0_ns) + blink.fold_lead))
    origin = blink.epoch_phase + blink.fold_lead
    boundary = blink.epoch_ns + round((cycle - origin) * period)
    pieces: list[Events] = []
    for events in recording.event_blocks(boundary, t1_ns + 1):
        rest = events
        while len(rest):
            end = blink.epoch_ns + round((cycle + BLOCK_CYCLES - origin) * period)
            inside = int(np.searchsorted(rest.t, end))
            pieces.append(rest[:inside])
            rest = rest[inside:]
            if len(rest):
                yield cycle, pieces
                cycle, pieces = cycle + BLOCK_CYCLES, []


def is_weak(strong: Array | None, before: Array | None, after: Array, correlation: float) -> bool:
    """Whether a block `after` shows too small a step of light to be compared with the last `strong` one.

    One that is unlike it, and like the block `before`, shows another place of the board, however weakly.
    """
    if strong is None or before is None or correlation > ALIKE:
        return False
    if correlation < UNLIKE and compare(before, after)[0] > ALIKE:
        return False
    return bool(np.abs(after).sum(dtype=float) < WEAK_PART * np.abs(strong).sum(dtype=float))


def describe_blocks(
    recording: Recording, blink: Blink, shape: tuple[int, int], several_steps: bool = False
) -> list[Block]:
    """Fold the whole recording block by block; `several_steps` of light let weak blocks be passed over."""
    blocks: list[Block] = []
    strong, before, since = None, None, 0
    for cycle, pieces in cycle_blocks(recording, blink):
        planes = np.zeros((4, *shape), np.uint16)
        for events in pieces:
            add_events(events, blink, planes)
        amplitude = signed_amplitude(planes, BLOCK_CYCLES)
        active = int(np.count_nonzero(np.abs(amplitude) >= ACTIVE_EVENTS))
        # A pixel that fires without pause must not outweigh the board.
        smooth = gaussian_filter(np.clip(amplitude, -4.0, 4.0), SMOOTH_PX)
        correlation, shift = compare(strong, smooth)
        near = several_steps and (cycle - since) * blink.period_ns < 1e9 * WEAK_S
        weak = near and is_weak(strong, before, smooth, correlation)
        if weak:
            shift = np.zeros(2)
        elif several_steps and strong is not None:
            # Steps of light differ: what is left of their ratio would look like motion.
            ratio = float(np.sum(smooth * strong, dtype=float) / max(np.sum(smooth * smooth, dtype=float), 1e-12))
            shift = translation_px(strong, ratio * smooth)
        blocks.append(Block(cycle, active, correlation, shift, weak))
        before = smooth
        if not weak:
            strong, since = smooth, cycle
    return blocks


def least_correlation(blocks: list[Block], least_active: int, options: ViewOptions) -> float:
    """What joins a block to a run, above what options ask where views are usually more alike."""
    strong = [b.correlation for b in blocks if b.active >= least_active and b.correlation > options.correlation]
    usual = float(np.median(strong)) if strong else 1.0
    # A block in which one view ends and the next begins correlates with both, but less than within a view.
    return max(options.correlation, usual - max(0.08, 4.0 * (1.0 - usual)))


def still_runs(blocks: list[Block], least_active: int, options: ViewOptions) -> list[tuple[int, int]]:
    """Runs [first, last) of blocks that hold still; a block joins the run of the one before it."""
    least = least_correlation(blocks, least_active, options)
    runs, first, last = [], None, 0
    for k, block in enumerate(blocks):
        if block.weak:
            continue
        joined = (
            block.active >= least_active
            and block.correlation >= least
            and float(np.hypot(*block.shift_px)) <= options.sway_per_block_px
        )
        if first is not None and not joined:
            runs.append((first, last))
            first = None
        if first is None and block.active >= least_active:
            first = k
        last = k + 1
    if first is not None:
        runs.append((first, last))
    return runs


def path_sway_px(path: Array) -> float:
    """Largest extent of a path (N, 2) over its two axes."""
    return float(np.hypot(*np.ptp(path, axis=0)))


def stillest_part(path: Array, length: int, sway_px: float) -> tuple[int, int]:
    """The longest part [first, last) of a path within `sway_px`, or the stillest of `length` where none is that
    still.
    """
    best, best_key = (0, len(path)), (-1, -np.inf)
    for first in range(len(path) - length + 1):
        for last in range(first + length, len(path) + 1):
            sway = path_sway_px(path[first:last])
            key = (last - first, -sway) if sway <= sway_px else (0, -sway)
            if key > best_key:
                best, best_key = (first, last), key
            if sway > sway_px and last > first + length:
                break
    return best


def view_of_run(blocks: list[Block], run: tuple[int, int], blink: Blink, options: ViewOptions) -> View | None:
    """The usable part of a run, or None where it is too short."""
    first, last = run
    block_s = BLOCK_CYCLES / blink.hz
    if last - first >= 6:  # the outermost blocks may hold the end of a transit
        first, last = first + 1, last - 1
    if (last - first) * block_s < options.shortest_s:
        return None
    path = np.cumsum([np.zeros(2)] + [b.shift_px for b in blocks[first + 1 : last]], axis=0)
    sway, is_part = path_sway_px(path), False
    length = max(2, int(np.ceil(options.stillest_s / block_s)))
    if sway > options.sway_px and len(path) > length:
        part = stillest_part(path, length, options.sway_px)
        sway, is_part = path_sway_px(path[part[0] : part[1]]), part[1] - part[0] < len(path)
        first, last = first + part[0], first + part[1]
    cycles = np.array([blocks[first].cycle, blocks[last - 1].cycle + BLOCK_CYCLES])
    t0_ns, t1_ns = blink.epoch_ns + np.rint((cycles - blink.epoch_phase - blink.fold_lead) * blink.period_ns).astype(
        np.int64
    )
    return View(int(t0_ns), int(t1_ns), sway, is_part)


def find_views(
    recording: Recording,
    blink: Blink,
    shape: tuple[int, int],
    options: ViewOptions | None = None,
    several_steps: bool = False,
) -> tuple[list[View], list[str]]:
    """Views in order of time, and findings; `several_steps`: whether the target blinks by steps of several sizes.

    Raises BoardNotFoundError where nothing that blinks ever holds still.
    """
    options = options or ViewOptions()
    blocks = describe_blocks(recording, blink, shape, several_steps)
    least_active = max(30, int(ACTIVE_SHARE * shape[0] * shape[1]))
    views = [view_of_run(blocks, run, blink, options) for run in still_runs(blocks, least_active, options)]
    kept = [view for view in views if view is not None]
    if not kept:
        most = max((block.active for block in blocks), default=0)
        raise BoardNotFoundError(
            f"a board that blinks at {blink.hz:.2f} Hz and holds still for {options.shortest_s:g} s is required; "
            f"at most {most} of {shape[0] * shape[1]} event pixels blink at a time and no pattern of them holds still"
        )
    parts = [view for view in kept if view.is_part]
    findings = []
    if parts:
        findings.append(
            f"{len(parts)} of {len(kept)} views sway by more than {options.sway_px:g} event px; only the stillest part "
            f"of each is used (largest sway left {max(view.sway_px for view in parts):.2f} event px)"
        )
    return kept, findings


def fold_view(
    recording: Recording, view: View, blink: Blink, shape: tuple[int, int], cycles: int | None = None
) -> ViewFold:
    """Events of one view by pixel, polarity and half of the cycle; `cycles`: how many it has, if not all of its
    time."""
    planes = np.zeros((4, *shape), np.uint32)
    for events in recording.event_blocks(view.t0_ns, view.t1_ns, check_order=False):
        add_events(events, blink, planes)
    return ViewFold(planes, cycles or max(1, round((view.t1_ns - view.t0_ns) / blink.period_ns)))
