"""Board corners to hundredths of a pixel, with honest covariances."""

from dataclasses import replace

import numpy as np
import pytest
from board_renderer import Scene
from rendered_boards import LENS, SMALL, as_boards, board, counterphase_set, rendered, shuttered_set

from hybridtrack.calibration.corners import find_boards, refine_boards


def errors_of(found, boards):
    """Corner errors (N, 2) px and their squared normalised size (N,)."""
    error = np.concatenate([b.uv - found.true_corners(b.view, b.ij) for b in boards])
    covariance = np.concatenate([b.covariance for b in boards])
    return error, np.einsum("ni,nij,nj->n", error, np.linalg.inv(covariance), error)


@pytest.mark.parametrize("found", [shuttered_set, counterphase_set])
def test_corners_are_exact_to_hundredths_with_honest_covariance(found):
    """Within 0.02 frame px RMS, corners beside dark squares and omitted clear sites included, as large as stated."""
    scene = found()
    search = find_boards(scene.views, scene.scene.target, scene.layout.module())
    assert search.findings == []
    assert [b.view for b in search.boards] == list(range(len(scene.views)))
    error, squared = errors_of(scene, search.boards)
    assert len(error) > 70 * len(scene.views)
    assert np.sqrt(np.mean(error**2)) < 0.02 * scene.layout.binning
    assert 0.7 < np.mean(squared) / 2 < 1.4


def test_without_noise_corners_are_exact_to_thousandths():
    """Shading, tilt, distortion and blur leave less than a thousandth of a pixel."""
    scene = replace(Scene(board(), LENS), read_noise_dn=1e-6, gain_dn=0.0)
    still = rendered(scene, SMALL, 4, 1)
    boards = refine_boards(still.views, as_boards(still, np.random.default_rng(0), 0.0), still.true_fit(), scene.target,
                           SMALL.module())  # fmt: skip
    error, _ = errors_of(still, boards)
    assert np.sqrt(np.mean(error**2)) < 1e-3


def test_a_wrong_clear_site_moves_corners_where_it_is_omitted():
    """What the frame mode says of omitted clear sites is used: a wrong site shifts corners by 0.08 px."""
    scene = counterphase_set()
    wrong = scene.layout.module()
    wrong = wrong.model_copy(update={"cluster": wrong.cluster.model_copy(update={"clear_site": (2, 3)})})
    start = as_boards(scene, np.random.default_rng(0), 0.0)
    right = refine_boards(scene.views, start, scene.true_fit(), scene.scene.target, scene.layout.module())
    moved = refine_boards(scene.views, start, scene.true_fit(), scene.scene.target, wrong)
    difference = np.mean([b.uv.mean(0) - a.uv.mean(0) for a, b in zip(right, moved, strict=True)], axis=0)
    # One bin in four has its light 1/6 px off on each axis; the wrong site puts it off the other way.
    assert np.all(np.abs(np.abs(difference) - 2 / 6 / 4) < 0.02)


def test_views_without_a_board_are_named():
    """A view of noise is left out with a sentence that names it."""
    scene = shuttered_set()
    rng = np.random.default_rng(0)
    noise = rng.normal(size=scene.views[0].bright_dn.shape)
    empty = replace(scene.views[0], index=77, bright_dn=20 + noise, dark_dn=20 - noise)
    search = find_boards([*scene.views[:1], empty], scene.scene.target, scene.layout.module())
    assert [b.view for b in search.boards] == [0]
    assert search.findings[0].startswith("view 77: ")
