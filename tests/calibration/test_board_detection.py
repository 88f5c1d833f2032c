"""The board in one rendered picture."""

import numpy as np
import pytest
from rendered_boards import counterphase_set, shuttered_set

from hybridtrack.calibration.board_detection import Detection, detect_board, difference_picture


@pytest.mark.parametrize("found", [shuttered_set, counterphase_set])
def test_boards_are_found_and_named(found):
    """Every corner found is the one it is named, within a few colour pixels of its true place."""
    rendered = found()
    mode = rendered.layout.module().frame_mode
    for view in rendered.views:
        detection = detect_board(difference_picture(view), rendered.scene.target)
        assert isinstance(detection, Detection)
        error = mode.colour_from_frame(detection.xy) - rendered.true_corners(view.index, detection.ij)
        assert len(detection.ij) > 40
        assert np.abs(error).max() < 2.5
        assert np.sqrt(np.mean(error**2)) < 0.6


def test_rows_that_are_not_known_split_the_board_but_not_its_names():
    """A band of unknown rows leaves a part of the board, named right by its markers."""
    rendered = shuttered_set()
    picture = difference_picture(rendered.views[0]).copy()
    picture[60:75] = np.nan
    detection = detect_board(picture, rendered.scene.target)
    assert isinstance(detection, Detection)
    error = rendered.layout.module().frame_mode.colour_from_frame(detection.xy) - rendered.true_corners(0, detection.ij)
    assert np.abs(error).max() < 2.5


def test_a_picture_without_a_board_says_so():
    """Noise gives a phrase, not a board."""
    picture = np.random.default_rng(0).normal(size=(160, 240))
    assert "no grid" in detect_board(picture, shuttered_set().scene.target)


def test_an_unknown_picture_says_so():
    """Nothing known gives a phrase of its own."""
    assert "bright and dark" in detect_board(np.full((80, 120), np.nan), shuttered_set().scene.target)
