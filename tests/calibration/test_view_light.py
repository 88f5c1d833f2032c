"""Levels and blur of a view from its frames."""

import numpy as np
import pytest
from rendered_boards import LENS, board, counterphase_set, shuttered_set

from hybridtrack.calibration.apertures import frame_aperture
from hybridtrack.calibration.board_view import place_frame_pixels
from hybridtrack.calibration.view_light import class_fractions, fit_view_light, light_classes


def light_of(rendered, view):
    """The view's light, and the places of its pixels, under the true pose."""
    module = rendered.layout.module()
    place = place_frame_pixels(LENS, rendered.poses[view], rendered.scene.target, module.frame_mode)
    aperture = frame_aperture(module.frame_mode, module.cluster)
    return fit_view_light(rendered.views[view], place, aperture, rendered.scene.target), place, aperture


@pytest.mark.parametrize("found", [shuttered_set, counterphase_set])
def test_blur_and_levels_are_those_of_the_scene(found):
    """Blur to 2 %, levels of both states to 1 %, shading included; the residual is the noise of the pictures."""
    rendered = found()
    light, place, _ = light_of(rendered, 1)
    scene, view = rendered.scene, rendered.views[1]
    assert light.blur_px == pytest.approx(scene.blur_px, rel=0.02)
    on = np.isfinite(place.xy_m[:, 0])
    noise = np.sqrt(np.mean((view.bright_sigma_dn**2 + view.dark_sigma_dn**2).ravel()[on]))
    step = np.percentile(np.abs(view.bright_dn - view.dark_dn).ravel()[on], 95)
    assert 0.8 < light.residual * step / noise < 1.2
    middle = np.flatnonzero(np.linalg.norm(place.xy_m - [0.18, 0.135], axis=1) < 0.02)[:5]
    bright, dark = light.levels(place[middle], scene.target)
    mode = rendered.layout.module().frame_mode
    uv = mode.colour_from_frame(np.stack([middle % mode.width, middle // mode.width], axis=-1))
    size = np.array([rendered.layout.width, rendered.layout.height])
    r2 = np.sum((uv - size / 2) ** 2, axis=1) / (size[0] / 2) ** 2
    shading = 1 - scene.vignetting * r2 / 2
    np.testing.assert_allclose(bright[:, 0], scene.bright_dn * shading, rtol=0.01)
    np.testing.assert_allclose(dark[:, 0], scene.dark_dn * shading, rtol=0.03)
    set_b_dark_state = scene.bright_dn if scene.target.is_counterphase else scene.dark_dn
    np.testing.assert_allclose(dark[:, 1], set_b_dark_state * shading, rtol=0.03)


def test_model_explains_the_frame_pixel_by_pixel():
    """The picture rebuilt from levels, blur and pose differs from the frame by little more than its noise."""
    rendered = shuttered_set()
    light, place, aperture = light_of(rendered, 2)
    target = rendered.scene.target
    inner = np.flatnonzero(np.all((place.xy_m > 0.02) & (place.xy_m < [0.34, 0.25]), axis=1))
    kind = type(aperture)(aperture.nodes, aperture.weights, aperture.kind.ravel()[inner])
    share = class_fractions(place[inner], kind, light.blur_px, target, light.squares)[..., 0]
    rebuilt = np.sum(share * light.levels(place[inner], target)[0], axis=1)
    view = rendered.views[2]
    normalised = (view.bright_dn.ravel()[inner] - rebuilt) / np.hypot(view.bright_sigma_dn.ravel()[inner], 0.4)
    assert np.sqrt(np.mean(normalised**2)) < 1.3


def test_too_little_of_the_board_gives_nothing():
    """A board out of the frame has no light to fit."""
    rendered = shuttered_set()
    module = rendered.layout.module()
    away = rendered.poses[0].copy()
    away[0, 3] += 5.0
    place = place_frame_pixels(LENS, away, rendered.scene.target, module.frame_mode)
    aperture = frame_aperture(module.frame_mode, module.cluster)
    assert fit_view_light(rendered.views[0], place, aperture, rendered.scene.target) is None


def test_classes_follow_the_kind_of_target():
    """A shuttered board has two classes, a marked screen three, an unmarked one two; they cover the board."""
    for kind, steady, count in (("shuttered_checker", ((4, 2),), 2), ("counterphase_checker", ((4, 2),), 3),
                                ("counterphase_checker", (), 2)):  # fmt: skip
        squares = light_classes(board(kind, steady))
        assert len(squares) == count
        np.testing.assert_array_equal(squares.sum(0), 1.0)
