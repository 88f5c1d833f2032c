"""`pose_graph.json`: layout `hybridtrack-pose-graph`, version 1.

`poses` hold id, t_ns, segment and pose [px py pz qx qy qz qw]; `constraints` hold from (null for a prior), to, kind,
relative_pose, covariance, chi_square and verdict. A graph on Sim(3) says `"group": "Sim(3)"` and gives every pose and
relative pose a `scale` beside it. One pose or constraint a line; fields that are not known are kept on rewriting.
"""

import json
from pathlib import Path
from typing import Any, Literal

import numpy as np
from pydantic import BaseModel, ConfigDict, Field, field_validator

from hybridtrack.errors import DegenerateDataError, FileFormatError, OptionError, ShapeError
from hybridtrack.files import read_document, write_text
from hybridtrack.geometry import se3, sim3
from hybridtrack.posegraph.graph import WORLD, Constraint, PoseGraph
from hybridtrack.posegraph.group import SE3, SIM3, Group

Array = np.ndarray
Seven = tuple[float, float, float, float, float, float, float]

LAYOUT = "hybridtrack-pose-graph"
UNIT_WITHIN = 1e-6


class _Record(BaseModel):
    model_config = ConfigDict(frozen=True, extra="allow", allow_inf_nan=False, populate_by_name=True)


class _PoseRecord(_Record):
    id: int = Field(ge=0)
    t_ns: int
    pose: Seven
    scale: float = Field(default=1.0, gt=0)
    segment: int = 0


class _ConstraintRecord(_Record):
    from_id: int | None = Field(alias="from")
    to: int
    kind: str
    relative_pose: Seven
    scale: float = Field(default=1.0, gt=0)
    covariance: list[list[float]]
    chi_square: float | None = Field(default=None, ge=0)
    verdict: Literal["kept", "down-weighted", "rejected", "untested"] = "untested"

    @field_validator("covariance")
    @classmethod
    def _square(cls, rows: list[list[float]]) -> list[list[float]]:
        if any(len(row) != len(rows) for row in rows):
            raise ValueError("a covariance must be square")
        return rows


class _GraphDocument(_Record):
    format: Literal["hybridtrack-pose-graph"]
    version: float
    group: Literal["SE(3)", "Sim(3)"] = "SE(3)"
    poses: list[_PoseRecord]
    constraints: list[_ConstraintRecord]


def _matrix(numbers: Seven, scale: float, name: str) -> Array:
    """Pose (4, 4) of stored numbers. Raises ShapeError unless the quaternion is of unit length."""
    length = float(np.linalg.norm(numbers[3:]))
    if abs(length - 1.0) > UNIT_WITHIN:
        raise ShapeError(f"{name}: expected a unit quaternion, got one of length {length:.6g}")
    rigid = se3.from_position_quaternion(np.array(numbers))
    return sim3.compose(scale, rigid[:3, :3], rigid[:3, 3])


def _numbers(matrix: Array, group: Group) -> tuple[list[float], dict[str, float]]:
    """Stored numbers of a pose (4, 4), and its scale where the group has one."""
    if group is SE3:
        return se3.to_position_quaternion(matrix).tolist(), {}
    scale, rotation, translation = sim3.decompose(matrix)
    return se3.to_position_quaternion(se3.compose(rotation, translation)).tolist(), {"scale": float(scale)}


def _graph_of(document: _GraphDocument) -> PoseGraph:
    graph = PoseGraph(SIM3 if document.group == "Sim(3)" else SE3)
    graph.extra = dict(document.model_extra or {})
    for pose in document.poses:
        matrix = _matrix(pose.pose, pose.scale, f"pose {pose.id}")
        graph.add_pose(pose.id, pose.t_ns, matrix, pose.segment, **(pose.model_extra or {}))
    for record in document.constraints:
        start = WORLD if record.from_id is None else record.from_id
        name = f"{record.kind} constraint to pose {record.to}"
        graph.add(
            Constraint(
                start,
                record.to,
                record.kind,
                _matrix(record.relative_pose, record.scale, name),
                np.array(record.covariance),
                record.chi_square,
                record.verdict,
                dict(record.model_extra or {}),
            )
        )
    return graph


def load_graph(path: Path | str) -> PoseGraph:
    """Read a pose graph. Raises MissingFileError, FileFormatError."""
    document = read_document(path, _GraphDocument, LAYOUT)
    try:
        return _graph_of(document)
    except (OptionError, ShapeError, DegenerateDataError) as error:
        raise FileFormatError(f"{path}: {error}") from None


def _pose_lines(graph: PoseGraph) -> list[dict[str, Any]]:
    lines = []
    for pose in graph.poses:
        numbers, scale = _numbers(pose.world_from_camera, graph.group)
        known = {"id": pose.id, "t_ns": pose.t_ns, "pose": numbers, **scale, "segment": pose.segment}
        lines.append({**pose.extra, **known})
    return lines


def _constraint_lines(graph: PoseGraph) -> list[dict[str, Any]]:
    lines = []
    for constraint in graph.constraints:
        numbers, scale = _numbers(constraint.from_from_to, graph.group)
        known = {
            "from": None if constraint.from_id == WORLD else constraint.from_id,
            "to": constraint.to_id,
            "kind": constraint.kind,
            "relative_pose": numbers,
            **scale,
            "covariance": constraint.covariance.tolist(),
            "chi_square": constraint.chi_square,
            "verdict": constraint.verdict,
        }
        lines.append({**constraint.extra, **known})
    return lines


def _listed(records: list[dict[str, Any]]) -> str:
    body = ",\n".join(json.dumps(record, allow_nan=False) for record in records)
    return f"[\n{body}\n]" if records else "[]"


def save_graph(graph: PoseGraph, path: Path | str) -> None:
    """Write a pose graph atomically."""
    head = {**graph.extra, "format": LAYOUT, "version": 1, "group": graph.group.name}
    fields = [f"{json.dumps(key)}: {json.dumps(value, allow_nan=False)}" for key, value in head.items()]
    fields.append(f'"poses": {_listed(_pose_lines(graph))}')
    fields.append(f'"constraints": {_listed(_constraint_lines(graph))}')
    write_text(path, "{" + ",\n".join(fields) + "}\n")
