"""Do two calibrations of one module agree within their own deviations?

Each number x with covariance C is compared by itself, (x2 - x1) / sqrt(s1^2 + s2^2), and each block as a whole by

    chi^2 = d' (C1 + C2)^-1 d,    d = x2 - x1

which counts what is strongly correlated once. Lens and map are also compared as what they do: displacement over a 5x4
field, for the lens with the turn of the camera that best cancels it removed.

What both recordings share (the mismatch of the same pixels) is in both deviations and in neither difference: less
scatter than stated is no fault. A frame offset is known up to whole blink periods, and anew after each power cycle:
it is compared modulo a period, at one instant.
"""

from dataclasses import dataclass, field

import numpy as np
from scipy.stats import chi2

from hybridtrack.calibration.field_difference import (
    FieldDifference,
    covariance_of,
    estimated_names,
    field_differences,
)
from hybridtrack.calibration.named_numbers import CENTROID, Number, named_numbers
from hybridtrack.module import HybridModule

Array = np.ndarray

LEAST_P = 0.003  # a block that agrees falls below this once in 333
FAR = 4.0  # deviations of one number; 40 numbers exceed it once in 400 pairs
MODELS_DIFFER = "the lens models differ"
BLOCKS = {"lens": "lens", "colour_from_event": "event map", "timing": "clocks", "contrast": "thresholds"}


@dataclass(frozen=True)
class Difference:
    """Second less first of one number; `deviations` None where no deviation is known; `note` says what was done."""

    name: str
    first: float
    second: float
    difference: float
    sigma: float | None
    note: str = ""

    @property
    def deviations(self) -> float | None:
        """The difference in its own deviations."""
        return self.difference / self.sigma if self.sigma else None


@dataclass(frozen=True)
class BlockAgreement:
    """All numbers of one block together: chi square, its degrees of freedom, and how likely one as large is."""

    block: str
    chi_square: float
    freedom: int

    @property
    def p_value(self) -> float:
        """Probability of a chi square at least as large if the two agree."""
        return float(chi2.sf(self.chi_square, self.freedom))


@dataclass(frozen=True)
class Repeatability:
    """What two calibrations of one module say of each other."""

    differences: list[Difference]
    blocks: list[BlockAgreement]
    fields: list[FieldDifference]
    findings: list[str] = field(default_factory=list)

    @property
    def agrees(self) -> bool:
        """No block is unlikely, no number far off, and nothing that must be equal differs."""
        return not self.findings


def _offset_difference(
    modules: tuple[HybridModule, HybridModule], numbers: list[Number], period_ns: float | None
) -> Difference:
    """Frame offsets at the second recording's epoch, less whole blink periods."""
    (first, second), name = modules, "timing.frame_offset_ns"
    before, after = first.timing, second.timing
    start, end = (float(number.value or 0.0) for number in numbers)
    assert before is not None
    assert after is not None
    variance = [number.sigma**2 if number.sigma is not None else None for number in numbers]
    raw = end - start
    note = ""
    if (before.event_latency_ns is None) != (after.event_latency_ns is None):
        # One offset holds the latency, the other stands beside it: only the sums compare.
        latency = "timing.event_latency_ns"
        for k, module in enumerate(modules):
            held = module.timing.event_latency_ns if module.timing is not None else None
            if held is None:
                continue
            raw += held if k == 1 else -held
            variance[k] = float(covariance_of(module, [name, latency]).sum())
        note = "event latency included"
    drift = before.frame_drift_ppm
    if drift is not None and before.drift_epoch_ns is not None and after.drift_epoch_ns is not None:
        apart_ns = after.drift_epoch_ns - before.drift_epoch_ns
        raw -= drift * 1e-6 * apart_ns
        sigma = first.uncertainty.of("timing.frame_drift_ppm") if first.uncertainty is not None else None
        if variance[0] is not None and sigma is not None:
            cross = covariance_of(first, [name, "timing.frame_drift_ppm"])[0, 1]
            variance[0] += (sigma * 1e-6 * apart_ns) ** 2 + 2e-6 * apart_ns * cross
        if abs(apart_ns) > 1e9:
            note = f"{note}, compared {apart_ns * 1e-9:.0f} s apart".lstrip(", ")
    sigma_ns = None if None in variance else float(np.sqrt(sum(variance)))  # type: ignore[arg-type]
    if period_ns is not None:
        periods = round(raw / period_ns)
        raw -= periods * period_ns
        if periods:
            note = f"{note}, less {periods} blink periods".lstrip(", ")
        if sigma_ns is not None and sigma_ns > period_ns / 6:
            return Difference(name, start, end, raw, None, "drift leaves it open")
    return Difference(name, start, end, raw, sigma_ns, note)


def _differences(
    modules: tuple[HybridModule, HybridModule], same_lens: bool, period_ns: float | None
) -> list[Difference]:
    one, two = (named_numbers(module) for module in modules)
    found = []
    for name in one:
        pair = [one[name], two.get(name, Number(None))]
        if pair[0].value is None or pair[1].value is None or name == "lattice_p_value":
            continue
        if name == "timing.frame_offset_ns":
            found.append(_offset_difference(modules, pair, period_ns))
            continue
        sigma = None
        if pair[0].sigma is not None and pair[1].sigma is not None:
            sigma = float(np.hypot(pair[0].sigma, pair[1].sigma))
        if sigma is None and pair[0].value == pair[1].value:
            continue  # held, not estimated
        note = ""
        if name.startswith("lens.") and not same_lens:
            sigma, note = None, MODELS_DIFFER
        found.append(Difference(name, pair[0].value, pair[1].value, pair[1].value - pair[0].value, sigma, note))
    return found


def _blocks(modules: tuple[HybridModule, HybridModule], differences: list[Difference]) -> list[BlockAgreement]:
    found = []
    for prefix, block in BLOCKS.items():
        chosen = [d for d in differences if d.name.startswith(f"{prefix}.") and d.sigma and d.name not in CENTROID]
        if not chosen:
            continue
        names = [d.name for d in chosen]
        total = covariance_of(modules[0], names) + covariance_of(modules[1], names)
        scale = np.array([d.sigma for d in chosen], float)  # the frame offset's has grown by the drift
        spread = np.sqrt(np.diag(total))
        correlation = total / np.outer(spread, spread)
        difference = np.array([d.difference for d in chosen]) / scale
        chi_square = float(difference @ np.linalg.pinv(correlation, rcond=1e-9, hermitian=True) @ difference)
        found.append(BlockAgreement(block, chi_square, int(np.linalg.matrix_rank(correlation, 1e-9, hermitian=True))))
    return found


def _unequal(first: HybridModule, second: HybridModule) -> list[str]:
    """What must be the same in both and is not."""
    pairs = {
        "mirroring across": (first.event_grid.mirror_x, second.event_grid.mirror_x),
        "mirroring down": (first.event_grid.mirror_y, second.event_grid.mirror_y),
        "clear site": (first.cluster.clear_site, second.cluster.clear_site),
        "row order": (first.frame_mode.row_order, second.frame_mode.row_order),
        "colour array": (first.colour_array, second.colour_array),
        "serial number": (first.serial, second.serial),
    }
    return [f"{what}: {a} in the first recording, {b} in the second" for what, (a, b) in pairs.items() if a != b]


def compare_calibrations(
    first: HybridModule, second: HybridModule, blink_period_ns: float | None = None
) -> Repeatability:
    """Compare two calibrations of one module; `blink_period_ns` is that of the target, for the frame offset."""
    modules = (first, second)
    lens, other = first.lens, second.lens
    free = [estimated_names(module, "lens.") for module in modules]
    same_lens = lens is not None and other is not None and lens.model == other.model and free[0] == free[1]
    findings = _unequal(first, second)
    differences = _differences(modules, same_lens, blink_period_ns)
    blocks = _blocks(modules, differences)
    for block in blocks:
        if block.p_value < LEAST_P:
            findings.append(
                f"{block.block}: the two differ by more than their deviations (chi square {block.chi_square:.1f} of "
                f"{block.freedom}, p = {block.p_value:.2g})"
            )
    fields = field_differences(modules)
    for found in fields:
        if found.p_value is not None and found.p_value < LEAST_P:
            findings.append(
                f"{found.what}: the two differ by {found.rms_px:.4f} px RMS, and their deviations lead one to expect "
                f"{found.expected_px:.4f} (p = {found.p_value:.2g})"
            )
    for d in differences:
        if d.deviations is not None and abs(d.deviations) > FAR:
            findings.append(f"{d.name}: the two differ by {d.deviations:+.1f} deviations")
    return Repeatability(differences, blocks, fields, findings)


def repeatability_summary(result: Repeatability) -> dict[str, object]:
    """Plain numbers for `summary.json`."""
    return {
        "agrees": result.agrees,
        "numbers": {
            d.name: {"first": d.first, "second": d.second, "difference": d.difference, "sigma": d.sigma,
                     "deviations": d.deviations, "note": d.note}
            for d in result.differences
        },
        "blocks": {
            b.block: {"chi_square": b.chi_square, "freedom": b.freedom, "p_value": b.p_value} for b in result.blocks
        },
        "fields": {
            f.what: {"rms_px": f.rms_px, "largest_px": f.largest_px, "expected_rms_px": f.expected_px,
                     "p_value": f.p_value}
            for f in result.fields
        },
        "findings": result.findings,
    }  # fmt: skip
