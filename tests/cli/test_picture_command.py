"""`hybridtrack picture` from end to end: files, sentences, exit codes."""

import json
from pathlib import Path

import cv2
import numpy as np
import pytest

from hybridtrack.cli.picture_command import clip_instants_ns, flash_findings, instant_ns
from hybridtrack.errors import OptionError
from hybridtrack.module import ColourFromEvent, Contrast, HybridModule, Timing, nominal_matrix, save_module
from hybridtrack.recording import RecordingWriter
from tests.cli.test_commands import assert_refused, run

PERIOD_NS, EXPOSURE_NS, FRAMES = 16_000_000, 4_000_000, 4
GRID = (40, 60)


def small_module() -> HybridModule:
    """A calibrated module of 240 x 160 colour px."""
    rows, columns = GRID
    module = HybridModule.model_validate(
        {
            "name": "small",
            "colour_array": {"width": 4 * columns, "height": 4 * rows},
            "cluster": {"width": 4, "height": 4, "clear_site": [2, 2]},
            "event_grid": {"width": columns, "height": rows},
            "frame_mode": {"width": 2 * columns, "height": 2 * rows, "binning": 2},
            "defects": {"hot": [[3, 4]], "dead": [[5, 6]]},
        }
    )
    matrix = tuple(map(tuple, nominal_matrix(module.cluster, module.event_grid).tolist()))
    return module.model_copy(
        update={
            "colour_from_event": ColourFromEvent(matrix=matrix),
            "timing": Timing(frame_offset_ns=0.0, line_time_ns=10_000.0),
            "contrast": Contrast(on_threshold=0.1, off_threshold=0.1),
        }
    )


@pytest.fixture(scope="module")
def folder(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """A room in which light rises by e from 10 to 50 ms; the module that saw it; the same with events lost."""
    made = tmp_path_factory.mktemp("picture")
    module = small_module()
    save_module(module, made / "small.module.json")
    rows, columns = GRID
    starts = 1_000_000 + PERIOD_NS * np.arange(FRAMES)
    middle_s = (starts[:, None] + 0.5 * EXPOSURE_NS + 10_000 * np.arange(2 * rows)) * 1e-9
    light = 60.0 * np.exp(np.clip((middle_s - 0.01) / 0.04, 0.0, 1.0))
    images = np.repeat(np.rint(light)[..., None], 2 * columns, axis=2).astype(np.uint8)
    images[:, :2, :2] = 255
    t = np.repeat(10_000_000 + 4_000_000 * np.arange(1, 11), rows * columns)
    y, x = (np.tile(axis.ravel(), 10).astype(np.uint16) for axis in np.mgrid[:rows, :columns])
    for name, lost in (("rise", None), ("lost", (24_000_000, 30_000_000))):
        with RecordingWriter(made / f"{name}.h5", module) as writer:
            writer.append_events(t, x, y, np.ones(len(t), np.uint8))
            writer.append_frames(images, starts, np.full(FRAMES, EXPOSURE_NS))
            if lost is not None:
                writer.set_group("events_lost", t0=np.array(lost[:1]), t1=np.array(lost[1:]))
    return made


def test_a_picture_of_one_instant(folder: Path, tmp_path: Path) -> None:
    """The PNG's grey, by the summary's levels, is log brightness; what is masked is said; the last line is the file."""
    at = "+0.0255"
    result = run(
        "picture",
        folder / "rise.h5",
        "--module",
        folder / "small.module.json",
        "--at",
        at,
        "--bits",
        16,
        "--out",
        tmp_path,
    )
    assert result.returncode == 0, result.stderr
    summary = json.loads((tmp_path / "summary.json").read_text())
    line = summary["pictures"][0]
    assert line["t_ns"] == 26_500_000
    assert line["frames"] == [1, 2]
    assert line["source"] == "both"
    grey = cv2.imread(str(tmp_path / line["file"]), cv2.IMREAD_UNCHANGED) / 65535.0
    log_light = line["log_light_black"] + grey * (line["log_light_white"] - line["log_light_black"])
    assert np.median(log_light) == pytest.approx(np.log(60 / 255) + 16.5 / 40, abs=0.03)
    assert line["saturated"] == 4
    assert "up to 4 frame pixels are saturated" in result.stdout
    assert "2 event pixels are hot or dead" in result.stdout
    assert result.stdout.strip().splitlines()[-1] == str(tmp_path / line["file"])


def test_a_clip(folder: Path, tmp_path: Path) -> None:
    """So many pictures a second from beginning to end, from the module that the recording carries."""
    result = run("picture", folder / "rise.h5", "--rate", 500, "--from", "0.02", "--to", "0.04", "--out", tmp_path)
    assert result.returncode == 0, result.stderr
    clip = json.loads((tmp_path / "summary.json").read_text())["clip"]
    assert clip["pictures"] == 11
    assert clip["sources"] == {"both": 11, "forward": 0, "backward": 0, "none": 0}
    film = cv2.VideoCapture(str(tmp_path / "clip.mp4"))
    assert film.get(cv2.CAP_PROP_FRAME_COUNT) == 11
    assert film.get(cv2.CAP_PROP_FPS) == pytest.approx(30.0)


def test_lost_events_refuse_a_picture_and_mark_a_clip(folder: Path, tmp_path: Path) -> None:
    """One sentence names the interval and nothing is left behind; the clip says which part of the time has none."""
    result = run("picture", folder / "lost.h5", "--at", "0.027", "--out", tmp_path / "none")
    assert_refused(
        result, "events are required from a frame up to the instant, got events lost from 0.024000 to 0.030000"
    )
    assert not (tmp_path / "none").exists()
    clip = run("picture", folder / "lost.h5", "--rate", 1000, "--from", "0.02", "--to", "0.04", "--out", tmp_path)
    assert clip.returncode == 0, clip.stderr
    assert "no picture at 7 of the instants from 0.024000 to 0.030000 s" in clip.stdout
    assert "rest on the frames of one side alone" in clip.stdout
    assert json.loads((tmp_path / "summary.json").read_text())["clip"]["sources"]["none"] == 7


def test_live_uses_complete_frames_only(folder: Path, tmp_path: Path) -> None:
    """Forward from the last frame whose rows are all read."""
    result = run("picture", folder / "rise.h5", "--at", "0.0375", "--live", "--out", tmp_path)
    assert result.returncode == 0, result.stderr
    summary = json.loads((tmp_path / "summary.json").read_text())
    assert summary["live"] is True
    assert summary["pictures"][0]["frames"] == [1]
    assert summary["pictures"][0]["source"] == "forward"


@pytest.mark.parametrize(
    ("options", "words"),
    [
        ((), "at least one of --at and --rate is required"),
        (("--at", "soon"), "--at: seconds are required, such as 0.35 or +0.35, got 'soon'"),
        (("--at", "9"), "is required, got 9.000000 s"),
        (("--rate", "0"), "--rate: pictures a second above zero are required, got 0"),
        (("--rate", "100", "--from", "0.03", "--to", "0.02"), "an end after the beginning is required"),
        (("--at", "0.02", "--bits", "12"), "--bits: 8 or 16 is required, got 12"),
        (("--rate", "100", "--shown-rate", "0"), "--shown-rate: 1 to 240 pictures a second are required, got 0"),
        (("--at", "0.02", "--module", "none.json"), "none.json"),
    ],
)
def test_refusals(folder: Path, tmp_path: Path, options: tuple[str, ...], words: str) -> None:
    """Exit code 2, one sentence that names the option, no folder."""
    assert_refused(run("picture", folder / "rise.h5", *options, "--out", tmp_path / "out"), words)
    assert not (tmp_path / "out").exists()


def test_a_threshold_map_that_is_named_and_missing_is_refused(folder: Path, tmp_path: Path) -> None:
    """Pictures are not made with other thresholds than the module file promises."""
    module = small_module()
    assert module.contrast is not None
    named = module.model_copy(update={"contrast": module.contrast.model_copy(update={"map_file": "gone.contrast.h5"})})
    save_module(named, tmp_path / "named.module.json")
    options = ("--module", tmp_path / "named.module.json", "--at", "0.02", "--out", tmp_path / "out")
    assert_refused(run("picture", folder / "rise.h5", *options), "gone.contrast.h5: expected the threshold map")


def test_instants_are_exact() -> None:
    """Seconds are read to the nanosecond even where a float would not hold them."""
    assert instant_ns("--at", "1700000000.123456789", 5) == 1_700_000_000_123_456_789
    assert instant_ns("--at", "+0.000000001", 5) == 6
    assert instant_ns("--at", "-0.5", 5) == -500_000_000
    with pytest.raises(OptionError, match="--to: seconds are required"):
        instant_ns("--to", "nan", 0)
    assert clip_instants_ns(3000.0, 7, 7 + 1_000_000).tolist() == [7, 333_340, 666_674, 1_000_007]


def test_help_teaches() -> None:
    """What it does, in which clock, with examples."""
    text = run("picture", "--help").stdout
    assert all(word in text for word in ("--at", "--rate", "--live", "event clock", "rolling shutter"))


def test_a_clip_that_flashes_carries_a_caution() -> None:
    """More than three flashes in a second, and not three."""
    assert flash_findings(3) == []
    assert "flashes up to 4 times in a second" in flash_findings(4)[0]
