"""The page of an odometry run: where the camera went, how well that is known, and which loops were closed."""

import numpy as np

from hybridtrack.odometry.result import OdometryResult
from hybridtrack.odometry.trajectory import HEALTHS, Trajectory
from hybridtrack.report.figures import SERIES, drawing, finished
from hybridtrack.report.page import POSE_CAUTION, Figure, Page, Section, Table

Array = np.ndarray
HEALTH_COLOURS = dict(zip(HEALTHS, (SERIES[2], SERIES[4], SERIES[1]), strict=True))


def _widest_axes(positions: Array) -> tuple[int, int]:
    """The two axes along which the trajectory extends most."""
    order = np.argsort(-np.ptp(positions, axis=0))[:2]
    return int(min(order)), int(max(order))


def path_figure(result: OdometryResult) -> Figure | None:
    """Trajectory, map points and loops seen along the axis of least extent."""
    trajectory = result.trajectory
    if not trajectory.found.any():
        return None
    positions = trajectory.world_from_camera[trajectory.found, :3, 3]
    across, down = _widest_axes(positions)
    caption = (
        "The camera's path (line), the map's points (grey) and closed loops (dashed), seen along the axis of least "
        "extent. The scale is not observed by one camera: the unit is the map's own."
    )
    with drawing("path", caption, wide=True, height_in=3.6) as sheet:
        points = result.points.positions
        if len(points):
            low, high = np.percentile(points, [2, 98], axis=0)
            inner = points[np.all((points >= low) & (points <= high), axis=1)]
            sheet.axes.scatter(
                inner[:, across], inner[:, down], s=1.5, color="#8a8f88", alpha=0.5, linewidths=0, rasterized=True
            )
        for segment in np.unique(trajectory.segment[trajectory.found]):
            part = trajectory.world_from_camera[trajectory.segment == segment, :3, 3]
            sheet.axes.plot(part[:, across], part[:, down], color=SERIES[0])
        poses = {pose.id: pose.world_from_camera[:3, 3] for pose in result.graph.poses}
        for loop in result.loops:
            ends = [poses.get(loop.loop.from_id), poses.get(loop.loop.to_id)]
            if loop.used and all(end is not None for end in ends):
                pair = np.array(ends)
                sheet.axes.plot(pair[:, across], pair[:, down], "--", color=SERIES[1], lw=0.9)
        names = "xyz"
        sheet.axes.set(xlabel=f"{names[across]}, map units", ylabel=f"{names[down]}, map units")
        sheet.axes.set_aspect("equal", adjustable="datalim")
    return finished(sheet)


def _deviation_figure(trajectory: Trajectory) -> Figure:
    seconds = (trajectory.t_ns - trajectory.t_ns[0]) * 1e-9
    sigma = np.sqrt(np.einsum("nii->n", trajectory.covariance[:, :3, :3]) / 3)
    with drawing("pose-deviation", "Stated deviation of the position, frame by frame, coloured by health.") as sheet:
        for health in HEALTHS:
            chosen = trajectory.health == health
            shown = np.where(np.isfinite(sigma), sigma, 0.0)[chosen]
            if chosen.any():
                sheet.axes.plot(seconds[chosen], shown, ".", ms=3, color=HEALTH_COLOURS[health], label=health)
        sheet.axes.set(xlabel="time, s", ylabel="map units", ylim=(0, None))
        sheet.axes.legend()
    return finished(sheet)


def odometry_table(result: OdometryResult) -> Table:
    """The numbers of a run."""
    summary = result.summary
    rows = [
        ("frames", f"{summary['frames']}"),
        *((f"frames {health}", f"{summary['health'].get(health, 0)}") for health in HEALTHS),
        ("segments", f"{summary['segments']}"),
        ("keyframes", f"{summary['keyframes']}"),
        ("map points", f"{summary['points']:,}"),
        ("median rays a frame", f"{summary['median_rays_a_frame']:.0f}"),
        ("path length, map units", f"{summary['path_length']:.3f}"),
        ("loops used / proposed", f"{summary['loops_used']} / {len(summary['loops'])}"),
    ]
    return Table(("quantity", "value"), tuple(rows))


def _loop_table(result: OdometryResult) -> Table:
    rows = tuple(
        (
            f"{loop['from']} to {loop['to']}",
            str(loop["features"]),
            "used" if loop["used"] else "left out",
            str(loop["reason"]),
        )
        for loop in result.summary["loops"]
    )
    return Table(("keyframes", "features", "verdict", "reason"), rows, "Loops that were proposed", prose=(2, 3))


def odometry_page(result: OdometryResult, recording: str) -> Page:
    """Build the page of one run."""
    figures = [path_figure(result)]
    if len(result.trajectory) and result.trajectory.found.any():
        figures.append(_deviation_figure(result.trajectory))
    tables = [odometry_table(result)]
    if result.summary["loops"]:
        tables.append(_loop_table(result))
    failed = bool(result.failures)
    summary = result.summary
    verdict = (
        f"Not whole: {result.failures[0]}."
        if failed
        else f"A pose for each of {summary['frames']} frames, {summary['loops_used']} loops closed."
    )
    return Page(
        title="Camera path",
        subtitle=f"{recording}, mode {summary['mode']}",
        state="bad" if failed else "good",
        verdict=verdict,
        findings=(
            *result.failures,
            *summary["findings"],
            f"Scale: {summary['scale']}.",
            f"Covariances contain {summary['covariance_contains']}.",
        ),
        cautions=(POSE_CAUTION,),
        sections=(Section("Run", tables=tuple(tables), figures=tuple(f for f in figures if f is not None)),),
    )
