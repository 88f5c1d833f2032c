"""The event latency taken out of the frame offset, as far as a recording can tell the two apart.

The clock fit gives their sum. Three cases:
- light varies enough over the pixels: the curve of latency against light tells where events would lie in light without
  end. What is left there does not depend on light (comparator, bus, one row of the readout), and no recording of light
  alone can tell it from the offset: it is assumed, within bounds that the deviation states;
- hardware edges mark the exposures on the event clock: they give the offset, and the latency is what is left;
- neither: the sum stays in the offset, the latency is null, and a finding says so.
"""

from dataclasses import replace

import numpy as np
from scipy.stats import chi2

from hybridtrack.calibration.clock_triggers import EdgeOffset
from hybridtrack.calibration.first_fire import FirstFire
from hybridtrack.calibration.latency_curve import LatencyCurve
from hybridtrack.calibration.timing_result import LATENCY_FINDING, TimingResult
from hybridtrack.module import Target

Array = np.ndarray

# Delay of comparator and bus that light does not change: tens of microseconds (common practice, no source). No
# recording of light shows it, so that it is as unsure as it is large: 0 to 0.1 ms lie within three deviations.
CONSTANT_NS, CONSTANT_SIGMA_NS = 25_000.0, 25_000.0
CURVE_FLOOR_NS = 2_000.0  # a bin of the curve
# Of the part that follows light: what a pixel remembers of its last events depends on light a little, too (measured:
# 8 % for slow pixels whose reference is reset by each event).
CURVE_SHARE = 0.06
WORST_CURVE_NS = 12_000.0  # a wider deviation of the intercept would spoil the offset
LEAST_CERTAINTY = 4.0  # deviations by which delay must fall with light
LEAST_P = 1e-4  # of the line through the classes
SLOW_LIGHT_S = 1e-4  # a target that takes longer to turn bright delays events by itself
AGREEMENT = 4.0  # deviations within which edges and curve must agree


def curve_refusal(curve: LatencyCurve | None, first: FirstFire | None, target: Target) -> str | None:
    """Why the curve cannot be used, as a clause; None where it can."""
    if target.scanout_s > 0 or target.is_counterphase:
        return "the target is a screen, whose own rise counts in"
    if (target.rise_s or 0.0) > SLOW_LIGHT_S:
        return f"the target takes {1e3 * (target.rise_s or 0.0):.2f} ms to turn bright"
    if curve is None or first is None:
        return "too few pixels or reads show it"
    if not np.isfinite(curve.intercept_sigma_ns) or curve.intercept_sigma_ns > WORST_CURVE_NS:
        return (
            f"the light of {curve.light_dn.min():.0f} to {curve.light_dn.max():.0f} DN varies too little, which leaves "
            f"+- {1e-3 * curve.intercept_sigma_ns:.0f} us"
        )
    if curve.slope_ns_dn < LEAST_CERTAINTY * curve.slope_sigma_ns_dn:
        return "it does not fall with light"
    if chi2.sf(curve.chi2, max(curve.freedom, 1)) < LEAST_P:
        return "it does not follow a first-order photoreceptor"
    return None


def curve_deviation_ns(curve: LatencyCurve) -> float:
    """Deviation of the part that follows light: scatter, bins, and what the model leaves out."""
    return float(np.linalg.norm([curve.intercept_sigma_ns, CURVE_FLOOR_NS, CURVE_SHARE * curve.intercept_ns]))


def split(
    result: TimingResult, latency_ns: float, light_dn: float, own_variance: float, shared_variance: float
) -> TimingResult:
    """Take `latency_ns` out of the offset.

    `shared_variance` (ns^2) is of what moves sum and latency alike; `own_variance` of what moves latency alone, and the
    offset against it.
    """
    timing = result.timing
    assert timing.frame_offset_ns is not None
    offset = result.parameters.index("timing.frame_offset_ns")
    size = len(result.parameters)
    covariance = np.zeros((size + 1, size + 1))
    covariance[:size, :size] = result.covariance
    covariance[offset, offset] += own_variance - shared_variance
    covariance[size, size] = own_variance + shared_variance
    covariance[offset, size] = covariance[size, offset] = -own_variance
    return replace(
        result,
        timing=timing.model_copy(
            update={
                "frame_offset_ns": timing.frame_offset_ns - latency_ns,
                "event_latency_ns": latency_ns,
                "reference_light_dn": light_dn,
            }
        ),
        parameters=(*result.parameters, "timing.event_latency_ns"),
        covariance=covariance,
        findings=[sentence for sentence in result.findings if sentence != LATENCY_FINDING],
    )


def by_curve(result: TimingResult, curve: LatencyCurve, first: FirstFire) -> TimingResult:
    """Latency by its dependence on light; the constant part is assumed."""
    latency = CONSTANT_NS - curve.intercept_ns
    own = curve_deviation_ns(curve) ** 2 + CONSTANT_SIGMA_NS**2
    found = split(result, latency, curve.reference_light_dn, own, first.sigma_ns**2)
    sentence = (
        f"event latency is separated from the frame offset by its dependence on light: of {1e-3 * latency:.0f} us at "
        f"{curve.reference_light_dn:.0f} DN, {-1e-3 * curve.intercept_ns:.0f} +- "
        f"{1e-3 * curve_deviation_ns(curve):.0f} us follow light; the rest does not depend on "
        f"light, cannot be told from the frame offset, and is assumed as {1e-3 * CONSTANT_NS:.0f} +- "
        f"{1e-3 * CONSTANT_SIGMA_NS:.0f} us"
    )
    return replace(found, findings=[sentence, *found.findings])


def by_edges(
    result: TimingResult, edges: EdgeOffset, light_dn: float | None, first: FirstFire | None
) -> TimingResult | None:
    """Latency as what the offset by light holds beyond the offset by hardware edges; None where it makes no sense."""
    timing = result.timing
    assert timing.frame_offset_ns is not None
    latency = timing.frame_offset_ns - edges.offset_ns
    shared = first.sigma_ns**2 if first is not None else 0.0
    offset = result.parameters.index("timing.frame_offset_ns")
    clocks = max(float(result.covariance[offset, offset]) - shared, 0.0)
    if light_dn is None or latency < -3.0 * np.sqrt(clocks + shared + edges.sigma_ns**2):
        return None
    # The offset is now that of the edges: the clock fit's own error goes over to the latency.
    found = split(result, latency, light_dn, clocks + edges.sigma_ns**2, shared)
    covariance = found.covariance.copy()
    covariance[-1, :-1] = covariance[:-1, -1] = covariance[offset, :-1]
    covariance[offset, :] = covariance[:, offset] = 0.0
    covariance[offset, offset] = edges.sigma_ns**2
    covariance[-1, offset] = covariance[offset, -1] = -(edges.sigma_ns**2)
    sentence = (
        f"the frame offset is that of the hardware edges, and the event latency of {1e-3 * latency:.0f} us at "
        f"{light_dn:.0f} DN is what flips of light come later than it, constant part included"
    )
    return replace(found, covariance=covariance, findings=[sentence, *found.findings])


def with_latency(
    result: TimingResult,
    curve: LatencyCurve | None,
    first: FirstFire | None,
    target: Target,
    edges: EdgeOffset | None = None,
) -> TimingResult:
    """The timing with its latency separated where edges or the curve allow it, and a finding in any case."""
    refusal = curve_refusal(curve, first, target)
    by_light = None
    if refusal is None:
        assert curve is not None
        assert first is not None
        by_light = by_curve(result, curve, first)
    if edges is not None and edges.is_certain:
        light = curve.reference_light_dn if curve is not None else None
        measured = by_edges(result, edges, light, first)
        if measured is not None and by_light is not None:
            assert measured.timing.event_latency_ns is not None
            assert by_light.timing.event_latency_ns is not None
            apart = measured.timing.event_latency_ns - by_light.timing.event_latency_ns
            if abs(apart) > AGREEMENT * np.hypot(edges.sigma_ns, np.sqrt(by_light.covariance[-1, -1])):
                sentence = (
                    f"hardware edges and the latency's dependence on light disagree by {1e-3 * apart:+.0f} us: the "
                    "edges are not used"
                )
                return replace(by_light, findings=[*by_light.findings, sentence])
        if measured is not None:
            return measured
    if by_light is not None:
        return by_light
    sentence = f"event latency cannot be separated: {refusal}"
    return replace(result, findings=[*result.findings, sentence])
