"""Thresholds, noise and the pixel's model from steps of several sizes, by playing the steps to model pixels.

Mean counts alone leave open what a reference does after an event; over steps of several sizes three curves do not:
the mean count, the share of flips with any event (the S-curve), and how much a pixel's count varies from flip to
flip. Model pixels (`comparator_kernels`) are played the light that real ones saw, flip after flip, and the medians of
their thresholds, the comparator's noise and, where events are lost in the dead time, that time and the
photoreceptor's lag are varied until their curves are those of the recording (indirect inference; Gourieroux, Monfort
and Renault 1993). The same random numbers in every round make that a smooth problem. The model whose curves fit best
is taken.
"""

from dataclasses import dataclass, replace
from typing import Any

import numpy as np

from hybridtrack.calibration.comparator_kernels import LEAPS, RESETS, STEPS, play_steps
from hybridtrack.calibration.step_curves import StepAnswers, StepCurves, curves

Array = np.ndarray

MODELS = {"steps": STEPS, "leaps": LEAPS, "resets": RESETS}
PLAYED_FIRST, PLAYED = 800, 4000  # observations played in a round to choose the model, and to fit it
ROUNDS = 12
STARTING_LAGS_NS, LAG_PARTS, DEAD_PARTS = (0.1e6, 0.4e6, 1.5e6), (1.0, 1.25), (0.8, 1.0)
# What curves of model pixels are trusted to, relative and absolute.
COUNT_FLOOR, FIRED_FLOOR, SCATTER_FLOOR = (0.005, 0.005), 0.005, (0.05, 0.005)
OUTLIER = 3.0


@dataclass(frozen=True)
class Comparator:
    """Medians of the thresholds, their relative spreads, the noise (natural log units), the photoreceptor's lag in dark
    light in ns (0: at once), the dead time after an event in ns, and the reference's model."""

    on: float
    off: float
    on_spread: float
    off_spread: float
    noise: float
    tau_dark_ns: float
    dead_ns: float
    model: str

    def moved_to(self, values: dict[str, float]) -> "Comparator":
        """This comparator with some of its numbers changed."""
        changes: dict[str, Any] = dict(values)
        return replace(self, **changes)


@dataclass(frozen=True, eq=False)
class ComparatorFit:
    """The best `comparator`; `covariance` of the natural logs of `free` parameters; the curves `seen` and `played`;
    `chi_square` over `freedom`, and that of each other model."""

    comparator: Comparator
    free: tuple[str, ...]
    covariance: Array
    seen: StepCurves
    played: StepCurves
    chi_square: float
    freedom: int
    others: dict[str, float]

    def sigma(self, name: str) -> float:
        """Deviation of a free parameter."""
        at = self.free.index(name)
        return float(np.sqrt(self.covariance[at, at])) * getattr(self.comparator, name)


def play(data: StepAnswers, comparator: Comparator, halves_ns: tuple[float, float], seed: int = 7) -> Array:
    """Answers (M, S, 2, 3) of model pixels to the light of `data`, thresholds drawn anew for every observation."""
    random = np.random.default_rng(seed)
    factors = np.exp(random.standard_normal((2, len(data.swing))) * [[comparator.on_spread], [comparator.off_spread]])
    return play_thresholds(data, comparator.on * factors[0], comparator.off * factors[1], comparator, halves_ns, seed)


def play_thresholds(
    data: StepAnswers, on: Array, off: Array, comparator: Comparator, halves_ns: tuple[float, float], seed: int = 7
) -> Array:
    """As `play`, for given thresholds (M,) of the observations; `halves_ns`: bright and dark part of a cycle."""
    out = np.zeros((len(data.swing), len(data.step_strength), 2, 3))
    play_steps(
        data.swing,
        data.view,
        data.start,
        data.length,
        data.strength,
        data.step,
        on,
        off,
        comparator.noise,
        MODELS[comparator.model],
        comparator.dead_ns,
        comparator.tau_dark_ns,
        np.array(halves_ns),
        seed,
        out,
    )
    return out


def residuals(seen: StepCurves, played: StepCurves) -> Array:
    """Differences of the curves in their deviations, those of the views and what the models are trusted to."""
    parts = [
        (played.count - seen.count) / np.hypot(seen.count_sigma, COUNT_FLOOR[0] * seen.count + COUNT_FLOOR[1]),
        (played.fired - seen.fired) / np.hypot(seen.fired_sigma, FIRED_FLOOR),
        (played.scatter - seen.scatter)
        / np.hypot(seen.scatter_sigma, SCATTER_FLOOR[0] * seen.scatter + SCATTER_FLOOR[1]),
    ]
    return np.nan_to_num(np.concatenate([part.ravel() for part in parts]))


def fit_model(data: StepAnswers, seen: StepCurves, start: Comparator, halves_ns: tuple[float, float]) -> ComparatorFit:
    """Vary one model's parameters by damped Gauss-Newton steps in their logs."""
    free = ("on", "off", "noise") + (("tau_dark_ns", "dead_ns") if start.model == "resets" else ())
    widths = np.array([0.02, 0.02, 0.15, 0.05, 0.05][: len(free)])

    def at(logs: Array) -> tuple[Comparator, StepCurves, Array]:
        comparator = start.moved_to(dict(zip(free, np.exp(logs).tolist(), strict=True)))
        played = curves(data, play(data, comparator, halves_ns))
        return comparator, played, residuals(seen, played)

    logs = np.log([getattr(start, name) for name in free])
    comparator, played, residual = at(logs)
    damping = 1e-2
    for _ in range(ROUNDS):
        moves = widths[:, None] * np.eye(len(free))
        jacobian = np.stack([(at(logs + m)[2] - at(logs - m)[2]) / (2 * m.max()) for m in moves], axis=1)
        weight = np.minimum(1.0, OUTLIER / np.maximum(np.abs(residual), 1e-9))
        normal = jacobian.T @ (weight[:, None] * jacobian)
        # A parameter that no curve feels must not stop the others.
        normal += 1e-9 * np.trace(normal) * np.eye(len(free))
        step = -np.linalg.solve(normal + damping * np.diag(np.diag(normal)), jacobian.T @ (weight * residual))
        step = np.clip(step, -0.5, 0.5)
        candidate = at(logs + step)
        if robust_cost(candidate[2]) < robust_cost(residual):
            logs, damping = logs + step, damping / 5
            comparator, played, residual = candidate
            if np.all(np.abs(step) < 0.05 * widths):
                break
        else:
            damping *= 8
            if damping > 1e3:
                break
    freedom = int(np.count_nonzero(residual)) - len(free)
    chi_square = robust_cost(residual)
    # Curves that no model follows closely say less than their scatter promises.
    inflate = max(1.0, chi_square / max(freedom, 1))
    covariance = np.linalg.inv(normal) * inflate
    return ComparatorFit(comparator, free, covariance, seen, played, chi_square, freedom, {})


def robust_cost(residual: Array) -> float:
    """Sum of squares, beyond `OUTLIER` deviations growing in proportion only (Huber 1964)."""
    size = np.abs(residual)
    return float(np.sum(np.where(size < OUTLIER, size**2, 2 * OUTLIER * size - OUTLIER**2)))


def starts(first: Comparator, model: str) -> list[Comparator]:
    """Where to start one model from: at several lags and dead times where they matter, for the fit has many valleys."""
    if model != "resets":
        return [replace(first, model=model)]
    lags = [first.tau_dark_ns * part for part in LAG_PARTS] if first.tau_dark_ns > 0 else list(STARTING_LAGS_NS)
    dead = [first.dead_ns * part for part in DEAD_PARTS]
    return [replace(first, model=model, tau_dark_ns=lag, dead_ns=time) for lag in lags for time in dead]


def fit_comparator(
    data: StepAnswers, start: Comparator, halves_ns: tuple[float, float], seed: int = 11
) -> ComparatorFit:
    """The best of all models for `data`; `start` gives first thresholds and spreads."""
    order, seen = np.random.default_rng(seed).permutation(len(data.swing)), curves(data)
    few, many = (data.of(np.sort(order[:count])) for count in (PLAYED_FIRST, PLAYED))
    fits = [fit_model(few, seen, one, halves_ns) for model in MODELS for one in starts(start, model)]
    best = min(fits, key=lambda fit: fit.chi_square)
    others: dict[str, float] = {}
    for fit in fits:
        if fit.comparator.model != best.comparator.model:
            others[fit.comparator.model] = min(fit.chi_square, others.get(fit.comparator.model, np.inf))
    return replace(fit_model(many, seen, best.comparator, halves_ns), others=others)
