"""Which step of light each cycle of a target with several `levels` played, found from events and frames.

The target says which sizes there are, and neither their order nor when they change. Events give a first guess: the
more a cycle lets loose, the larger its step. Frames then say: under known clocks a row's signal is

    s = a + b sum_c strength_c f_c,      f_c = share of the row's exposure that falls on the bright part of cycle c,

linear in the strengths, a and b being projected out as for the clocks. Strengths gather
around as many values as there are steps. All are in parts of the strongest step of their view; how large that one was
the pictures of the view show.
"""

from collections.abc import Iterator
from dataclasses import dataclass

import numpy as np

from hybridtrack.calibration.blink import Blink
from hybridtrack.calibration.clocks import ClockModel, Clocks, project
from hybridtrack.calibration.kernels import count_by_cycle
from hybridtrack.calibration.onset import blinking_pixels
from hybridtrack.calibration.square_wave import CycleStrengths, edge_integral
from hybridtrack.calibration.views import View, fold_view
from hybridtrack.errors import DegenerateDataError
from hybridtrack.module import Target
from hybridtrack.recording import Events, Recording

Array = np.ndarray

STRONG_PART = 0.8  # of a view's largest count of events a cycle: cycles that play the strongest step
STRONG_GUESS, SEEN_WHOLE = 0.7, 0.2
ROUNDS = 40
TIGHT = 1e-4
KNOWN, LEAST_TOLD = 0.05, 0.6
SEVERAL = 0.12  # spread of the strengths by events above which one step of light cannot be all
LEAST_GROUP = 0.12  # of the commonest step's cycles
LEAST_GAP, GAP_PART, GAP_SIGMA = 0.004, 0.04, 8.0


@dataclass(frozen=True, eq=False)
class LightSteps:
    """`first`: the number of the first cycle; `step` (C,): which step each plays, 0 the strongest, -1 unknown;
    `strength` (S,) of the steps in parts of the strongest, falling, with `sigma` (S,); `strengths` of all cycles."""

    first: int
    step: Array
    strength: Array
    sigma: Array
    strengths: CycleStrengths


def has_several_steps(target: Target) -> bool:
    """Whether the target blinks by steps of several sizes."""
    return len(set(target.levels or ())) > 1


def view_cycles(view: View, blink: Blink) -> tuple[int, int]:
    """First whole cycle in a view, and the first one after its last."""
    return int(np.ceil(float(blink.phase(view.t0_ns)) - 0.25)), int(np.floor(float(blink.phase(view.t1_ns)) + 0.05))


def events_of_cycles(recording: Recording, view: View, blink: Blink, shape: tuple[int, int]) -> tuple[int, Array]:
    """First cycle of a view, and the events that its blinking pixels let loose in each (C,)."""
    fold = fold_view(recording, view, blink, shape)
    sign = blinking_pixels(fold).astype(np.int8) - blinking_pixels(fold, -1).astype(np.int8)
    first, end = view_cycles(view, blink)
    counts = np.zeros(max(end - first, 1), np.int64)
    phase = blink.epoch_phase + blink.fold_lead
    for events in recording.event_blocks(view.t0_ns, view.t1_ns, check_order=False):
        columns = events.t, events.x, events.y, events.on
        count_by_cycle(*columns, blink.epoch_ns, phase, blink.hz, blink.duty, sign, first, counts)
    return first, np.maximum(counts, 0)


def guessed_strengths(counts: Array, largest_step: float) -> Array:
    """Strengths (C,) from events a cycle (C,), counts taken as proportional to the log step."""
    part = counts / max(float(np.quantile(counts, 0.95)), 1.0)
    return np.expm1(np.minimum(part, 1.0) * largest_step) / float(np.expm1(largest_step))


def first_guess(
    recording: Recording, views: list[View], blink: Blink, target: Target, shape: tuple[int, int]
) -> tuple[CycleStrengths, Array]:
    """Strengths of all cycles by their events, and which cycles play the strongest step of their view (C,)."""
    first, end = view_cycles(views[0], blink)[0], view_cycles(views[-1], blink)[1]
    values, strong = np.zeros(max(end - first, 1)), np.zeros(max(end - first, 1), bool)
    for view in views:
        start, counts = events_of_cycles(recording, view, blink, shape)
        inside = slice(start - first, start - first + len(counts))
        values[inside] = guessed_strengths(counts, max(target.levels or [1.0]))
        strong[inside] = counts > STRONG_PART * np.quantile(counts, 0.95)
    return CycleStrengths(first, values), strong


class ChosenCycles(Recording):
    """A recording that only has the events of chosen cycles."""

    def __init__(self, recording: Recording, blink: Blink, first: int, chosen: Array) -> None:
        """`chosen` (C,) of the cycles from `first` on."""
        self.__dict__.update(recording.__dict__)
        self._blink, self._first, self._chosen = blink, first, chosen

    def count_in(self, view: View) -> int:
        """How many chosen cycles a view has."""
        first, end = view_cycles(view, self._blink)
        return int(np.count_nonzero(self._chosen[max(first - self._first, 0) : max(end - self._first, 0)]))

    def event_blocks(
        self, t0_ns: int | None = None, t1_ns: int | None = None, size: int = 1 << 20, check_order: bool = True
    ) -> Iterator[Events]:
        """As of the whole recording, all other events left out."""
        for events in super().event_blocks(t0_ns, t1_ns, size, check_order):
            cycle = np.floor(self._blink.phase(events.t) + self._blink.fold_lead).astype(np.int64) - self._first
            inside = (cycle >= 0) & (cycle < len(self._chosen))
            yield events[inside & self._chosen[np.where(inside, cycle, 0)]]


def cycle_shares(model: ClockModel, clocks: Clocks, first: int, count: int) -> Array:
    """f_c (R, N, count): share of each exposure on the bright part of whole cycles from `first` on."""
    begin, length = model.exposure_cycles(clocks)
    wave = model.waveform(clocks)
    cycle = first + np.arange(count)

    def bright_until(x: Array) -> Array:
        since = x[..., None] - cycle
        return edge_integral(since, wave.rise) - edge_integral(since - wave.duty, wave.fall)

    return (bright_until(begin + length) - bright_until(begin)) / length[..., None]


def scale_of(found: Array, guess: Array, information: Array) -> float:
    """The strength (of C) to be called one: that of cycles which events take for the strongest and frames see whole."""
    strongest = (guess > STRONG_GUESS) & (information > SEEN_WHOLE * information.max())
    scale = float(np.median(found[strongest])) if np.any(strongest) else float(np.max(found))
    return max(scale, 1e-9)


def strengths_of_view(model: ClockModel, clocks: Clocks, first: int, guess: Array) -> tuple[Array, Array]:
    """Strengths (C,) and deviations (C,) of one view's cycles, whose rows are those of `model`, from a guess (C,)."""
    rows = model.rows
    share, weight = cycle_shares(model, clocks, first, len(guess)), rows.weight**2
    total = np.maximum(weight.sum(axis=1), 1e-300)[:, None, None]
    share = share - np.sum(share * weight[..., None], axis=1, keepdims=True) / total
    eye, strongest = np.eye(len(guess)), (guess > STRONG_GUESS * guess.max()).astype(float)

    def left_of(strength: Array) -> tuple[Array, Array, Array]:
        gain, residual, centred = project(rows, share @ strength)
        return gain, (residual * rows.weight).ravel(), centred

    def sensitivity(gain: Array, centred: Array) -> Array:
        """Of the residuals (R N, C): what a and b take up of a change of strengths is taken off (Kaufman 1975)."""
        along = np.einsum("rn,rn,rnc->rc", weight, centred, share)
        spread = np.maximum(np.sum(weight * centred**2, axis=1), 1e-300)
        design = share - (along / spread[:, None])[:, None, :] * centred[..., None]
        return (design * (gain * rows.weight)[..., None]).reshape(-1, len(guess))

    strength, damping = guess / scale_of(guess, guess, np.ones(len(guess))), 1e-3
    gain, left, centred = left_of(strength)
    for _ in range(ROUNDS):
        design = sensitivity(gain, centred)
        normal = design.T @ design
        largest = float(np.max(np.diag(normal)))
        # All strengths times a factor is the same signal: the mean of the strongest is held, and what no frame saw.
        normal += largest * np.outer(strongest, strongest) + 1e-6 * largest * eye
        size = np.diag(normal)
        found = np.maximum(strength + np.linalg.solve(normal + damping * size * eye, design.T @ left), 0.0)
        after = left_of(found)
        if after[1] @ after[1] >= left @ left:
            damping *= 8.0
            if damping > 1e4:
                break
            continue
        found = found / scale_of(found, guess, np.diag(normal))
        change, strength = float(np.max(np.abs(found - strength))), found
        gain, left, centred = left_of(strength)
        damping = max(damping / 5.0, 1e-6)
        if change < TIGHT:
            break
    freedom = int(np.count_nonzero(rows.weight)) - 2 * len(rows.row) - len(guess)
    variance = float(left @ left) / max(freedom, 1)
    return strength, np.sqrt(variance * np.diag(np.linalg.inv(normal)))


def gathered(values: Array, sigma: Array) -> list[Array]:
    """Indices of values that belong together, groups in falling order: a gap beyond noise and 4 % parts two."""
    order = np.argsort(values)[::-1]
    ranked = values[order]
    gap = np.maximum(GAP_SIGMA * float(np.median(sigma)), np.maximum(GAP_PART * np.abs(ranked[1:]), LEAST_GAP))
    cuts = np.flatnonzero(ranked[:-1] - ranked[1:] > gap) + 1
    return np.split(order, cuts)


def merged(groups: list[Array], values: Array, most: int) -> list[Array]:
    """Groups, falling in strength, joined with their nearest neighbour until no more than `most` are left."""
    groups = list(groups)
    while len(groups) > most:
        middle = np.log(np.maximum([np.median(values[group]) for group in groups], 1e-4))
        near = int(np.argmin(middle[:-1] - middle[1:]))
        groups[near : near + 2] = [np.concatenate(groups[near : near + 2])]
    return groups


def require_steps_of_events(groups: list[Array], guess: Array, within: Array) -> None:
    """Raise DegenerateDataError where frames tell too few of the cycles `within` views, or one step (`groups` of
    cycles) where events plainly show several."""
    share = sum(len(group) for group in groups) / max(len(within), 1)
    spread = float(np.std(guess[within]))
    if share < LEAST_TOLD or (len(groups) == 1 and spread > SEVERAL):
        raise DegenerateDataError(
            "the steps of light of a target with several levels must show in the frames as in the events: frames tell "
            f"{len(groups)} of them in {100 * share:.0f} % of the cycles, where {100 * LEAST_TOLD:.0f} % are required, "
            f"and by events cycles differ by {100 * spread:.0f} % of the largest; a longer exposure shows more cycles"
        )


def find_light_steps(
    model: ClockModel, clocks: Clocks, guess: CycleStrengths, views: list[View], target: Target
) -> LightSteps:
    """Strengths of all cycles by the frames, gathered into no more steps than the target has.

    `model.rows` are those of `views`, numbered by their place in the list. Raises DegenerateDataError where the frames
    do not resolve them.
    """
    first, values, sigma = guess.first, guess.values.copy(), np.full(len(guess.values), np.inf)
    known: list[Array] = []
    within: list[Array] = []
    for k in np.unique(model.rows.view):
        own = ClockModel(model.rows[model.rows.view == k], model.blink, model.rise, model.fall, model.drift_epoch_ns)
        start, end = view_cycles(views[int(k)], model.blink)
        inside = np.arange(max(start - first, 0), min(end - first, len(values)))
        values[inside], sigma[inside] = strengths_of_view(own, clocks, start, guess.values[inside])
        known.append(inside[sigma[inside] < KNOWN])
        within.append(inside)
    cycles = np.concatenate(known) if known else np.zeros(0, int)
    if not len(cycles):
        raise DegenerateDataError(
            "the steps of light of a target with several levels must show in the frames, and no cycle's does to 5 %"
        )
    groups = [cycles[group] for group in gathered(values[cycles], sigma[cycles])]
    # The outermost cycle of a view may lie in no frame as a whole, and then passes for a step of its own.
    most = max(len(group) for group in groups)
    groups = [group for group in groups if len(group) >= max(3, LEAST_GROUP * most)]
    groups = merged(groups, values, len(set(target.levels or [1.0])))
    require_steps_of_events(groups, guess.values, np.concatenate(within))
    step = np.full(len(values), -1)
    strength, deviation = np.zeros(len(groups)), np.zeros(len(groups))
    for number, group in enumerate(groups):
        step[group] = number
        strength[number] = np.median(values[group])
        deviation[number] = np.std(values[group]) / np.sqrt(len(group))
        values[group] = strength[number]
    # What frames do not tell of a cycle is taken for the step that its events come nearest to.
    unknown = np.flatnonzero(step < 0)
    nearest = np.abs(guess.values[unknown, None] - strength / strength[0]).argmin(axis=1)
    values[unknown] = strength[nearest]
    values, scale = values / strength[0], strength[0]
    return LightSteps(first, step, strength / scale, deviation / scale, CycleStrengths(first, values))
