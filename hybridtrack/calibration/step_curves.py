"""What every event pixel made of every step of light of a target with several levels, and the curves over all
pixels."""

from dataclasses import dataclass, replace

import numpy as np

from hybridtrack.calibration.blink import Blink
from hybridtrack.calibration.event_light import EventSteps
from hybridtrack.calibration.kernels import count_flips
from hybridtrack.calibration.light_steps import LightSteps, view_cycles
from hybridtrack.calibration.views import View
from hybridtrack.recording import Recording

Array = np.ndarray

LEAST_SWING = 0.3
OBSERVED = ("pixel", "view", "swing", "answers", "counts")
EDGE_PX = 2.0  # colour px from a square's edge


@dataclass(frozen=True, eq=False)
class StepAnswers:
    """Answers of M observations, one a pixel and view, to S steps of light (0 the strongest).

    `pixel` (M,) flat index, `view` (M,); `swing` (M,): step of light over dark light of the strongest step; `flips`
    (V, S) of each view; `answers` (M, S, 2, 3): ON and OFF events, flips with any, sums of squared counts. `start`,
    `length` (V,): where the views' cycles lie in `strength` and `step` (C,), step -1 unknown; `step_strength` (S,);
    `counts` (M, C, 2) uint8: ON and OFF events of every flip of the observation's view.
    """

    pixel: Array
    view: Array
    swing: Array
    flips: Array
    answers: Array
    start: Array
    length: Array
    strength: Array
    step: Array
    step_strength: Array
    counts: Array

    def of(self, chosen: Array) -> "StepAnswers":
        """The observations selected by a mask or index array."""
        return replace(self, **{name: getattr(self, name)[chosen] for name in OBSERVED})

    @property
    def log_step(self) -> Array:
        """Natural log of light after over light before (M, S)."""
        return np.log1p(self.swing[:, None] * self.step_strength)


@dataclass(frozen=True, eq=False)
class StepCurves:
    """Means over all observations, by step of light (S,) and polarity: `count` of events, share of flips that `fired`,
    `scatter`: variance of the count from flip to flip; all (S, 2), with their deviations from view to view."""

    log_step: Array
    count: Array
    fired: Array
    scatter: Array
    count_sigma: Array
    fired_sigma: Array
    scatter_sigma: Array


def flips_of_view(
    recording: Recording, blink: Blink, view: View, cycles: tuple[int, int], shape: tuple[int, int]
) -> Array:
    """Events (C, 2, rows, columns) uint8 of all pixels at the flips of whole `cycles` (first, end) of a view."""
    out = np.zeros((max(cycles[1] - cycles[0], 0), 2, *shape), np.uint8)
    phase = blink.epoch_phase + blink.fold_lead
    for events in recording.event_blocks(view.t0_ns, view.t1_ns, check_order=False):
        columns = events.t, events.x, events.y, events.on
        count_flips(*columns, blink.epoch_ns, phase, blink.hz, blink.duty, cycles[0], out)
    return out


def answers_of_flips(counts: Array, step: Array, steps: int) -> Array:
    """Answers (M, S, 2, 3) from the counts (M, C, 2) of flips whose cycles played `step` (C,)."""
    out = np.zeros((len(counts), steps, 2, 3), np.int32)
    for number in range(steps):
        own = counts[:, step == number].astype(np.int32)
        out[:, number] = np.stack([own.sum(axis=1), (own > 0).sum(axis=1), (own**2).sum(axis=1)], axis=-1)
    return out


def steps_inside(light: EventSteps) -> Array:
    """Log step (rows, columns) of pixels inside set A, NaN elsewhere: as frames show it, or nearer to an edge, but
    beyond its blur, by the light model."""
    near = np.where(light.hits.margin_px > EDGE_PX, light.edge_step, np.nan)
    known = np.where(np.isfinite(light.log_step), light.log_step, near)
    return np.where(light.hits.kind == 1, known, np.nan)


def step_answers(
    recording: Recording, views: list[View], blink: Blink, steps: LightSteps, seen: list[EventSteps], healthy: Array
) -> StepAnswers:
    """Answers of all `healthy` (rows, columns) pixels well inside set A of the views, whose light is `seen`."""
    parts, flips, start, length = [], [], [], []
    for number, (view, light) in enumerate(zip(views, seen, strict=True)):
        first, end = view_cycles(view, blink)
        first, end = max(first, steps.first), min(end, steps.first + len(steps.step))
        start.append(first - steps.first)
        length.append(max(end - first, 0))
        own = steps.step[start[-1] : start[-1] + length[-1]]
        flips.append(np.bincount(own[own >= 0], minlength=len(steps.strength)))
        log_step = steps_inside(light)
        with np.errstate(invalid="ignore"):
            known = healthy & (log_step > LEAST_SWING)
        counts = np.moveaxis(flips_of_view(recording, blink, view, (first, end), healthy.shape)[..., known], -1, 0)
        swing = np.expm1(log_step[known])
        answers = answers_of_flips(counts, own, len(steps.strength))
        parts.append((np.flatnonzero(known.ravel()), np.full(len(swing), number), swing, answers, counts))
    longest = max(length)
    padded = [np.pad(part[4], ((0, 0), (0, longest - part[4].shape[1]), (0, 0))) for part in parts]
    pixel, view_of, swing, answers = (np.concatenate([part[k] for part in parts]) for k in range(4))
    where = np.array(start), np.array(length), steps.strengths.values, steps.step
    return StepAnswers(pixel, view_of, swing, np.array(flips), answers, *where, steps.strength, np.concatenate(padded))


def view_curves(answers: Array, flips: Array) -> Array:
    """Count, fired share and scatter (3, S, 2) of one view's answers (M, S, 2, 3), over `flips` (S,); NaN without."""
    n = np.where(flips > 0, flips, np.nan)[:, None]
    events, fired, squares = np.moveaxis(answers.astype(float), -1, 0)
    mean = events / n
    with np.errstate(invalid="ignore", divide="ignore"):
        scatter = (squares / n - mean**2) * n / np.where(n > 1, n - 1.0, np.nan)
    return np.stack([mean.mean(axis=0), (fired / n).mean(axis=0), scatter.mean(axis=0)])


def curves(data: StepAnswers, answers: Array | None = None) -> StepCurves:
    """Curves of `data`, or of other `answers` (M, S, 2, 3) to the same light."""
    answers = data.answers if answers is None else answers
    views = [v for v in np.unique(data.view)]
    each = np.array([view_curves(answers[data.view == v], data.flips[v]) for v in views])
    weight = np.array([np.count_nonzero(data.view == v) for v in views])[:, None, None, None] * np.isfinite(each)
    total = np.maximum(weight.sum(axis=0), 1e-9)
    mean = np.nansum(weight * np.nan_to_num(each), axis=0) / total
    spread = np.sum(weight * (np.nan_to_num(each) - mean) ** 2, axis=0) / total
    sigma = np.sqrt(spread / np.maximum(np.count_nonzero(weight > 0, axis=0) - 1, 1))
    return StepCurves(data.log_step.mean(axis=0), *mean, *sigma)
