"""Layout of the die: frame pixels, bins and clear sites."""

import numpy as np
import pytest
from pydantic import ValidationError

from hybridtrack.module import Cluster, FrameMode, clear_in_bin, frame_pixel_centres


def brute_force_centres(mode: FrameMode, cluster: Cluster) -> np.ndarray:
    """Average, for each bin, the positions of the colour pixels that are not clear sites."""
    centres = np.empty((mode.height, mode.width, 2))
    for row in range(mode.height):
        for column in range(mode.width):
            kept = [
                (u, v)
                for v in range(mode.crop[1] + row * mode.binning, mode.crop[1] + (row + 1) * mode.binning)
                for u in range(mode.crop[0] + column * mode.binning, mode.crop[0] + (column + 1) * mode.binning)
                if (u % cluster.width, v % cluster.height) != tuple(cluster.clear_site)
            ]
            centres[row, column] = np.mean(kept, axis=0)
    return centres


@pytest.mark.parametrize("clear_site", [(0, 0), (2, 1), (3, 3)])
@pytest.mark.parametrize("crop", [(0, 0), (5, 2)])
def test_omitted_clear_sites_move_the_centre_of_their_bin(clear_site: tuple[int, int], crop: tuple[int, int]) -> None:
    """Each centre is the mean of the pixels that contribute, for any crop and clear site."""
    mode = FrameMode(width=8, height=6, binning=2, crop=crop, clear_in_frame="omitted")
    cluster = Cluster(width=4, height=4, clear_site=clear_site)
    np.testing.assert_allclose(frame_pixel_centres(mode, cluster), brute_force_centres(mode, cluster), atol=1e-12)


def test_a_two_by_two_bin_moves_by_a_sixth_of_a_pixel() -> None:
    """The shift of an omitted clear site in a 2x2 bin is 0.167 px on each axis, and no other bin moves."""
    mode = FrameMode(width=4, height=4, binning=2, clear_in_frame="omitted")
    cluster = Cluster(width=4, height=4, clear_site=(3, 2))
    shift = frame_pixel_centres(mode, cluster) - frame_pixel_centres(
        mode.model_copy(update={"clear_in_frame": "included"}), cluster
    )
    np.testing.assert_allclose(np.abs(shift[1, 1]), 1 / 6)
    assert np.count_nonzero(np.abs(shift).sum(-1)) == 4


def test_included_centres_are_those_of_the_full_bins() -> None:
    """A frame pixel's centre follows u = crop + binning * (x + 0.5) - 0.5, and back."""
    mode = FrameMode(width=6, height=4, binning=2, crop=(10, 20))
    np.testing.assert_allclose(mode.colour_from_frame(np.array([0, 0])), [10.5, 20.5])
    xy = np.random.default_rng(1).uniform(0, 5, (20, 2))
    np.testing.assert_allclose(mode.frame_from_colour(mode.colour_from_frame(xy)), xy)


def test_every_clear_site_is_counted_once() -> None:
    """Summed over the frame, the bins hold as many clear sites as the array has clusters."""
    mode = FrameMode(width=16, height=8, binning=3)
    cluster = Cluster(width=2, height=2, clear_site=(1, 0))
    assert clear_in_bin(mode, cluster)[0].sum() == (16 * 3 // 2) * (8 * 3 // 2)


def test_rows_read_bottom_up_count_from_the_last() -> None:
    """With row_order -1 the bottom row is read first."""
    mode = FrameMode(width=4, height=10, row_order=-1)
    np.testing.assert_array_equal(mode.read_order(np.array([9, 0])), [0, 9])


def test_a_clear_site_outside_its_cluster_is_refused() -> None:
    """The message names the requirement."""
    with pytest.raises(ValidationError, match="clear_site must lie inside the 2x2 cluster"):
        Cluster(width=2, height=2, clear_site=(2, 0))
