"""Points to follow, from CSV."""

from pathlib import Path

import numpy as np
import pytest

from hybridtrack.errors import FileFormatError, MissingFileError, ShapeError
from hybridtrack.tracking import Points, read_points, write_points


def test_round_trip(tmp_path: Path) -> None:
    """Ids, stamps and positions come back to the last digit."""
    points = Points(np.array([7, 3]), np.array([10**18 + 1, 5]), np.array([[0.1, 2.5], [1e-7, 1279.123456789]]))
    write_points(tmp_path / "points.csv", points)
    read = read_points(tmp_path / "points.csv")
    np.testing.assert_array_equal(read.id, points.id)
    np.testing.assert_array_equal(read.t_ns, points.t_ns)
    np.testing.assert_array_equal(read.uv, points.uv)


@pytest.mark.parametrize(
    ("text", "sentence"),
    [
        ("", "expected the header 'id,t_ns,u,v'"),
        ("id,u,v\n1,2,3\n", "expected the header 'id,t_ns,u,v', got 'id,u,v'"),
        ("id,t_ns,u,v\n1,2,3\n", "line 2 must be two integers and two numbers, got '1,2,3'"),
        ("id,t_ns,u,v\n1,2.5,3,4\n", "line 2 must be two integers"),
        ("id,t_ns,u,v\n1,2,nan,4\n", "line 2: u and v must be finite"),
        ("id,t_ns,u,v\n-1,2,3,4\n", "line 2: id must not be negative"),
        ("id,t_ns,u,v\n4,2,3,4\n4,2,3,4\n", "every id must stand once, got 4 twice"),
    ],
)
def test_bad_files_are_refused(tmp_path: Path, text: str, sentence: str) -> None:
    """Each fault names its line and what was wrong."""
    path = tmp_path / "points.csv"
    path.write_text(text)
    with pytest.raises(FileFormatError, match=sentence):
        read_points(path)


def test_missing_file_and_twins_are_refused(tmp_path: Path) -> None:
    """A file that is not there and an id given twice in memory are refused."""
    with pytest.raises(MissingFileError, match="expected a CSV file of points"):
        read_points(tmp_path / "none.csv")
    with pytest.raises(ShapeError, match="every point's id once"):
        Points(np.array([1, 1]), np.zeros(2, np.int64), np.zeros((2, 2)))
    with pytest.raises(ShapeError, match=r"`t_ns` of shape \(1,\)"):
        Points(np.array([1]), np.zeros(2, np.int64), np.zeros((1, 2)))
