"""`pose_graph.json` round trips, keeps what it does not know, and refuses what it cannot read."""

import json

import numpy as np
import pytest

from hybridtrack.errors import FileFormatError, MissingFileError
from hybridtrack.posegraph import SE3, SIM3, WORLD, load_graph, save_graph, solve


@pytest.mark.parametrize("group", [SE3, SIM3], ids=["SE3", "Sim3"])
def test_round_trip(laps, tmp_path, group):
    """Poses, constraints, verdicts and priors come back as they were."""
    graph = laps(25, group=group).graph
    graph.add_prior(0, graph.pose(0).world_from_camera, graph.constraint(0).covariance)
    solved = solve(graph).graph
    save_graph(solved, tmp_path / "pose_graph.json")
    again = load_graph(tmp_path / "pose_graph.json")
    assert again.group is group
    assert again.ids == solved.ids
    assert np.abs(again.world_from_camera() - solved.world_from_camera()).max() < 1e-14
    assert again.pose(3).t_ns == solved.pose(3).t_ns
    for one, two in zip(again.constraints, solved.constraints, strict=True):
        assert (one.from_id, one.to_id, one.kind, one.verdict) == (two.from_id, two.to_id, two.kind, two.verdict)
        assert one.chi_square == two.chi_square
        assert np.abs(one.from_from_to - two.from_from_to).max() < 1e-14
        assert np.array_equal(one.covariance, two.covariance)
    assert again.constraints[-1].from_id == WORLD


def test_layout_is_the_agreed_one(laps, tmp_path):
    """Header, field names and the order px py pz qx qy qz qw, read with the standard library alone."""
    made = laps(21, seed=None)
    save_graph(made.graph, tmp_path / "pose_graph.json")
    data = json.loads((tmp_path / "pose_graph.json").read_text())
    assert (data["format"], data["version"]) == ("hybridtrack-pose-graph", 1)
    assert set(data["poses"][4]) >= {"id", "t_ns", "pose"}
    assert data["poses"][4]["pose"][:3] == pytest.approx(made.truth[4][:3, 3].tolist())
    assert data["poses"][4]["pose"][6] >= 0.0
    constraint = data["constraints"][0]
    assert set(constraint) == {"from", "to", "kind", "relative_pose", "covariance", "chi_square", "verdict"}
    assert (constraint["from"], constraint["to"]) == (0, 1)
    assert np.shape(constraint["covariance"]) == (6, 6)
    assert list(tmp_path.iterdir()) == [tmp_path / "pose_graph.json"]


def test_unknown_fields_survive_rewriting(laps, tmp_path):
    """Fields of the document, of a pose and of a constraint that are not known are kept, also by solving."""
    path = tmp_path / "pose_graph.json"
    save_graph(laps(21).graph, path)
    data = json.loads(path.read_text())
    data["weather"], data["poses"][2]["blur"], data["constraints"][1]["matches"] = "overcast", 0.5, 88
    path.write_text(json.dumps(data))
    save_graph(solve(load_graph(path)).graph, path)
    again = json.loads(path.read_text())
    assert (again["weather"], again["poses"][2]["blur"], again["constraints"][1]["matches"]) == ("overcast", 0.5, 88)


def _broken(change, laps, tmp_path):
    path = tmp_path / "pose_graph.json"
    save_graph(laps(21).graph, path)
    data = json.loads(path.read_text())
    change(data)
    path.write_text(json.dumps(data))
    return path


@pytest.mark.parametrize(
    ("change", "sentence"),
    [
        (lambda d: d.update(format="other"), "expected format 'hybridtrack-pose-graph', got 'other'"),
        (lambda d: d.update(version=2), "expected hybridtrack-pose-graph version 1, got 2"),
        (lambda d: d.pop("poses"), "field 'poses' is required and missing"),
        (lambda d: d["poses"][1].update(pose=[0.0] * 7), "pose 1: expected a unit quaternion, got one of length 0"),
        (lambda d: d["poses"][1].update(pose=[0.0, 1.0]), r"field 'poses\.1\.pose\.2' is required and missing"),
        (lambda d: d["poses"][1].update(id=0), "got 0 a second time"),
        (lambda d: d["poses"][1].update(t_ns=None), r"field 'poses\.1\.t_ns'"),
        (lambda d: d["constraints"][0].update(to=99), "got the unknown id 99"),
        (lambda d: d["constraints"][0].update(verdict="fine"), r"field 'constraints\.0\.verdict'"),
        (lambda d: d["constraints"][0].update(covariance=np.zeros((6, 6)).tolist()), "expected a positive definite"),
        (lambda d: d["constraints"][0].update(covariance=[[1.0], [1.0, 2.0]]), "a covariance must be square"),
        (lambda d: d["constraints"][0]["covariance"][0].__setitem__(0, float("nan")), "finite number"),
    ],
)
def test_refuses_what_breaks_the_layout(laps, tmp_path, change, sentence):
    """One sentence that names the file, the field and what was received."""
    path = _broken(change, laps, tmp_path)
    with pytest.raises(FileFormatError, match=sentence) as caught:
        load_graph(path)
    assert str(path) in str(caught.value)


def test_refuses_truncated_and_missing_files(laps, tmp_path):
    """A file cut short is not JSON; a file that is not there says so."""
    path = tmp_path / "pose_graph.json"
    save_graph(laps(21).graph, path)
    path.write_bytes(path.read_bytes()[:500])
    with pytest.raises(FileFormatError, match="expected JSON text, got a syntax error"):
        load_graph(path)
    with pytest.raises(MissingFileError, match="expected a hybridtrack-pose-graph file, found none"):
        load_graph(tmp_path / "absent.json")
