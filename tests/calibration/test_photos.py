"""The lens from ordinary photographs, against a published solution and against OpenCV."""

from functools import cache
from pathlib import Path

import cv2
import numpy as np
import pytest

from hybridtrack.calibration.bundle import Scene, ViewPoints, adjust_poses, whitening
from hybridtrack.calibration.photos import calibrate_photos, find_photo_corners, photo_files
from hybridtrack.errors import BoardNotFoundError, MissingFileError, OptionError
from hybridtrack.geometry import PerspectiveLens

# Where Debian's package opencv-doc puts its example pictures.
FOLDER = Path("/usr/share/doc/opencv-doc/examples/data")
# Its left_intrinsics.yml, solved by others from the same 13 pictures (fx = fy enforced, five distortion terms).
PUBLISHED = PerspectiveLens(535.91573396163199, 535.91573396163199, 342.28315473308373, 235.57082909788173,
                            (-0.26637260909660682, -0.038588898922304653, 0.23839153080878486),
                            (0.0017831947042852964, -0.00028122100441115472))  # fmt: skip


def left_photos() -> list[Path]:
    """The 13 left photographs, or a skip that says what is missing."""
    files = sorted(FOLDER.glob("left[0-9][0-9].jpg"))
    if len(files) != 13:
        pytest.skip(f"the 13 board photographs of Debian's package opencv-doc are not in {FOLDER}")
    return files


@cache
def calibrated(model):
    """Our calibration from the 13 photographs."""
    return calibrate_photos(left_photos(), 9, 6, 0.025, model)


def view_points(result):
    """Corners of all photographs, equally weighted."""
    views = []
    for photo in result.photos:
        board = np.concatenate([photo.ij * 0.025, np.zeros((len(photo.ij), 1))], axis=1)
        views.append(ViewPoints(board, photo.uv, whitening(np.tile(np.eye(2), (len(photo.ij), 1, 1)))))
    return views


@pytest.mark.outside
def test_focal_length_agrees_with_the_published_solution():
    """Within 1 % of left_intrinsics.yml, with all 13 boards found."""
    result = calibrated(None)
    assert len(result.photos) == 13
    assert result.lens_fit.lens.fx == pytest.approx(PUBLISHED.fx, rel=0.01)
    assert result.lens_fit.lens.fy == pytest.approx(PUBLISHED.fy, rel=0.01)


@pytest.mark.outside
def test_residual_is_no_worse_than_the_published_solutions():
    """On the same corners, the published lens with its poses adjusted leaves no less than ours."""
    result = calibrated(None)
    theirs = adjust_poses(Scene(PUBLISHED, result.lens_fit.camera_from_board), view_points(result))
    assert result.lens_fit.rms_px <= np.sqrt(np.mean(np.concatenate(theirs.residuals) ** 2))


@pytest.mark.outside
@pytest.mark.parametrize(("model", "flags"), [(None, "chosen"), ("k1k2k3p", "five")])
def test_focal_length_and_residual_agree_with_opencv(model, flags):
    """Within 0.1 % and no worse, on the same corners and with the same terms (cv2.calibrateCamera)."""
    result = calibrated(model)
    chosen = {name.removeprefix("lens.") for name in result.lens_fit.parameters}
    fixed = 0 if "k3" in chosen else cv2.CALIB_FIX_K3
    fixed |= 0 if "k2" in chosen else cv2.CALIB_FIX_K2
    fixed |= 0 if "p1" in chosen else cv2.CALIB_ZERO_TANGENT_DIST
    rms, K, _, _, _ = cv2.calibrateCamera(
        [v.board_m.astype(np.float32) for v in view_points(result)],
        [v.uv.astype(np.float32)[:, None] for v in view_points(result)], result.size, None, None, flags=fixed,
        criteria=(cv2.TERM_CRITERIA_EPS | cv2.TERM_CRITERIA_COUNT, 300, 1e-14),
    )  # fmt: skip
    assert result.lens_fit.lens.fx == pytest.approx(K[0, 0], rel=1e-3)
    # OpenCV takes the corners as 32-bit floats.
    assert result.lens_fit.rms_px <= rms / np.sqrt(2.0) * (1 + 1e-6)


@pytest.mark.outside
def test_our_corners_fit_better_than_the_detectors():
    """The light model's corners leave less residual than the detector's own, under the same kind of fit."""
    result = calibrated("k1k2k3p")
    pictures = [cv2.imread(str(path), cv2.IMREAD_GRAYSCALE) for path in left_photos()]
    corners = [find_photo_corners(picture, 9, 6) for picture in pictures]
    board = np.concatenate([result.photos[0].ij * 0.025, np.zeros((54, 1))], axis=1).astype(np.float32)
    seen = [c.astype(np.float32)[:, None] for c in corners]
    rms, *_ = cv2.calibrateCamera([board] * 13, seen, result.size, None, None)
    assert result.lens_fit.rms_px < rms / np.sqrt(2.0)


def test_folders_that_are_missing_or_empty_are_refused(tmp_path):
    """One sentence each."""
    with pytest.raises(MissingFileError, match="a folder is required"):
        photo_files(tmp_path / "nowhere")
    with pytest.raises(MissingFileError, match="holds no picture"):
        photo_files(tmp_path)
    with pytest.raises(MissingFileError, match="does not exist"):
        photo_files([tmp_path / "a.png"])


def test_pictures_without_a_board_are_refused(tmp_path):
    """Three boards are required; what was found is said."""
    rng = np.random.default_rng(0)
    for k in range(3):
        cv2.imwrite(str(tmp_path / f"{k}.png"), rng.integers(0, 255, (60, 80)).astype(np.uint8))
    with pytest.raises(BoardNotFoundError, match="found in 0 of 3"):
        calibrate_photos(tmp_path, 9, 6, 0.025)


def test_boards_too_small_are_refused():
    """A board has at least three corners each way, and squares of some size."""
    with pytest.raises(OptionError, match="at least 3x3 inner corners"):
        calibrate_photos([], 2, 6, 0.025)
