"""Read frames from a video file or a folder of pictures, and their stamps from a table."""

from collections.abc import Iterator
from dataclasses import dataclass
from pathlib import Path

import cv2
import numpy as np

from hybridtrack.errors import FileFormatError, MissingFileError, OptionError
from hybridtrack.recording.arrays import Array

PICTURE_SUFFIXES = (".png", ".jpg", ".jpeg", ".tif", ".tiff", ".bmp", ".pgm", ".ppm")
STAMP_MEANINGS = {"start": 0.0, "mid": 0.5, "end": 1.0}


@dataclass(frozen=True)
class FrameStamps:
    """Start of exposure and exposure of each frame, int64 ns (N,)."""

    t_start_ns: Array
    exposure_ns: Array


def read_frame_stamps(path: Path | str, unit_ns: int, meaning: str, exposure_ns: int | None) -> FrameStamps:
    """Read a CSV table with a header naming `t` and, unless `exposure_ns` is given, `exposure`.

    `meaning` says what a stamp marks: start, mid or end of exposure; both columns are in the unit given.
    """
    file = Path(path)
    if not file.is_file():
        raise MissingFileError(f"{file}: expected a table of frame stamps, found no such file")
    if meaning not in STAMP_MEANINGS:
        raise OptionError(f"stamp: one of {', '.join(STAMP_MEANINGS)} is required, got '{meaning}'")
    try:
        table = np.atleast_1d(np.genfromtxt(file, delimiter=",", names=True, dtype=None, encoding="utf-8"))
    except ValueError as error:
        raise FileFormatError(f"{file}: a CSV with a header is required ({error})") from None
    names = table.dtype.names or ()
    if "t" not in names or not len(table):
        raise FileFormatError(f"{file}: column 't' and at least one row are required, got columns {names or 'none'}")
    stamps = table["t"]
    if "exposure" in names:
        exposure = np.rint(table["exposure"] * float(unit_ns)).astype(np.int64)
    elif exposure_ns is not None:
        exposure = np.full(len(stamps), exposure_ns, np.int64)
    else:
        raise FileFormatError(f"{file}: column 'exposure' is required where no exposure is given, got columns {names}")
    t = stamps * unit_ns if stamps.dtype.kind in "iu" else np.rint(stamps * float(unit_ns))
    start = t.astype(np.int64) - np.rint(STAMP_MEANINGS[meaning] * exposure).astype(np.int64)
    if np.any(np.diff(start) <= 0):
        row = int(np.argmax(np.diff(start) <= 0)) + 2
        raise FileFormatError(f"{file}: frame stamps must rise, and do not at row {row}")
    return FrameStamps(start, exposure)


def _picture_files(folder: Path) -> list[Path]:
    files = sorted(file for file in folder.iterdir() if file.suffix.lower() in PICTURE_SUFFIXES)
    if not files:
        raise FileFormatError(f"{folder}: pictures ({', '.join(PICTURE_SUFFIXES)}) are required, found none")
    return files


def _to_rgb(image: Array) -> Array:
    return image if image.ndim == 2 else cv2.cvtColor(image, cv2.COLOR_BGR2RGB)


def _folder_frames(folder: Path) -> Iterator[Array]:
    for file in _picture_files(folder):
        image = cv2.imread(str(file), cv2.IMREAD_UNCHANGED)
        if image is None or image.dtype not in (np.uint8, np.uint16):
            raise FileFormatError(f"{file}: an 8 or 16 bit picture is required, and it can't be read as one")
        yield _to_rgb(image if image.ndim == 2 else image[..., :3])


def _video_frames(file: Path) -> Iterator[Array]:
    video = cv2.VideoCapture(str(file))
    try:
        count = 0
        while True:
            good, image = video.read()
            if not good:
                break
            count += 1
            yield _to_rgb(image)
        if not count:
            raise FileFormatError(f"{file}: a video is required, and no frame of it can be read")
    finally:
        video.release()


def frame_pictures(path: Path | str, grey: bool) -> Iterator[Array]:
    """Yield the pictures of a video file, or of a folder in the order of their names, as stored: grey or RGB.

    `grey` reduces colour pictures to one channel. Raises MissingFileError or FileFormatError.
    """
    source = Path(path)
    if not source.exists():
        raise MissingFileError(f"{source}: expected a video or a folder of pictures, found neither")
    for image in _folder_frames(source) if source.is_dir() else _video_frames(source):
        yield cv2.cvtColor(image, cv2.COLOR_RGB2GRAY) if grey and image.ndim == 3 else image


def video_frame_rate(path: Path | str) -> float:
    """Frames per second that a video file states. Raises FileFormatError where it states none."""
    video = cv2.VideoCapture(str(path))
    rate = float(video.get(cv2.CAP_PROP_FPS))
    video.release()
    if not np.isfinite(rate) or rate <= 0:
        raise FileFormatError(f"{path}: a frame rate is required, and the file states none; give a table of stamps")
    return rate
