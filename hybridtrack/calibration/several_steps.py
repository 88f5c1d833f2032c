"""Thresholds, their maps and the comparator's noise from a target with several steps of light."""

from dataclasses import dataclass, replace

import numpy as np

from hybridtrack.calibration.blink import Blink
from hybridtrack.calibration.comparator_fit import Comparator, ComparatorFit, fit_comparator
from hybridtrack.calibration.contrast import ThresholdFit
from hybridtrack.calibration.event_light import EventSteps
from hybridtrack.calibration.light_steps import LightSteps
from hybridtrack.calibration.settling import Settling
from hybridtrack.calibration.step_curves import StepAnswers, step_answers
from hybridtrack.calibration.threshold_maps import ThresholdMaps, threshold_maps
from hybridtrack.calibration.views import View
from hybridtrack.module import Target
from hybridtrack.recording import Recording

Array = np.ndarray

LEAST_OBSERVATIONS = 300
USUAL = (0.3, 0.04, 0.05)  # threshold, relative spread and relative noise to start from where nothing is known
KNOWN = 0.42  # a pixel's own threshold counts as known below this part of the spread from pixel to pixel
SHORTEST_NS = 1e3
UNLIKE = 3.0  # chi-square over freedom beyond which no model follows the curves
STEP_DOUBT = 0.05  # log units between a step as stated and as measured that are worth a sentence
SIMILAR_MODELS = 9.0
HOPELESS = 8.0  # chi-square over freedom beyond which the curves are of something else
BLACK_DN = 0.1  # what the black level may be off by
# Relative deviation of thresholds that more data do not lower. Where events are lost in the dead time, lag and dead
# time make up for one another and for thresholds.
METHOD = {"steps": 0.005, "leaps": 0.01, "resets": 0.015}
NOISE_DOUBT = 0.5  # of the noise: its deviation beyond which it is not given


@dataclass(frozen=True, eq=False)
class SeveralSteps:
    """What the steps tell: `answers` of all pixels, the `fit` of their curves, and `maps`."""

    answers: StepAnswers
    fit: ComparatorFit
    maps: ThresholdMaps

    @property
    def known(self) -> Array:
        """Mask (rows, columns) of pixels whose own thresholds are known well against the spread."""
        comparator, maps = self.fit.comparator, self.maps
        with np.errstate(invalid="ignore"):
            return (maps.on_sigma < KNOWN * maps.spread[0] * comparator.on) & (
                maps.off_sigma < KNOWN * maps.spread[1] * comparator.off
            )


@dataclass(frozen=True)
class StepsSeen:
    """What the fit rests on: the `recording` with all its cycles, `views` with the `light` at their event pixels, the
    blink clock, which step each cycle played, and the mask (rows, columns) of `healthy` pixels."""

    recording: Recording
    views: list[View]
    light: list[EventSteps]
    blink: Blink
    steps: LightSteps
    healthy: Array


def start_of(fit: ThresholdFit, settling: Settling, dead_ns: float) -> Comparator:
    """First values from what the strongest step alone told."""
    on, off = fit.on or USUAL[0], fit.off or USUAL[0]
    spreads = ((fit.on_spread or 0.0) / on or USUAL[1], (fit.off_spread or 0.0) / off or USUAL[1])
    noise, dead_ns = USUAL[2] * 0.5 * (on + off), max(dead_ns, SHORTEST_NS)
    return Comparator(on, off, *spreads, noise, settling.tau_off_ns or 0.0, dead_ns, "steps")


def step_findings(target: Target, seen: StepAnswers, several: SeveralSteps) -> list[str]:
    """Sentences on the steps, the pixel's model and the maps."""
    fit, measured = several.fit, np.sort(np.median(seen.log_step, axis=0))
    stated = np.sort(np.unique(target.levels or []))
    steps = ", ".join(f"{step:.3f}" for step in measured)
    findings = [f"steps of light of {steps} (natural log) were found in the frames, {len(measured)} of {len(stated)}"]
    if len(measured) == len(stated) and np.max(np.abs(measured - stated)) > STEP_DOUBT:
        findings.append(
            "they are not those that the target file states: the measured ones count (look at the black level, and at "
            "light that is not the target's)"
        )
    ratio = fit.chi_square / max(fit.freedom, 1)
    if ratio > UNLIKE:
        findings.append(
            f"no model of the pixel follows its counts over the steps closely (chi-square {ratio:.1f} a number): "
            "thresholds carry a deviation widened by that"
        )
    close = [name for name, other in fit.others.items() if other < fit.chi_square + SIMILAR_MODELS]
    if close:
        findings.append(
            f"the reference's model '{fit.comparator.model}' was taken, and {' and '.join(close)} fits as well"
        )
    findings.append(
        f"thresholds of single pixels are known to better than {KNOWN:g} of their spread on "
        f"{100 * float(np.mean(several.known)):.0f} % of the event grid, and drawn towards the median elsewhere"
    )
    return findings


def shared_deviation(seen: StepsSeen, data: StepAnswers, model: str) -> float:
    """Relative deviation that all thresholds share: of the method, and of steps measured over an uncertain black
    level."""
    dark_dn = float(np.median(np.concatenate([light.dark_dn[np.isfinite(light.log_step)] for light in seen.light])))
    log_step = float(np.log1p(np.median(data.swing)))
    return float(np.hypot(METHOD[model], BLACK_DN / max(dark_dn, BLACK_DN) / log_step))


def thresholds_from_steps(
    seen: StepsSeen, target: Target, first: ThresholdFit, settling: Settling, dead_ns: float
) -> ThresholdFit:
    """`first`, what the strongest step alone told, bettered by all steps.

    Returned as it is, with a finding, where too few pixels saw the steps.
    """
    data = step_answers(seen.recording, seen.views, seen.blink, seen.steps, seen.light, seen.healthy)
    if len(data.swing) < LEAST_OBSERVATIONS or len(data.step_strength) < 2:
        reason = (
            f"thresholds rest on one step of light: {LEAST_OBSERVATIONS} pixels that saw two are required, got "
            f"{len(data.swing)} that saw {len(data.step_strength)}"
        )
        return replace(first, findings=[*first.findings, reason])
    period, duty = seen.blink.period_ns, seen.blink.duty
    halves_ns = duty * period, (1.0 - duty) * period
    fit = fit_comparator(data, start_of(first, settling, dead_ns), halves_ns)
    if fit.chi_square > HOPELESS * fit.freedom:
        reason = (
            f"thresholds rest on the largest step of light alone: no model of the pixel makes of the others what these "
            f"pixels make of them (chi-square {fit.chi_square / fit.freedom:.0f} a number)"
        )
        return replace(first, findings=[*first.findings, reason])
    maps = threshold_maps(data, fit, halves_ns, seen.healthy.shape)
    several = SeveralSteps(data, fit, maps)
    comparator = fit.comparator
    noise_sigma, shared = fit.sigma("noise"), shared_deviation(seen, data, fit.comparator.model)
    noise = (comparator.noise, noise_sigma) if noise_sigma < NOISE_DOUBT * comparator.noise else None
    return replace(
        first,
        on=comparator.on,
        off=comparator.off,
        on_sigma=float(np.hypot(fit.sigma("on"), shared * comparator.on)),
        off_sigma=float(np.hypot(fit.sigma("off"), shared * comparator.off)),
        on_spread=float(maps.spread[0] * comparator.on),
        off_spread=float(maps.spread[1] * comparator.off),
        on_map=maps.on,
        off_map=maps.off,
        model=comparator.model,
        findings=step_findings(target, data, several),
        noise=noise,
        several=several,
    )
