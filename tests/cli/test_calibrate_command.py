"""`hybridtrack calibrate` on one recording, on two, on a lot, and against limits."""

import csv
import json
import sys
from dataclasses import replace
from pathlib import Path

import pytest

from hybridtrack.module import load_module, save_module, save_target
from tests.cli.test_commands import PANEL, WREN, assert_refused, run

sys.path.insert(0, str(Path(__file__).parents[1] / "calibration"))

from ideal_board import Scene, nominal_of, record, small_module, tilted_poses


@pytest.fixture(scope="module")
def bench(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """Two recordings of one small module, its nominal description, the target, and a broken file."""
    folder = tmp_path_factory.mktemp("bench")
    scene = Scene(module=small_module(), noise_dn=1.0, quantise=True, background_hz=0.3, view_s=0.4)
    (folder / "lot").mkdir()
    for name, seed in (("lot/a", 20), ("b", 21)):
        record(replace(scene, poses=tilted_poses(4, seed), seed=seed), folder / f"{name}.h5")
    (folder / "lot" / "c.h5").write_text("no recording")
    save_module(nominal_of(scene.module), folder / "nominal.module.json")
    save_target(scene.target, folder / "board.target.json")
    (folder / "line.toml").write_text("[lens.fx]\nmin = 395\nmax = 405\n[timing.line_time_ns]\nmax = 29_000\n")
    return folder


def test_two_recordings_are_compared_and_held_against_limits(bench: Path, tmp_path: Path) -> None:
    """The first one's files as for one recording; differences in deviations in summary and page; a limit that fails
    makes exit code 1.
    """
    result = run(
        "calibrate", bench / "lot" / "a.h5", bench / "b.h5", "--target", bench / "board.target.json",
        "--module", bench / "nominal.module.json", "--limits", bench / "line.toml", "--lens-model", "k1k2",
        "--out", tmp_path,
    )  # fmt: skip
    assert result.returncode == 1, result.stderr
    assert load_module(tmp_path / "calibrated.module.json").is_calibrated
    assert load_module(tmp_path / "second" / "calibrated.module.json").is_calibrated
    plain = json.loads((tmp_path / "summary.json").read_text())
    focal = plain["repeatability"]["numbers"]["lens.fx"]
    other = json.loads((tmp_path / "second" / "summary.json").read_text())
    assert focal["second"] == pytest.approx(other["numbers"]["lens.fx"]["value"])
    assert abs(focal["deviations"]) < 5
    assert plain["limits"]["numbers"]["lens.fx"]["passed"] is True
    assert plain["limits"]["numbers"]["timing.line_time_ns"]["reason"] == "not below max"
    page = (tmp_path / "report.html").read_text()
    assert "Repeatability" in page
    assert "FAIL: not below max" in page
    assert result.stdout.strip().splitlines()[-1] == str(tmp_path / "report.html")


def test_a_lot_goes_on_after_a_refusal(bench: Path, tmp_path: Path) -> None:
    """A folder of two, one broken: one calibrated, the other one's sentence in the table, exit code 1."""
    result = run(
        "calibrate", bench / "lot", "--batch", "--target", bench / "board.target.json",
        "--module", bench / "nominal.module.json", "--lens-model", "k1k2", "--out", tmp_path,
    )  # fmt: skip
    assert result.returncode == 1, result.stderr
    rows = {row["recording"]: row for row in csv.DictReader((tmp_path / "batch.csv").read_text().splitlines())}
    assert [rows[name]["state"] for name in "ac"] == ["calibrated", "refused"]
    assert "expected an HDF5 recording" in rows["c"]["reason"]
    assert float(rows["a"]["lens.fx"]) == load_module(tmp_path / "a" / "calibrated.module.json").lens.fx  # type: ignore[union-attr]
    assert (tmp_path / "report.html").stat().st_size > 1000
    assert not (tmp_path / "c").exists()


def test_what_can_not_be_compared_is_refused(bench: Path, tmp_path: Path) -> None:
    """The same recording twice, three without --batch, an unknown number, photographs too: nothing is written."""
    first = bench / "lot" / "a.h5"
    common = (
        "--target",
        bench / "board.target.json",
        "--module",
        bench / "nominal.module.json",
        "--out",
        tmp_path / "o",
    )
    assert_refused(run("calibrate", first, first, *common), "two recordings are required for repeatability")
    assert_refused(run("calibrate", first, first, first, *common), "two to compare, or --batch is required, got 3")
    (tmp_path / "bad.toml").write_text("[lens.focal]\nmin = 1\n")
    refused = run("calibrate", first, "--limits", tmp_path / "bad.toml", *common)
    assert_refused(refused, "got 'lens.focal'; known are lens.fx, lens.fy")
    assert_refused(run("calibrate", "--photos", tmp_path, "--batch"), "--photos are required, got both")
    assert_refused(run("calibrate", tmp_path, "--batch", "--target", PANEL, "--module", WREN), "folders of *.h5")
    assert not (tmp_path / "o").exists()
