"""The folder that odometry leaves behind: trajectory.csv, map.ply, pose_graph.json, summary.json."""

from pathlib import Path
from typing import Any

from hybridtrack.files import write_json
from hybridtrack.odometry.map_file import write_map
from hybridtrack.odometry.result import OdometryResult
from hybridtrack.odometry.trajectory import write_trajectory
from hybridtrack.posegraph import save_graph


def write_outputs(result: OdometryResult, out_dir: Path | str) -> dict[str, Any]:
    """Write all files of a result, atomically one by one, and return the summary as written."""
    folder = Path(out_dir)
    folder.mkdir(parents=True, exist_ok=True)
    in_file = write_map(folder / "map.ply", result.points)
    write_trajectory(folder / "trajectory.csv", result.trajectory)
    save_graph(result.graph, folder / "pose_graph.json")
    summary = {**result.summary, "points_in_map_file": in_file}
    write_json(folder / "summary.json", summary)
    return summary
