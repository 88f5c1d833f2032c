"""The command line as a user meets it: help that teaches, refusals in one sentence with exit code 2."""

import contextlib
import io
import subprocess
import sys
from dataclasses import dataclass
from pathlib import Path

import numpy as np
import pytest

from hybridtrack.cli.main import main
from hybridtrack.recording import Recording, RecordingWriter

EXAMPLES = Path(__file__).parents[2] / "calib_targets"
WREN = EXAMPLES / "wren.module.json"
PANEL = EXAMPLES / "lamp_panel.target.json"


@dataclass(frozen=True)
class Outcome:
    """What a command printed and how it ended."""

    returncode: int
    stdout: str
    stderr: str


def run(*arguments: object) -> Outcome:
    """Run `hybridtrack` as its console script does, in this process."""
    out, err, code = io.StringIO(), io.StringIO(), 0
    with pytest.MonkeyPatch.context() as patch, contextlib.redirect_stdout(out), contextlib.redirect_stderr(err):
        patch.setattr(sys, "argv", ["hybridtrack", *map(str, arguments)])
        try:
            main()
        except SystemExit as end:
            code = end.code if isinstance(end.code, int) else int(end.code is not None)
    return Outcome(code, out.getvalue(), err.getvalue())


def assert_refused(result: Outcome, words: str) -> None:
    """Exit code 2, one line on standard error, after the lines that name the stages, and no traceback."""
    assert result.returncode == 2, result.stderr
    last = result.stderr.strip().splitlines()[-1]
    assert last.startswith("hybridtrack: ")
    assert words in last
    assert "Traceback" not in result.stderr


def still_scene(path: Path, seconds: float = 2.0) -> None:
    """A recording of background noise and grey frames: a healthy module before a wall, no board, no blinking."""
    rng = np.random.default_rng(1)
    count = int(60_000 * seconds)
    t = np.sort(rng.integers(0, int(seconds * 1e9), count))
    with RecordingWriter(path) as writer:
        writer.append_events(t, rng.integers(0, 320, count), rng.integers(0, 200, count), rng.integers(0, 2, count))
        frames = int(60 * seconds)
        images = np.full((frames, 400, 640), 60, np.uint8) + rng.integers(0, 3, (frames, 1, 1)).astype(np.uint8)
        stamps = np.arange(frames) * 16_666_667
        writer.append_frames(images, stamps, np.full(frames, 4_000_000), np.arange(frames, dtype=np.uint64))


@pytest.fixture
def damaged(tmp_path: Path) -> dict[str, Path]:
    """A truncated, an empty, a mislabelled and a missing recording."""
    whole = tmp_path / "whole.h5"
    with RecordingWriter(whole) as writer:
        count = 20_000
        writer.append_events(np.arange(count), np.arange(count) % 9, np.arange(count) % 7, np.arange(count) % 2)
    (tmp_path / "truncated.h5").write_bytes(whole.read_bytes()[: whole.stat().st_size // 3])
    with RecordingWriter(tmp_path / "empty.h5"):
        pass
    (tmp_path / "mislabelled.h5").write_text("t,x,y,p\n1,2,3,4\n")
    names = ("truncated", "empty", "mislabelled", "missing")
    return {name: tmp_path / f"{name}.h5" for name in names}


def test_the_console_script_answers() -> None:
    """A process of its own: help on standard output, a refusal on standard error with exit code 2."""
    command = [sys.executable, "-c", "from hybridtrack.cli.main import main; main()"]
    shown = subprocess.run([*command, "--help"], capture_output=True, text=True, check=True)
    assert "calibrate" in shown.stdout
    refused = subprocess.run([*command, "inspect", "none.h5"], capture_output=True, text=True, check=False)
    assert refused.returncode == 2
    assert refused.stderr == "hybridtrack: none.h5: expected a recording (HDF5), found no such file\n"


def test_help_teaches() -> None:
    """Every command is listed with what it is for."""
    text = run("--help").stdout
    assert all(word in text for word in ("inspect", "ingest", "calibrate", "track", "odometry", "demo", "bench"))


@pytest.mark.parametrize("name", ["truncated", "mislabelled", "missing"])
def test_inspect_refuses_what_it_cannot_read(damaged: dict[str, Path], name: str) -> None:
    """One sentence that names the file."""
    assert_refused(run("inspect", damaged[name]), f"{name}.h5")


def test_inspect_reports_an_empty_recording(damaged: dict[str, Path]) -> None:
    """Nothing in it is a finding, and looking at it succeeds."""
    result = run("inspect", damaged["empty"])
    assert result.returncode == 0
    assert "holds no events" in result.stdout


def test_ingest_then_inspect(tmp_path: Path) -> None:
    """A table becomes a recording, and the last line is where it is."""
    (tmp_path / "e.csv").write_text("t,x,y,p\n" + "".join(f"{i},{i % 5},{i % 3},{i % 2}\n" for i in range(500)))
    result = run("ingest", tmp_path / "e.h5", "--events", tmp_path / "e.csv", "--time-unit", "ms")
    assert result.returncode == 0, result.stderr
    assert result.stdout.strip().splitlines()[-1] == str(tmp_path / "e.h5")
    with Recording.open(tmp_path / "e.h5") as recording:
        assert recording.event_count == 500
    assert run("inspect", tmp_path / "e.h5", "--out", tmp_path / "look").returncode == 0
    assert (tmp_path / "look" / "report.html").stat().st_size > 1000


def test_a_bad_option_names_itself(tmp_path: Path) -> None:
    """The sentence names the option, what it takes and what it got."""
    (tmp_path / "e.csv").write_text("1,2,3,1\n")
    result = run("ingest", tmp_path / "e.h5", "--events", tmp_path / "e.csv", "--time-unit", "fortnight")
    assert_refused(result, "one of s, ms, us, ns is required, got 'fortnight'")
    assert not (tmp_path / "e.h5").exists()


COMMANDS = {
    "calibrate": ("--target", PANEL, "--module", WREN),
    "track": ("--module", WREN),
    "odometry": ("--module", WREN),
}


@pytest.mark.parametrize("command", COMMANDS)
@pytest.mark.parametrize("name", ["truncated", "empty", "mislabelled", "missing"])
def test_estimators_refuse_damaged_recordings(
    damaged: dict[str, Path], tmp_path: Path, command: str, name: str
) -> None:
    """One sentence, exit code 2, and no output folder."""
    result = run(command, damaged[name], *COMMANDS[command], "--out", tmp_path / "out")
    assert_refused(result, "")
    assert not (tmp_path / "out").exists()


def test_a_recording_with_no_blinking_is_refused(tmp_path: Path) -> None:
    """The sentence says what was looked for, and nothing is left behind."""
    still_scene(tmp_path / "still.h5")
    result = run("calibrate", tmp_path / "still.h5", *COMMANDS["calibrate"], "--out", tmp_path / "out")
    assert_refused(result, "blink")
    assert not (tmp_path / "out").exists()


def test_an_uncalibrated_module_is_refused_for_tracking(tmp_path: Path) -> None:
    """Tracks need the clocks, paths need the lens: the sentence names the field that is null."""
    still_scene(tmp_path / "still.h5", seconds=0.5)
    for command in ("track", "odometry"):
        result = run(command, tmp_path / "still.h5", "--module", WREN, "--out", tmp_path / "out")
        assert_refused(result, "is null")
    assert not (tmp_path / "out").exists()


def test_a_frame_size_that_is_not_the_modules_is_refused(tmp_path: Path) -> None:
    """The sentence gives both sizes."""
    still_scene(tmp_path / "still.h5", seconds=0.5)
    text = WREN.read_text().replace('"width": 640', '"width": 320')
    (tmp_path / "other.module.json").write_text(text)
    result = run(
        "calibrate",
        tmp_path / "still.h5",
        "--target",
        PANEL,
        "--module",
        tmp_path / "other.module.json",
        "--out",
        tmp_path / "o",
    )
    assert_refused(result, "640x400")
