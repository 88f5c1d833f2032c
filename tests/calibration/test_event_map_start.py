"""Mirroring and first offset."""

from dataclasses import replace

import numpy as np
import pytest
from rendered_boards import SMALL, counterphase_set, shuttered_set

from hybridtrack.calibration.event_map_start import clipped_amplitude, event_positions, find_map_start, lattice_matrix
from hybridtrack.errors import DegenerateDataError
from hybridtrack.module import nominal_matrix


@pytest.mark.parametrize("found", [shuttered_set, counterphase_set])
def test_mirroring_is_found_and_the_offset_to_a_pixel(found):
    """Although the nominal module has both wrong."""
    rendered = found()
    start = find_map_start(rendered.views, rendered.layout.module(known=False))
    assert start.mirror == rendered.layout.mirror
    true = np.array(rendered.layout.clear_site) + rendered.layout.centroid
    assert np.all(np.abs(np.array(start.offset) - true) <= 1.3)


@pytest.mark.parametrize("mirror", [(False, False), (True, False), (False, True), (True, True)])
def test_lattice_is_the_modules(mirror):
    """The same matrix as a nominal module's, and the same positions as the layout's, for all mirrorings."""
    layout = replace(SMALL, mirror=mirror, centroid=(0.0, 0.0))
    module = layout.module()
    matrix = lattice_matrix(module, mirror, layout.clear_site)
    np.testing.assert_array_equal(matrix, nominal_matrix(module.cluster, module.event_grid))
    np.testing.assert_allclose(event_positions(module, matrix), layout.event_positions())


def test_hot_pixels_are_cut_to_size():
    """One pixel of a thousand counts does not dominate a correlation."""
    view = shuttered_set().views[0]
    hot = view.amplitude.copy()
    hot[5, 5] = 1000.0
    limited = clipped_amplitude(replace(view, amplitude=hot, snr=view.snr))
    assert limited[5, 5] < 2.0 * np.percentile(np.abs(view.amplitude), 99)


def test_events_that_do_not_show_the_frames_scene_are_refused():
    """Shuffled event pixels agree under no mirroring."""
    rendered = shuttered_set()
    rng = np.random.default_rng(0)
    views = []
    for view in rendered.views[:3]:
        order = rng.permutation(view.amplitude.size)
        shuffled = view.amplitude.ravel()[order].reshape(view.amplitude.shape)
        views.append(replace(view, amplitude=shuffled))
    with pytest.raises(DegenerateDataError, match="agree under one mirroring"):
        find_map_start(views, rendered.layout.module())
