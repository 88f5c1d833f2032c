"""The trajectory file: layout, round trip, refusals."""

from pathlib import Path

import numpy as np
import pytest

from hybridtrack.errors import FileFormatError, MissingFileError, ShapeError
from hybridtrack.geometry import se3
from hybridtrack.odometry.trajectory import Trajectory, read_trajectory, write_trajectory

HEADER = (
    "t_ns,px_m,py_m,pz_m,qx,qy,qz,qw,health,segment,"
    "c00,c01,c02,c03,c04,c05,c11,c12,c13,c14,c15,c22,c23,c24,c25,c33,c34,c35,c44,c45,c55"
)


def three_lines() -> Trajectory:
    rng = np.random.default_rng(1)
    root = rng.normal(size=(3, 6, 6))
    poses = se3.exp(rng.normal(size=(3, 6)))
    covariance = root @ np.swapaxes(root, 1, 2)
    poses[1], covariance[1] = np.nan, np.nan
    health = np.array(["ok", "lost", "weak"])
    return Trajectory(np.array([10, 20, 30]), poses, health, np.array([0, -1, 1]), covariance)


def test_the_layout_is_the_one_agreed(tmp_path: Path) -> None:
    """Header and column count as agreed; a lost line has its time and health and nothing else."""
    write_trajectory(tmp_path / "trajectory.csv", three_lines())
    lines = (tmp_path / "trajectory.csv").read_text().splitlines()
    assert lines[0] == HEADER
    assert all(line.count(",") == 30 for line in lines)
    assert lines[2] == "20,,,,,,,,lost," + "," * 21


def test_what_is_written_is_read(tmp_path: Path) -> None:
    """Poses to 1e-11, covariances to nine digits, health and segments as they were."""
    write_trajectory(tmp_path / "trajectory.csv", three_lines())
    back = read_trajectory(tmp_path / "trajectory.csv")
    np.testing.assert_array_equal(back.t_ns, [10, 20, 30])
    np.testing.assert_array_equal(back.health, ["ok", "lost", "weak"])
    np.testing.assert_array_equal(back.segment, [0, -1, 1])
    np.testing.assert_array_equal(back.found, [True, False, True])
    np.testing.assert_allclose(back.world_from_camera, three_lines().world_from_camera, atol=1e-11)
    np.testing.assert_allclose(back.covariance, three_lines().covariance, rtol=1e-8)


def test_an_unknown_covariance_leaves_its_fields_empty(tmp_path: Path) -> None:
    """A pose without covariance is written and read as one."""
    whole = three_lines()
    covariance = np.full((3, 6, 6), np.nan)
    bare = Trajectory(whole.t_ns, whole.world_from_camera, whole.health, whole.segment, covariance)
    write_trajectory(tmp_path / "t.csv", bare)
    assert np.isnan(read_trajectory(tmp_path / "t.csv").covariance).all()


def test_what_can_not_be_read_is_refused(tmp_path: Path) -> None:
    """A missing file, a missing column, an unknown health and a word among the numbers are named."""
    with pytest.raises(MissingFileError, match="found no such file"):
        read_trajectory(tmp_path / "none.csv")
    path = tmp_path / "t.csv"
    path.write_text("t_ns,px_m\n1,2\n")
    with pytest.raises(FileFormatError, match="column 'py_m' is required"):
        read_trajectory(path)
    path.write_text(HEADER + "\n1,0,0,0,0,0,0,1,fine,0" + "," * 21 + "\n")
    with pytest.raises(FileFormatError, match="line 2: health must be one of"):
        read_trajectory(path)
    path.write_text(HEADER + "\n1,0,x,0,0,0,0,1,ok,0" + "," * 21 + "\n")
    with pytest.raises(FileFormatError, match="line 2: expected numbers"):
        read_trajectory(path)


def test_columns_of_other_lengths_are_refused() -> None:
    """Every column has one entry a line."""
    whole = three_lines()
    with pytest.raises(ShapeError, match="segment"):
        Trajectory(whole.t_ns, whole.world_from_camera, whole.health, whole.segment[:2], whole.covariance)
