"""The demo's page: the whole job told in pictures, with every estimate beside its truth."""

import numpy as np

from hybridtrack.benchmark.demo_run import DemoResult
from hybridtrack.benchmark.lap import LapRun
from hybridtrack.benchmark.metrics import map_displacement, moved_poses
from hybridtrack.module import HybridModule
from hybridtrack.recording import Recording
from hybridtrack.report.calibration_figures import (
    band_figure,
    blink_figure,
    busiest_view,
    coverage_figure,
    event_residual_figure,
)
from hybridtrack.report.calibration_page import with_deviation
from hybridtrack.report.contrast_figures import step_figure
from hybridtrack.report.figures import INK, SERIES, drawing, finished
from hybridtrack.report.page import BLINK_CAUTION, POSE_CAUTION, SYNTHETIC_NOTICE, Figure, Page, Section, Table
from hybridtrack.report.track_page import lives_of
from hybridtrack.report.track_picture import picture_of_run


def _true_offset_us(true: HybridModule, estimate: HybridModule) -> float:
    """True frame offset as the estimate means it: at its epoch, with the latency that it contains."""
    assert true.timing is not None
    assert estimate.timing is not None
    epoch_ns = (estimate.timing.drift_epoch_ns or 0) - (true.timing.drift_epoch_ns or 0)
    latency = (true.timing.event_latency_ns or 0.0) if estimate.timing.event_latency_ns is None else 0.0
    offset = true.timing.frame_offset_ns or 0.0
    return 1e-3 * (offset + latency + (true.timing.frame_drift_ppm or 0.0) * 1e-6 * epoch_ns)


def error_table(result: DemoResult) -> Table:
    """Estimate, truth, error, stated deviation, and the error in deviations."""
    estimate, true = result.calibration.module, result.true_module
    lens, true_lens = estimate.lens, true.lens
    assert lens is not None
    assert true_lens is not None
    assert estimate.timing is not None
    assert true.timing is not None
    assert estimate.contrast is not None
    assert true.contrast is not None
    assert estimate.colour_from_event is not None
    assert true.colour_from_event is not None
    offset = estimate.timing.frame_offset_ns
    separated = estimate.timing.event_latency_ns is not None
    offset_name = "frame offset" if separated else "frame offset with event latency"
    lines: list[tuple[str, str, float | None, float | None, str, float]] = [
        (f"lens {name}", f"lens.{name}", getattr(lens, name), getattr(true_lens, name), "px", 1.0)
        for name in ("fx", "fy", "cx", "cy")
    ]
    for name, row in (("c", 0), ("f", 1)):
        lines.append((
            f"event map, shift {'across' if row == 0 else 'down'}", f"colour_from_event.{name}",
            estimate.colour_from_event.matrix[row][2], true.colour_from_event.matrix[row][2], "px", 1.0,
        ))  # fmt: skip
    lines += [
        (offset_name, "timing.frame_offset_ns", None if offset is None else offset * 1e-3,
         _true_offset_us(true, estimate), "us", 1e-3),
        ("line time", "timing.line_time_ns", (estimate.timing.line_time_ns or 0) * 1e-3,
         (true.timing.line_time_ns or 0) * 1e-3, "us", 1e-3),
        ("exposure correction", "timing.exposure_correction_ns", (estimate.timing.exposure_correction_ns or 0) * 1e-3,
         (true.timing.exposure_correction_ns or 0) * 1e-3, "us", 1e-3),
        ("ON threshold", "contrast.on_threshold", estimate.contrast.on_threshold, true.contrast.on_threshold, "", 1.0),
        ("OFF threshold", "contrast.off_threshold", estimate.contrast.off_threshold, true.contrast.off_threshold,
         "", 1.0),
    ]  # fmt: skip
    rows = []
    for name, parameter, value, truth, unit, scale in lines:
        sigma = estimate.uncertainty.of(parameter) if estimate.uncertainty is not None else None
        sigma = None if sigma is None else sigma * scale
        text, deviation = with_deviation(value, sigma, unit)
        if value is None or truth is None:
            rows.append((name, text, "" if truth is None else f"{truth:.6g} {unit}", "", deviation, ""))
            continue
        ratio = f"{(value - truth) / sigma:+.1f}" if sigma else ""
        rows.append(
            (name, text, f"{truth:.6g} {unit}".strip(), f"{value - truth:+.4g} {unit}".strip(), deviation, ratio)
        )
    return Table(("quantity", "estimate", "truth", "error", "stated deviation", "error in deviations"), tuple(rows))


def _runs(result: DemoResult) -> list[tuple[LapRun, str, str, str]]:
    """Each run with its name, line style and colour."""
    runs = [(result.hybrid, "hybrid", "-", SERIES[1])]
    return runs if result.frames is None else [*runs, (result.frames, "frames alone", ":", SERIES[0])]


def truth_path_figure(result: DemoResult) -> Figure:
    """Estimated paths laid on the true one by a similarity, from above and from the side."""
    true = result.truth.world_from_camera[:, :3, 3]
    caption = (
        "The trolley's path: truth in ink, the estimate in colour over it. Estimates are laid on "
        "the truth by the one similarity that a single camera leaves open."
    )
    spans = np.argsort(-np.ptp(true, axis=0))
    first, second, third = (int(axis) for axis in spans)
    with drawing("truth-path", caption, wide=True, columns=2, height_in=3.2) as sheet:
        for axes, (across, down) in zip(sheet.axes, ((first, second), (first, third)), strict=True):
            axes.plot(true[:, across], true[:, down], color=INK, lw=2.4, alpha=0.35, label="truth")
            for run, name, style, colour in _runs(result):
                found = run.odometry.trajectory.found
                moved = moved_poses(run.error.similarity, run.odometry.trajectory.world_from_camera[found])[:, :3, 3]
                axes.plot(moved[:, across], moved[:, down], style, color=colour, lw=1.3, label=name)
            axes.set(xlabel=f"{'xyz'[across]}, m", ylabel=f"{'xyz'[down]}, m")
            axes.set_aspect("equal", adjustable="datalim")
        sheet.axes[0].legend()
    return finished(sheet)


def path_error_figure(result: DemoResult) -> Figure:
    """Distance from the truth over time."""
    with drawing("path-error", "Distance of the estimated path from the truth over the lap.") as sheet:
        for run, name, style, colour in _runs(result):
            distance = np.linalg.norm(run.error.errors[:, :3], axis=1)
            sheet.axes.plot(np.linspace(0, 1, len(distance)), 1e3 * distance, ls=style, color=colour, label=name)
        sheet.axes.set(xlabel="share of the lap", ylabel="mm", ylim=(0, None))
        sheet.axes.legend()
    return finished(sheet)


def path_table(result: DemoResult) -> Table:
    """What the lap came to, a line a mode."""
    rows = []
    for run, name, _, _ in _runs(result):
        lives, summary = lives_of(run.tracks), run.odometry.summary
        rows.append((
            name, f"{run.error.percent:.3f} %", f"{1e3 * run.error.rms_m:.2f} mm", f"{run.error.turn_rms_deg:.2f}°",
            str(summary["loops_used"]), str(summary["health"].get("lost", 0)), f"{np.median(lives.seconds):.2f} s",
            f"{len(run.tracks):,}",
        ))  # fmt: skip
    columns = ("mode", "ATE of the path", "ATE", "turn", "loops", "frames lost", "median track", "track samples")
    return Table(columns, tuple(rows), f"Path of {result.hybrid.error.path_m:.1f} m, after similarity alignment")


def _track_picture(result: DemoResult) -> tuple[Figure, ...]:
    with Recording.open(result.recordings.lap) as opened:
        figure = picture_of_run(opened, result.calibration.module, result.hybrid.tracks)
    return (figure,) if figure is not None else ()


def _path_story(result: DemoResult) -> str:
    loops = result.hybrid.odometry.summary["loops_used"]
    if loops:
        return f"Tracks become poses and a map; where the trolley comes back {loops} loops were closed."
    return "Tracks become poses and a map. No loop had to be closed: features stayed in view all the way round."


def demo_page(result: DemoResult) -> Page:
    """Build the page."""
    calibration, score = result.calibration, result.score
    view = busiest_view(calibration)
    figures = [
        blink_figure(calibration, view) if view is not None else None,
        band_figure(calibration),
        coverage_figure(calibration),
        event_residual_figure(calibration),
        step_figure(calibration),
    ]
    displacement = map_displacement(calibration.module, result.true_module)
    good = score.mirror_right and score.clear_site_right and result.hybrid.error.percent <= 2.0
    return Page(
        title="Wren on the trolley",
        subtitle="A hybrid module calibrated from a blinking board, then carried round the greenhouse on its cable.",
        state="good" if good else "attention",
        verdict=(
            f"The estimated map lies within {np.linalg.norm(displacement, axis=-1).max():.3f} colour px of the truth, "
            f"and the path that the calibrated module finds is off by {result.hybrid.error.percent:.2f} % of its "
            "length."
        ),
        facts=(
            ("events", f"{result.recordings.events * 1e-6:.1f} million"),
            ("map error, RMS", f"{score.map_rms_px:.4f} px"),
            ("focal error", f"{score.focal_percent:.3f} %"),
            ("frame offset error", f"{score.offset_us:+.1f} us"),
            ("path error, hybrid", f"{result.hybrid.error.percent:.2f} %"),
            *((f"{stage} took", f"{seconds:.0f} s") for stage, seconds in result.seconds.items()),
        ),
        cautions=(BLINK_CAUTION, POSE_CAUTION),
        sections=(
            Section(
                "1. A board blinks",
                "The nominal module says nothing of the lens and clocks. Twelve squares by nine blink; where event "
                "pixels fire and what frames show at the same instants tie the two halves of the module together.",
                figures=tuple(figure for figure in figures if figure is not None),
            ),
            Section(
                "2. What was estimated, and how wrong it is",
                "Errors are estimate minus truth. A stated deviation is honest when most errors lie within two of it.",
                tables=(error_table(result),),
            ),
            Section(
                "3. Features through motion",
                "The calibrated module follows corners: frames fix them, events carry them from frame to frame.",
                figures=_track_picture(result),
            ),
            Section(
                "4. The path",
                _path_story(result),
                tables=(path_table(result),),
                figures=(truth_path_figure(result), path_error_figure(result)),
            ),
            Section(
                "Findings of the calibration",
                " ".join(f"{f[0].upper()}{f[1:]}." for f in calibration.module.findings or []),
            ),
        ),
        notices=(SYNTHETIC_NOTICE,),
    )
