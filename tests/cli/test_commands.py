"""The command line as a user meets it: help that teaches, refusals in one sentence with exit code 2."""

import subprocess
import sys
from pathlib import Path

import numpy as np
import pytest

from hybridtrack.recording import Recording, RecordingWriter


def run(*arguments: object) -> subprocess.CompletedProcess[str]:
    """Run `hybridtrack` in a process of its own."""
    command = [sys.executable, "-c", "from hybridtrack.cli.main import main; main()", *map(str, arguments)]
    return subprocess.run(command, capture_output=True, text=True, check=False)


def assert_refused(result: subprocess.CompletedProcess[str], words: str) -> None:
    """Exit code 2, one line on standard error, after the lines that name the stages, and no traceback."""
    assert result.returncode == 2, result.stderr
    last = result.stderr.strip().splitlines()[-1]
    assert last.startswith("hybridtrack: ")
    assert words in last
    assert "Traceback" not in result.stderr


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
