"""The page of a calibration: every number with its deviation and what it means."""

import math

from hybridtrack.calibration.calibrate import CalibrationResult
from hybridtrack.module import HybridModule, PerspectiveParameters
from hybridtrack.report.calibration_figures import (
    band_figure,
    blink_figure,
    busiest_view,
    correlation_figure,
    coverage_figure,
    event_residual_figure,
)
from hybridtrack.report.contrast_figures import contrast_figures
from hybridtrack.report.latency_figure import latency_figure
from hybridtrack.report.page import BLINK_CAUTION, Figure, Page, Section, Table


def with_deviation(value: float | None, sigma: float | None, unit: str = "") -> tuple[str, str]:
    """Value and deviation as text, the value rounded to a tenth of its deviation."""
    if value is None:
        return "not determined", ""
    if sigma is None or not sigma > 0:
        return f"{value:.6g} {unit}".strip(), "held or not estimated"
    digits = max(0, min(9, 1 - math.floor(math.log10(sigma))))
    return f"{value:.{digits}f} {unit}".strip(), f"{sigma:.{digits}f} {unit}".strip()


def _lens_rows(module: HybridModule) -> list[tuple[str, str, str, str]]:
    lens, sigma = module.lens, module.uncertainty
    if lens is None or sigma is None:
        return []
    rows = [
        (f"lens {name}", *with_deviation(getattr(lens, name), sigma.of(f"lens.{name}"), "px"), meaning)
        for name, meaning in (
            ("fx", "focal length across, in colour pixels"),
            ("fy", "focal length down"),
            ("cx", "where the optical axis meets the array"),
            ("cy", ""),
        )
    ]
    for index, value in enumerate(lens.radial, start=1):
        if value or sigma.of(f"lens.k{index}"):
            rows.append((f"lens k{index}", *with_deviation(value, sigma.of(f"lens.k{index}")), "radial distortion"))
    if isinstance(lens, PerspectiveParameters):
        for index, value in enumerate(lens.tangential, start=1):
            if value or sigma.of(f"lens.p{index}"):
                rows.append(
                    (f"lens p{index}", *with_deviation(value, sigma.of(f"lens.p{index}")), "tangential distortion")
                )
    return rows


def _map_rows(module: HybridModule) -> list[tuple[str, str, str, str]]:
    event_map, sigma = module.colour_from_event, module.uncertainty
    assert event_map is not None
    mirrored = [axis for axis in "xy" if getattr(module.event_grid, f"mirror_{axis}")]
    clear = module.cluster.clear_site
    rows = [
        ("mirroring", " and ".join(mirrored) or "none", "", "of the event grid against the colour array, as found"),
        (
            "clear site",
            f"column {clear[0]}, row {clear[1]}" if clear else "unknown",
            "",
            "inside its cluster, as found",
        ),
    ]
    if event_map.centroid is not None:
        for name, index, axis in (("c", 0, "across"), ("f", 1, "down")):
            deviation = sigma.of(f"colour_from_event.{name}") if sigma else None
            rows.append((f"optical centroid {axis}", *with_deviation(event_map.centroid[index], deviation, "px"),
                         "off the clear pixel's centre"))  # fmt: skip
    if event_map.lattice is not None and event_map.lattice.p_value is not None:
        verdict = (
            "the map is the die's lattice" if event_map.lattice.consistent else "the map is NOT a lattice: see findings"
        )
        rows.append(("lattice test", f"p = {event_map.lattice.p_value:.3f}", "", verdict))
    return rows


def _clock_rows(module: HybridModule) -> list[tuple[str, str, str, str]]:
    timing, sigma = module.timing, module.uncertainty
    assert timing is not None
    latency = (
        "not determined: contained in the frame offset"
        if timing.event_latency_ns is None
        else f"first event after light turns to {timing.reference_light_dn or 0.0:.0f} DN; not in the frame offset"
    )

    def row(name: str, field: str, scale: float, unit: str, meaning: str) -> tuple[str, str, str, str]:
        value, deviation = getattr(timing, field), sigma.of(f"timing.{field}") if sigma else None
        scaled = None if value is None else value * scale
        return name, *with_deviation(scaled, None if deviation is None else deviation * scale, unit), meaning

    return [
        row("frame offset", "frame_offset_ns", 1e-3, "us", "frame clock to event stamps; new after every power cycle"),
        row("line time", "line_time_ns", 1e-3, "us", "from one row's exposure to the next"),
        row("exposure correction", "exposure_correction_ns", 1e-3, "us", "true exposure less stamped"),
        row("frame clock drift", "frame_drift_ppm", 1.0, "ppm", "against the event clock"),
        row("event latency", "event_latency_ns", 1e-3, "us", latency),
        row("row skew", "row_skew_ns", 1e-3, "us", "from one row's event stamps to the next row's, under this load"),
    ]


def _contrast_rows(module: HybridModule) -> list[tuple[str, str, str, str]]:
    contrast, defects, sigma = module.contrast, module.defects, module.uncertainty
    rows = []
    if contrast is not None:
        for side in ("on", "off"):
            value = getattr(contrast, f"{side}_threshold")
            deviation = sigma.of(f"contrast.{side}_threshold") if sigma else None
            spread = getattr(contrast, f"{side}_spread")
            meaning = f"natural log; {spread:.4f} from pixel to pixel" if spread is not None else "natural log"
            rows.append((f"{side.upper()} threshold", *with_deviation(value, deviation), meaning))
        if contrast.noise_width is not None:
            deviation = sigma.of("contrast.noise_width") if sigma else None
            rows.append(
                ("comparator noise", *with_deviation(contrast.noise_width, deviation), "natural log, one sigma")
            )
        if contrast.refractory_ns is not None:
            rows.append(
                ("refractory time", f"{contrast.refractory_ns * 1e-3:.0f} us", "", "shortest wait seen at a pixel")
            )
    if defects is not None:
        rows.append(("hot pixels", str(len(defects.hot)), "", "fire in still light"))
        rows.append(("dead pixels", str(len(defects.dead)), "", "do not fire under blinking light"))
    return rows


def calibration_table(result: CalibrationResult) -> Table:
    """Every number, its deviation and its meaning."""
    module = result.module
    rows = _lens_rows(module) + _map_rows(module) + _clock_rows(module) + _contrast_rows(module)
    return Table(("quantity", "value", "deviation", "meaning"), tuple(rows), prose=(3,))


def calibration_figures(result: CalibrationResult) -> tuple[Figure, ...]:
    """All figures that the result supports, in the order in which the page argues."""
    view = busiest_view(result)
    figures = [
        blink_figure(result, view) if view is not None else None,
        band_figure(result),
        latency_figure(result),
        coverage_figure(result),
        event_residual_figure(result),
        *contrast_figures(result),
        correlation_figure(result),
    ]
    return tuple(figure for figure in figures if figure is not None)


def calibration_page(result: CalibrationResult, recording: str, sections: tuple[Section, ...] = ()) -> Page:
    """Build the page of one calibration; `sections` (limits, repeatability) come before the numbers."""
    used = sum(view.board is not None for view in result.views)
    return Page(
        title=f"{result.module.name or 'Module'}, calibrated",
        subtitle=f"from {recording}, target “{result.target.name}”",
        state="good" if used == len(result.views) else "attention",
        verdict=(
            f"Calibrated from {used} of {len(result.views)} views; corners fit the lens to "
            f"{result.lens_fit.rms_px:.3f} px RMS. Read the findings before relying on a number."
        ),
        findings=tuple(result.module.findings or ()),
        cautions=(BLINK_CAUTION,),
        sections=(
            *sections,
            Section("Numbers", "Each with its standard deviation; what was held or could not be told says so.",
                    (calibration_table(result),)),
            Section("What they rest on", figures=calibration_figures(result)),
        ),
    )  # fmt: skip
