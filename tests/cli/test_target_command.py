"""`hybridtrack target` as a user meets it."""

from pathlib import Path

import pytest

from hybridtrack.module import load_target
from tests.cli.test_commands import EXAMPLES, PANEL, assert_refused, run

SCREEN = EXAMPLES / "bench_screen.target.json"


def test_a_shuttered_board_becomes_sheet_page_and_file(tmp_path: Path) -> None:
    """True size on the smallest sheet; the file says what the example says; the last line is the page."""
    result = run("target", PANEL, "--out", tmp_path)
    assert result.returncode == 0, result.stderr
    names = {path.name for path in tmp_path.iterdir()}
    assert names == {"sheet-A3.svg", "sheet-A3.pdf", "printed.target.json", "screen.html"}
    assert load_target(tmp_path / "printed.target.json") == load_target(PANEL)
    assert result.stdout.strip().splitlines()[-1] == str(tmp_path / "screen.html")
    assert "seizures" in result.stdout


def test_scaled_squares_and_a_measured_ruler_go_into_the_file(tmp_path: Path) -> None:
    """--fit and --ruler-measured-mm change square_m, and nothing else."""
    result = run("target", PANEL, "--sheet", "A4", "--fit", "--ruler-measured-mm", "99.5", "--out", tmp_path)
    assert result.returncode == 0, result.stderr
    made = load_target(tmp_path / "printed.target.json")
    assert made.square_xy_m[0] == pytest.approx(0.0213 * 0.995)
    assert made.model_copy(update={"square_m": 0.03}) == load_target(PANEL)


def test_frames_and_film_for_a_display(tmp_path: Path) -> None:
    """One picture a refresh, and the file says the rate and size shown."""
    options = ("--display-hz", 144, "--screen-px", "640x400", "--pixel-mm", 0.3, "--seconds", 0.2)
    result = run("target", SCREEN, *options, "--out", tmp_path)
    assert result.returncode == 0, result.stderr
    assert sorted(path.name for path in (tmp_path / "screen").iterdir()) == ["refresh_00.png", "refresh_01.png"]
    assert (tmp_path / "screen.mp4").stat().st_size > 1000
    made = load_target(tmp_path / "screen.target.json")
    assert (made.blink_hz, made.square_m) == (72.0, pytest.approx(40 * 0.3e-3))


@pytest.mark.parametrize(
    ("arguments", "words"),
    [
        ((PANEL, "--sheet", "A4"), "squares of 21.3 mm would fit"),
        ((PANEL, "--sheet", "A3", "--orientation", "portrait"), "sheet A3 portrait"),
        ((PANEL, "--display-hz", 60), "risk band of 3 to 30 Hz"),
        ((PANEL, "--fit"), "--fit: --sheet with one of A4, A3, A2 is required"),
        ((PANEL, "--square-mm", 900), "--square-mm: 1 to 500 is required, got 900"),
        ((PANEL, "--ruler-measured-mm", 20), "within a tenth of 200 mm is required, got 20"),
        ((PANEL, "--display-hz", 144, "--screen-px", "wide"), "WIDTHxHEIGHT in pixels is required, got 'wide'"),
        ((SCREEN, "--sheet", "A2"), "shuttered board is required"),
    ],
)
def test_refusals_leave_nothing(tmp_path: Path, arguments: tuple[object, ...], words: str) -> None:
    """One sentence, exit code 2, no folder."""
    assert_refused(run("target", *arguments, "--out", tmp_path / "out"), words)
    assert not (tmp_path / "out").exists()
