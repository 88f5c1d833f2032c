"""The field check's verdict: does the map still hold, and the frame offset, or can it not be told."""

from collections.abc import Callable
from dataclasses import dataclass
from functools import partial
from typing import Any, Literal

import numpy as np
from scipy.stats import chi2, f

from hybridtrack.calibration.field_samples import (
    BLOCK_FRAMES,
    DT,
    DU,
    DV,
    GAIN,
    TAU,
    FieldBlocks,
    FieldSamples,
    FieldSetting,
    gather,
    solve,
)
from hybridtrack.errors import DegenerateDataError, NotCalibratedError
from hybridtrack.module import ContrastMap, HybridModule
from hybridtrack.recording import Recording

Array = np.ndarray
Progress = Callable[[str, float], None]
Verdict = Literal["holds", "drifted", "cannot tell"]

MAP_LIMIT_PX, CLOCK_LIMIT_US = 0.25, 2000.0  # shifts that matter, and must be ruled out for "holds"
MAP_SYSTEMATIC_PX, CLOCK_SYSTEMATIC_US = 0.03, 400.0  # errors of the method itself, one deviation
ALARM = 1e-4  # chance of an alarm on a calibration that holds, were errors normal
LEAST_SHIFT_PX = 0.1
SURE = 2.0
RELINEARISE_PX, MOST_ROUNDS = 0.2, 4
LEAST_SAMPLES, LEAST_BLOCKS = 3000, 5
MOST_BLOCKS = 24
GAIN_RANGE = (0.35, 1.7)
REFERENCE_DN = 120.0
IGNORED_SETTINGS = ("synthetic",)
MORE = "more motion in several directions over textured ground is needed"


@dataclass(frozen=True)
class Shift:
    """One thing judged: its `verdict`, and why in a sentence."""

    verdict: Verdict
    sentence: str


@dataclass(frozen=True, eq=False)
class FieldCheck:
    """`shift_px` (2,) of the map with covariance (2, 2); `clock_us`: how late events are beyond the module's offset,
    with its deviation; `gain`: change by events over change by frames; what was used;
    verdicts on `map` and `clock`, the `settings` that differ, and per stretch of time the map's shift alone (B, 2),
    for figures."""

    shift_px: Array
    covariance: Array
    clock_us: float
    clock_sigma_us: float
    gain: float
    samples: int
    frames: int
    map: Shift
    clock: Shift
    settings: list[str]
    stretch_px: Array

    @property
    def verdict(self) -> Verdict:
        """The worst of both; what cannot be told of the clock does not take away from a map that holds."""
        if "drifted" in (self.map.verdict, self.clock.verdict):
            return "drifted"
        return self.map.verdict

    @property
    def findings(self) -> list[str]:
        """All sentences."""
        return [self.map.sentence, self.clock.sentence, *self.settings]


def differing_settings(module: HybridModule, recording: Recording) -> list[str]:
    """A sentence for each setting of the recording that is not the one under which the module was calibrated."""
    then, now = module.settings or {}, recording.settings or {}
    return [
        f"setting '{name}' was {then[name]!r} when the module was calibrated and is {now[name]!r} now: what it governs "
        "may differ"
        for name in sorted(set(then) & set(now) - set(IGNORED_SETTINGS))
        if then[name] != now[name]
    ]


def setting_of(module: HybridModule, contrast_map: ContrastMap | None) -> FieldSetting:
    """Thresholds pixel by pixel. Raises NotCalibratedError where the module lacks what the check compares."""
    contrast = module.contrast
    if (
        module.colour_from_event is None
        or contrast is None
        or contrast.on_threshold is None
        or contrast.off_threshold is None
    ):
        raise NotCalibratedError(
            f"module '{module.name}': a calibrated map and both contrast thresholds are required to be checked, and "
            f"'{'colour_from_event' if module.colour_from_event is None else 'contrast'}' lacks them"
        )
    module.known_timing()
    shape = module.event_grid.shape
    on, off = np.full(shape, contrast.on_threshold), np.full(shape, contrast.off_threshold)
    if contrast_map is not None:
        on = np.where(np.isfinite(contrast_map.on_threshold), contrast_map.on_threshold, on)
        off = np.where(np.isfinite(contrast_map.off_threshold), contrast_map.off_threshold, off)
    healthy = np.ones(shape, bool)
    if module.defects is not None:
        for x, y in [*module.defects.hot, *module.defects.dead]:
            healthy[y, x] = False
    light = module.timing.reference_light_dn if module.timing is not None else None
    return FieldSetting(on, off, healthy, light or REFERENCE_DN)


def stretches(frames: int) -> Array:
    """First frames of the stretches looked at: all there are, or as many as suffice, spread over the recording."""
    firsts = np.arange(1, frames - BLOCK_FRAMES - 1, BLOCK_FRAMES)
    if len(firsts) <= MOST_BLOCKS:
        return firsts
    return firsts[np.unique(np.linspace(0, len(firsts) - 1, MOST_BLOCKS).round().astype(int))]


def freedom_of(scatter: Array, total: Array, stretches: int) -> float:
    """Degrees of freedom of a covariance (2, 2) of which `scatter` comes from so many stretches, and the rest is known
    (Satterthwaite 1946)."""
    return max((stretches - 1) * float(np.trace(total) / np.trace(scatter)) ** 2, 3.0)


def judge_map(shift: Array, covariance: Array, freedom: float = np.inf) -> Shift:
    """Whether the map holds; `freedom`: degrees of freedom of the covariance (Hotelling 1931)."""
    size = float(np.linalg.norm(shift))
    sigma = float(np.sqrt(np.linalg.eigvalsh(covariance)[-1]))
    seen = f"({shift[0]:+.3f}, {shift[1]:+.3f}) px, deviation {sigma:.3f} px"
    square = float(shift @ np.linalg.solve(covariance, shift))
    chance = chi2.sf(square, 2) if np.isinf(freedom) else f.sf(0.5 * square * (freedom - 1) / freedom, 2, freedom - 1)
    if chance < ALARM and size > LEAST_SHIFT_PX:
        return Shift("drifted", f"the map has shifted by {seen}: calibrate anew before relying on it")
    if size + SURE * sigma < MAP_LIMIT_PX:
        return Shift("holds", f"the map holds: its shift is {seen}")
    return Shift("cannot tell", f"whether the map holds cannot be told: its shift is {seen}; {MORE}")


def judge_clock(shift_us: float, sigma_us: float) -> Shift:
    """Whether the frame offset holds."""
    seen = f"events come {shift_us:+.0f} us late against it, deviation {sigma_us:.0f} us"
    if abs(shift_us) > 4.0 * sigma_us:
        return Shift("drifted", f"the frame offset has shifted ({seen}): it must be measured anew after a power cycle")
    if abs(shift_us) + SURE * sigma_us < CLOCK_LIMIT_US:
        return Shift("holds", f"the frame offset holds to a millisecond or two ({seen}); finer shifts need a target")
    return Shift("cannot tell", f"whether the frame offset holds cannot be told ({seen}); {MORE}")


def check_field(
    recording: Recording,
    module: HybridModule,
    contrast_map: ContrastMap | None = None,
    progress: Progress | None = None,
) -> FieldCheck:
    """Check a calibrated `module` against a recording of ordinary motion.

    Raises NotCalibratedError (module without map, thresholds or clocks) and DegenerateDataError (too little motion or
    texture, too few frames or events), each with one sentence.
    """
    tell = progress or (lambda stage, fraction: None)
    recording.require_events()
    recording.require_frames()
    setting = setting_of(module, contrast_map)
    firsts = stretches(len(recording.frames.t_start_ns))
    if len(firsts) < LEAST_BLOCKS:
        raise DegenerateDataError(
            f"at least {LEAST_BLOCKS * BLOCK_FRAMES} frames of motion are required, got "
            f"{len(recording.frames.t_start_ns)}"
        )
    shift = np.zeros(2)
    for round_number in range(MOST_ROUNDS):
        blocks = FieldBlocks(recording, module, setting, shift)
        stage = "motion" if round_number == 0 else f"motion, about a shift of ({shift[0]:+.2f}, {shift[1]:+.2f}) px"
        samples = gather(blocks, firsts, BLOCK_FRAMES, partial(tell, stage))
        if len(samples.measured) < LEAST_SAMPLES:
            raise DegenerateDataError(
                f"at least {LEAST_SAMPLES} changes of light that both frames and events show are required, got "
                f"{len(samples.measured)}: too little motion or texture"
            )
        known, covariance = solve(samples)
        step = known[[DU, DV]]
        shift = shift + step
        if np.linalg.norm(step) < RELINEARISE_PX:
            break
    return _judged(shift, known, covariance, samples, recording, module, len(firsts))


def _judged(
    shift: Array,
    known: Array,
    covariance: Array,
    samples: FieldSamples,
    recording: Recording,
    module: HybridModule,
    count: int,
) -> FieldCheck:
    scatter = covariance[np.ix_([DU, DV], [DU, DV])]
    own = scatter + MAP_SYSTEMATIC_PX**2 * np.eye(2)
    clock, clock_sigma = float(known[DT]), float(np.hypot(np.sqrt(covariance[DT, DT]), CLOCK_SYSTEMATIC_US))
    gain = float(known[GAIN])
    map_shift = judge_map(shift, own, freedom_of(scatter, own, count))
    clock_shift = judge_clock(clock, clock_sigma)
    if not GAIN_RANGE[0] < gain < GAIN_RANGE[1]:
        doubt = (
            f"changes of light by events are {gain:.2f} times those by frames, where one is expected: thresholds, "
            "black level or the module itself are not those of this recording, and no shift can be told"
        )
        map_shift = clock_shift = Shift("cannot tell", doubt)
    return FieldCheck(
        shift,
        own,
        clock,
        clock_sigma,
        gain,
        len(samples.measured),
        count * BLOCK_FRAMES,
        map_shift,
        clock_shift,
        differing_settings(module, recording),
        stretch_shifts(samples, known, shift - known[[DU, DV]]),
    )


def stretch_shifts(samples: FieldSamples, known: Array, centre: Array) -> Array:
    """The map's shift (B, 2) by each stretch alone, all else as found over all; NaN where one tells too little."""
    design = samples.design[[DU, DV]]
    others = np.array([GAIN, DT, TAU])
    left = samples.measured - known[others] @ samples.design[others]
    shifts = np.full((int(samples.block.max()) + 1, 2), np.nan)
    for block in range(len(shifts)):
        inside = samples.block == block
        weighted = design[:, inside] * samples.weight[inside]
        normal = weighted @ design[:, inside].T
        if np.count_nonzero(inside) > 100 and np.linalg.cond(normal) < 50.0:
            shifts[block] = centre + np.linalg.solve(normal, weighted @ left[inside])
    return shifts


def check_summary(check: FieldCheck) -> dict[str, Any]:
    """Plain numbers with units in their names, for `summary.json`."""
    return {
        "verdict": check.verdict,
        "map_verdict": check.map.verdict,
        "clock_verdict": check.clock.verdict,
        "map_shift_px": check.shift_px.tolist(),
        "map_shift_covariance_px2": check.covariance.tolist(),
        "events_late_us": {"value": check.clock_us, "sigma": check.clock_sigma_us},
        "gain": check.gain,
        "samples": check.samples,
        "frames": check.frames,
        "findings": check.findings,
    }
