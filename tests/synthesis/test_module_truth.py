"""True modules drawn about a nominal one."""

import numpy as np
import pytest

from hybridtrack.errors import NotCalibratedError, OptionError
from hybridtrack.module import FrameMode, HybridModule, nominal_matrix
from hybridtrack.synthesis.module_truth import ModuleDraw, draw_module
from tests.synthesis.modules import small_module

NOMINAL = small_module(320, 200).model_copy(update={"contrast": None, "colour_from_event": None, "defects": None})


def drawn(seed: int = 0, **fields: object) -> HybridModule:
    """One true module."""
    return draw_module(NOMINAL, ModuleDraw.model_validate(fields), seed)


def test_seed_decides() -> None:
    """The same seed draws the same module, another seed another."""
    assert drawn(4) == drawn(4)
    assert drawn(4).lens != drawn(5).lens


def test_drawn_module_is_complete_and_calibrated() -> None:
    """Lens, map, clocks, thresholds and defects are all there, and the lens is one to one over the array."""
    for lens in ("perspective", "fisheye"):
        module = drawn(1, lens=lens)
        assert module.is_calibrated
        assert module.lens_model().is_monotonic_over(1280, 800)
        assert module.defects is not None
        assert len(module.defects.hot) == 12
        assert not set(module.defects.hot) & set(module.defects.dead)


def test_map_is_the_true_lattice_plus_centroid() -> None:
    """Without further terms the matrix is the nominal one of the true layout, moved by the centroid."""
    module = drawn(3, mirror_x=True, clear_site=(0, 3), centroid_px=0.2)
    assert module.event_grid.mirror_x
    assert module.cluster.clear_site == (0, 3)
    mapped = module.colour_from_event
    assert mapped is not None
    assert mapped.centroid is not None
    expected = nominal_matrix(module.cluster, module.event_grid)
    expected[:, 2] += mapped.centroid
    np.testing.assert_allclose(mapped.matrix, expected)
    assert np.abs(mapped.centroid).max() <= 0.2


def test_off_lattice_and_radial_terms_move_as_far_as_told() -> None:
    """The largest displacement of the affine term, and the radial one at the corner, are those asked for."""
    plain, off, bent = (drawn(6, **terms) for terms in ({}, {"off_lattice_px": 0.05}, {"radial_px": 0.1}))
    corners = plain.event_from_colour_px(np.array([[0.0, 0.0], [1279, 0], [0, 799], [1279, 799]]))
    moved = np.linalg.norm(off.colour_from_event_px(corners) - plain.colour_from_event_px(corners), axis=1)
    assert moved.max() == pytest.approx(0.05, rel=1e-3)
    bent_by = np.linalg.norm(bent.colour_from_event_px(corners) - plain.colour_from_event_px(corners), axis=1)
    assert bent_by.max() == pytest.approx(0.1, rel=0.01)


def test_mirrors_and_clear_sites_come_in_all_ways() -> None:
    """Drawn at random, both mirrorings and every clear site turn up."""
    modules = [drawn(seed, mirror_x="random", mirror_y="random", clear_site="random") for seed in range(60)]
    assert len({(m.event_grid.mirror_x, m.event_grid.mirror_y) for m in modules}) == 4
    assert len({m.cluster.clear_site for m in modules}) > 12


def test_clocks_stay_in_their_ranges() -> None:
    """Offset, drift, line time and exposure correction lie within what was asked for; a global shutter has no lines."""
    timing = [drawn(seed).known_timing() for seed in range(40)]
    assert max(abs(t.frame_offset_ns or 0) for t in timing) <= 2e6
    assert max(abs(t.frame_drift_ppm or 0) for t in timing) <= 20
    assert all(0.97 <= (t.line_time_ns or 0) / 18e3 <= 1.03 for t in timing)
    still = NOMINAL.model_copy(update={"frame_mode": FrameMode(width=640, height=400, binning=2, shutter="global")})
    assert draw_module(still, ModuleDraw(), 0).known_timing().line_time_ns == 0


def test_refusals() -> None:
    """Clear sites outside the cluster, defects without room, lenses that fold over or are not known are refused."""
    with pytest.raises(OptionError, match="inside the 4x4 cluster, got"):
        drawn(clear_site=(4, 0))
    with pytest.raises(OptionError, match="must not exceed the 64000 event pixels"):
        drawn(hot=64000)
    with pytest.raises(OptionError, match="one to one over the array"):
        drawn(lens="fisheye", focal_per_width=0.05)
    with pytest.raises(NotCalibratedError, match="a lens is required"):
        drawn(lens="nominal")
