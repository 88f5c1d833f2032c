"""The event-to-colour map by direct alignment, on a pixel model of its own."""

from dataclasses import replace

import numpy as np
import pytest
from rendered_boards import as_boards, counterphase_set, shuttered_set

from hybridtrack.calibration.event_map_fit import affine_of, coefficient_jacobian, fit_event_map
from hybridtrack.calibration.geometry_fit import fit_geometry
from hybridtrack.calibration.lens_fit import fit_lens
from hybridtrack.errors import DegenerateDataError


def map_errors(rendered, fit):
    """Map error (He, We, 2) px."""
    module = rendered.layout.module().model_copy(update={"colour_from_event": fit.colour_from_event})
    return module.event_pixel_positions() - rendered.layout.event_positions()


@pytest.mark.parametrize("found", [shuttered_set, counterphase_set])
def test_map_is_exact_to_hundredths_from_a_wrong_data_sheet(found):
    """Comparators with hysteresis and mismatch, frames with noise: under 0.01 px, mirroring and clear site right."""
    rendered = found()
    geometry = fit_geometry(rendered.views, rendered.scene.target, rendered.layout.module(known=False))
    fit = geometry.map_fit
    assert (fit.mirror_x, fit.mirror_y) == rendered.layout.mirror
    assert fit.clear_site == rendered.layout.clear_site
    assert np.sqrt(np.mean(np.sum(map_errors(rendered, fit) ** 2, axis=-1))) < 0.01
    assert fit.colour_from_event.centroid == pytest.approx(rendered.layout.centroid, abs=0.01)
    assert fit.colour_from_event.lattice.consistent
    assert fit.colour_from_event.lattice.p_value > 0.001


def test_stated_deviation_bounds_the_error():
    """The error is within four deviations, and the deviation itself is small."""
    rendered = shuttered_set()
    boards = as_boards(rendered, np.random.default_rng(0), 0.01)
    lens_fit = fit_lens(boards, rendered.scene.target, rendered.layout.module(), "k1k2p")
    fit = fit_event_map(rendered.views, boards, lens_fit, rendered.scene.target, rendered.layout.module())
    sigma = np.sqrt(np.diag(fit.covariance))
    assert fit.parameters == ("colour_from_event.c", "colour_from_event.f")
    assert np.all(sigma < 0.01)
    assert np.all(np.abs(map_errors(rendered, fit).mean((0, 1))) < 4 * sigma)
    assert fit.cross_covariance.shape == (2, len(lens_fit.parameters))
    assert len(fit.residuals_px) == len(fit.residual_xy) > 20


def shifted_views(rendered, scale):
    """Views whose event images were taken as if the lens saw events magnified by `scale` about the array's middle."""
    from board_renderer import Pixels, render_view

    class Stretched(type(rendered.layout)):
        def event_positions(self):
            uv = super().event_positions()
            middle = np.array([(self.width - 1) / 2, (self.height - 1) / 2])
            return middle + (uv - middle) * (1 + scale)

    layout = Stretched(**vars(rendered.layout))
    rng = np.random.default_rng(3)
    pixels = Pixels.draw(rng, rendered.scene, layout.event_positions().shape[:2])
    views = [render_view(rng, rendered.scene, layout, pixels, pose, k) for k, pose in enumerate(rendered.poses[:4])]
    return layout, views


def test_a_stretched_map_is_told_from_the_lattice():
    """A scale of 2e-4 (0.05 px at the edge) is found, reported as measured, and exact to hundredths."""
    rendered = shuttered_set()
    layout, views = shifted_views(rendered, 2e-4)
    lens_fit = replace(rendered.true_fit(), views=np.arange(4), camera_from_board=rendered.poses[:4])
    lens_fit = replace(lens_fit, joint_covariance=np.zeros((24, 24)))
    fit = fit_event_map(views, [], lens_fit, rendered.scene.target, layout.module())
    assert not fit.colour_from_event.lattice.consistent
    assert any("not the die's lattice" in finding for finding in fit.findings)
    found = layout.module().model_copy(update={"colour_from_event": fit.colour_from_event}).event_pixel_positions()
    assert np.sqrt(np.mean(np.sum((found - layout.event_positions()) ** 2, axis=-1))) < 0.015


def test_a_screens_phase_may_be_the_other_way_round():
    """With all amplitudes' signs turned the map is the same."""
    rendered = counterphase_set()
    fit = rendered.true_fit()
    turned = [replace(v, amplitude=-v.amplitude, bright_dn=v.dark_dn, dark_dn=v.bright_dn) for v in rendered.views]
    a = fit_event_map(rendered.views, [], fit, rendered.scene.target, rendered.layout.module())
    b = fit_event_map(turned, [], fit, rendered.scene.target, rendered.layout.module())
    np.testing.assert_allclose(a.colour_from_event.matrix, b.colour_from_event.matrix, atol=1e-3)


def test_views_without_events_are_refused():
    """No event pixel saw the board blink."""
    rendered = shuttered_set()
    views = [replace(v, amplitude=v.amplitude * 0.0, snr=v.snr * 0.0) for v in rendered.views]
    with pytest.raises(DegenerateDataError, match="event map: expected"):
        fit_event_map(views, [], rendered.true_fit(), rendered.scene.target, rendered.layout.module())


def test_coefficients_and_matrix_describe_one_displacement():
    """The affine matrix of coefficients moves the grid's edge by them, and the Jacobian is its derivative."""
    module = shuttered_set().layout.module()
    coefficients = np.array([0.3, 0.02, -0.01, -0.2, 0.03, 0.04])
    width, height = module.event_grid.width, module.event_grid.height
    corner = np.array([(width - 1) / 2 + width / 2, (height - 1) / 2 - height / 2, 1.0])
    np.testing.assert_allclose(affine_of(coefficients, module) @ corner, [0.3 + 0.02 + 0.01, -0.2 + 0.03 - 0.04])
    moved = coefficient_jacobian(module) @ np.array([*coefficients, 0.7])
    np.testing.assert_allclose(moved[:6].reshape(2, 3), affine_of(coefficients, module))
    assert moved[6] == 0.7
