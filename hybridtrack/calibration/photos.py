"""The lens alone, from ordinary photographs of a printed checker board.

One detector finds the boards (sector-based, Duda and Frese 2018; another might start at the opposite end of a board, so
that they are never mixed). The crossings are then fitted with the light model of `corners`, twice: under a first lens,
and under the one that this gives. All corners count alike in the fit: how flat paper lies, not noise, limits them.
"""

from collections import Counter
from collections.abc import Callable, Sequence
from dataclasses import dataclass, field, replace
from pathlib import Path

import cv2
import numpy as np

from hybridtrack.calibration.bundle import ViewPoints, whitening
from hybridtrack.calibration.corners import refine_boards
from hybridtrack.calibration.lens_fit import fit_view_points
from hybridtrack.calibration.view_data import BoardCorners, LensFit, ViewImages
from hybridtrack.errors import BoardNotFoundError, MissingFileError, OptionError
from hybridtrack.module import Cluster, ColourArray, EventGrid, FrameMode, HybridModule, Target

Array = np.ndarray
Progress = Callable[[str, float], None]

SUFFIXES = (".jpg", ".jpeg", ".png", ".tif", ".tiff", ".bmp", ".webp")
_LEAST_PHOTOS = 3
_CORNER_SIGMA_PX = 0.1
_FIRST_MODEL = "k1k2"


@dataclass(frozen=True)
class PhotoBoard:
    """One photograph with its board: corners `uv` (N, 2) px, indices `ij` (N, 2) from 1, pose, and RMS residual px."""

    path: Path
    ij: Array
    uv: Array
    camera_from_board: Array
    rms_px: float


@dataclass(frozen=True)
class PhotoCalibration:
    """A lens from photographs of `size` (width, height). `skipped`: files without a board, and why."""

    size: tuple[int, int]
    lens_fit: LensFit
    photos: list[PhotoBoard]
    skipped: list[tuple[Path, str]]
    findings: list[str] = field(default_factory=list)


def photo_files(source: Path | str | Sequence[Path | str]) -> list[Path]:
    """The pictures in a folder, by name; or the given files. Raises MissingFileError."""
    if isinstance(source, str | Path):
        folder = Path(source)
        if not folder.is_dir():
            raise MissingFileError(f"photographs: a folder is required, and {folder} is none")
        files = sorted(path for path in folder.iterdir() if path.suffix.lower() in SUFFIXES)
        if not files:
            raise MissingFileError(f"photographs: {folder} holds no picture ({', '.join(SUFFIXES)})")
        return files
    files = [Path(path) for path in source]
    missing = [path for path in files if not path.is_file()]
    if missing:
        raise MissingFileError(f"photographs: {missing[0]} does not exist")
    return files


def _board_target(columns: int, rows: int, square_m: float | tuple[float, float]) -> Target:
    """The printed board as a target. Its squares do not blink, so that a target's rule of even and odd does not
    bind."""
    return Target.model_construct(
        kind="shuttered_checker", columns=columns + 1, rows=rows + 1, square_m=square_m, blink_hz=1.0, duty=0.5,
        steady_dark=[], square_sigma_m=None, flatness_sigma_m=None,
    )  # fmt: skip


def _photo_module(size: tuple[int, int]) -> HybridModule:
    """A camera without event pixels, one frame pixel a colour pixel."""
    width, height = size
    return HybridModule(
        colour_array=ColourArray(width=width, height=height), cluster=Cluster(width=1, height=1),
        event_grid=EventGrid(width=1, height=1), frame_mode=FrameMode(width=width, height=height),
    )  # fmt: skip


def find_photo_corners(picture: Array, columns: int, rows: int) -> Array | None:
    """Inner corners (columns * rows, 2) px, row by row, of the board in a grey `picture`; None where none is seen."""
    flags = cv2.CALIB_CB_NORMALIZE_IMAGE | cv2.CALIB_CB_EXHAUSTIVE | cv2.CALIB_CB_ACCURACY
    found, corners = cv2.findChessboardCornersSB(picture, (columns, rows), flags=flags)
    return corners.reshape(-1, 2).astype(float) if found else None


def _as_view(index: int, picture: Array) -> ViewImages:
    """A photograph as a view whose dark state is black."""
    grey, empty = picture.astype(float), np.zeros((1, 1))
    nothing = np.zeros(grey.shape)
    return ViewImages(index, 0, 0, np.zeros(0), grey, nothing, nothing, nothing, empty, empty, empty, empty, 0)


def _equal_weights(board: BoardCorners) -> BoardCorners:
    return replace(board, covariance=np.tile(_CORNER_SIGMA_PX**2 * np.eye(2), (len(board.ij), 1, 1)))


def _fit(boards: list[BoardCorners], target: Target, size: tuple[int, int], model: str | None) -> LensFit:
    corners = target.corners_m()
    views = [ViewPoints(corners[b.ij[:, 1] - 1, b.ij[:, 0] - 1], b.uv, whitening(b.covariance)) for b in boards]
    return fit_view_points(views, np.array([b.view for b in boards]), size, model)


def _read_pictures(files: list[Path], skipped: list[tuple[Path, str]]) -> list[tuple[Path, Array]]:
    """Grey pictures of the commonest size."""
    pictures = []
    for path in files:
        picture = cv2.imread(str(path), cv2.IMREAD_GRAYSCALE)
        if picture is None:
            skipped.append((path, "is no picture that can be read"))
        else:
            pictures.append((path, picture))
    if not pictures:
        return []
    shape = Counter(picture.shape for _, picture in pictures).most_common(1)[0][0]
    for path, picture in pictures:
        if picture.shape != shape:
            skipped.append((path, f"has {picture.shape[1]}x{picture.shape[0]} px, the others {shape[1]}x{shape[0]}"))
    return [(path, picture) for path, picture in pictures if picture.shape == shape]


def _find_all(
    pictures: list[tuple[Path, Array]], columns: int, rows: int, skipped: list[tuple[Path, str]], tell: Progress
) -> list[BoardCorners]:
    ij = np.stack(np.meshgrid(np.arange(1, columns + 1), np.arange(1, rows + 1)), axis=-1).reshape(-1, 2)
    boards = []
    for k, (path, picture) in enumerate(pictures):
        uv = find_photo_corners(picture, columns, rows)
        tell("corners", (k + 1) / len(pictures))
        if uv is None:
            skipped.append((path, f"shows no board of {columns}x{rows} inner corners"))
        else:
            unknown = np.full((len(uv), 2), np.nan)
            boards.append(_equal_weights(BoardCorners(k, ij, uv, np.zeros((len(uv), 2, 2)), unknown, True)))
    return boards


def _results(boards: list[BoardCorners], fit: LensFit, files: list[Path]) -> list[PhotoBoard]:
    out = []
    for board, pose in zip(boards, fit.camera_from_board, strict=True):
        error = fit.residuals_px[fit.residual_view == board.view]
        rms = float(np.sqrt(np.mean(error**2))) if len(error) else float("nan")
        out.append(PhotoBoard(files[board.view], board.ij, board.uv, pose, rms))
    return out


def calibrate_photos(
    source: Path | str | Sequence[Path | str],
    columns: int,
    rows: int,
    square_m: float | tuple[float, float],
    model: str | None = None,
    progress: Progress | None = None,
) -> PhotoCalibration:
    """Calibrate a lens from photographs of a board with `columns` x `rows` inner corners and squares of `square_m`.

    `source` is a folder or a list of files. `model` is one of `lens_choice.MODELS`, or None to choose by held-out
    error. Raises OptionError, MissingFileError, BoardNotFoundError, DegenerateDataError."""
    if min(columns, rows) < 3 or np.min(square_m) <= 0:
        raise OptionError(
            f"photographs: a board of at least 3x3 inner corners and squares of positive size are required, got "
            f"{columns}x{rows} and {square_m} m"
        )
    tell = progress or (lambda stage, fraction: None)
    skipped: list[tuple[Path, str]] = []
    pictures = _read_pictures(photo_files(source), skipped)
    boards = _find_all(pictures, columns, rows, skipped, tell)
    if len(boards) < _LEAST_PHOTOS:
        raise BoardNotFoundError(
            f"photographs: a board of {columns}x{rows} inner corners is required in at least {_LEAST_PHOTOS}, and was "
            f"found in {len(boards)} of {len(pictures)}"
        )
    size = (pictures[0][1].shape[1], pictures[0][1].shape[0])
    target, module = _board_target(columns, rows, square_m), _photo_module(size)
    views = [_as_view(board.view, pictures[board.view][1]) for board in boards]
    for k in range(2):
        tell("lens", 0.4 * k)
        rough = _fit(boards, target, size, _FIRST_MODEL)
        boards = [_equal_weights(b) for b in refine_boards(views, boards, rough, target, module)]
    fit = _fit(boards, target, size, model)
    tell("lens", 1.0)
    findings = [f"{path.name} {why}, and was left out" for path, why in skipped]
    return PhotoCalibration(size, fit, _results(boards, fit, [path for path, _ in pictures]), skipped,
                            findings + fit.findings)  # fmt: skip
