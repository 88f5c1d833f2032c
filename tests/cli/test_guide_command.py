"""`hybridtrack guide` on a folder and on one recording."""

import shutil
import sys
from dataclasses import replace
from pathlib import Path

import pytest

from hybridtrack.cli.guide_command import Watch
from hybridtrack.module import load_target, save_module, save_target
from tests.cli.test_commands import assert_refused, run

sys.path.insert(0, str(Path(__file__).parents[1] / "calibration"))

from ideal_board import Scene, nominal_of, record, small_module, tilted_poses


@pytest.fixture(scope="module")
def bench(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """A recording of two views, the target, the nominal module."""
    folder = tmp_path_factory.mktemp("guide")
    scene = Scene(module=small_module(), poses=tilted_poses(2, 3), view_s=0.4)
    record(scene, folder / "first.h5")
    record(replace(scene, poses=tilted_poses(1, 9)), folder / "second.h5")
    save_module(nominal_of(scene.module), folder / "nominal.module.json")
    save_target(scene.target, folder / "board.target.json")
    return folder


def test_once_says_what_is_covered_and_what_comes_next(bench: Path, tmp_path: Path) -> None:
    """A folder with one recording and one broken file: needs, the broken one's sentence, the next view, the page."""
    watched = tmp_path / "watched"
    watched.mkdir()
    shutil.copy(bench / "first.h5", watched)
    (watched / "broken.h5").write_text("no recording")
    result = run("guide", watched, "--target", bench / "board.target.json", "--once", "--out", tmp_path / "page")
    assert result.returncode == 0, result.stderr
    assert "2 views from 1 recordings" in result.stdout
    assert "2 of 6 at least" in result.stdout
    assert "expected an HDF5 recording" in result.stdout
    assert "Next: the board" in result.stdout
    assert "Next: the board" in (tmp_path / "page" / "report.html").read_text()


def test_a_watch_looks_again_only_at_what_changed(bench: Path, tmp_path: Path) -> None:
    """A new recording adds its view; a file that became readable is read; one that did not change is not."""
    watch = Watch(tmp_path, load_target(bench / "board.target.json"), None)
    assert not watch.update()
    (tmp_path / "second.h5").write_text("being written")
    shutil.copy(bench / "first.h5", tmp_path)
    assert watch.update()
    assert len(watch.guidance().stands) == 2
    assert [path.name for path in watch.refusals] == ["second.h5"]
    looked = watch.looks[tmp_path / "first.h5"]
    shutil.copy(bench / "second.h5", tmp_path)
    assert watch.update()
    assert len(watch.guidance().stands) == 3
    assert not watch.refusals
    assert watch.looks[tmp_path / "first.h5"] is looked
    assert not watch.update()


def test_one_recording_can_be_guided_by(bench: Path) -> None:
    """With the module that it names."""
    result = run("guide", bench / "second.h5", "--target", bench / "board.target.json", "--once")
    assert result.returncode == 0, result.stderr
    assert "1 views from 1 recordings" in result.stdout


def test_refusals(bench: Path, tmp_path: Path) -> None:
    """No such folder, no module known, a senseless interval."""
    target = ("--target", bench / "board.target.json")
    assert_refused(
        run("guide", tmp_path / "none", *target, "--once"), "a folder or a recording is required, found neither"
    )
    (tmp_path / "a.txt").write_text("no recording")
    assert_refused(run("guide", tmp_path / "a.txt", *target, "--once"), "expected an HDF5 recording")
    assert_refused(run("guide", tmp_path, *target, "--once"), "--module with a nominal module is required")
    assert_refused(run("guide", tmp_path, *target, "--every-s", 0), "0.1 to 600 is required, got 0")
