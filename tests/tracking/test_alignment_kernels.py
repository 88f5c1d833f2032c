"""Inverse-compositional alignment of templates to pictures."""

import cv2
import numpy as np
import pytest
from planar_scene import photograph
from scipy.ndimage import map_coordinates, spline_filter
from skimage.registration import phase_cross_correlation

from hybridtrack.tracking.alignment_kernels import (
    add_shape_prior,
    align,
    bicubic,
    compose,
    cut_patch,
    gather,
    smear,
    solve,
    with_slopes,
)

Array = np.ndarray
SIZE, RADIUS = 49, 10.0


def texture() -> Array:
    """A smooth log-light picture (200, 240)."""
    return np.log(cv2.GaussianBlur(photograph("gravel"), (0, 0), 1.5))[100:300, 100:340].astype(np.float64)


def warped(picture: Array, centre: Array, to: Array, shape: Array) -> Array:
    """The picture with W(x) = to + shape (x - centre) applied, by a spline of order 5."""
    rows, columns = np.indices(picture.shape)
    at = np.stack([columns - to[0], rows - to[1]], axis=-1) @ np.linalg.inv(shape).T + centre
    filtered = spline_filter(picture, 5)
    return map_coordinates(filtered, [at[..., 1], at[..., 0]], order=5, prefilter=False, mode="nearest")


def template_at(picture: Array, position: Array) -> tuple[Array, Array]:
    own, template = np.zeros((SIZE, SIZE), np.float32), np.zeros((SIZE, SIZE, 3), np.float32)
    offset = np.array(cut_patch(picture.astype(np.float32), *position, own))
    with_slopes(own, template)
    return template, offset


def run(picture: Array, template: Array, offset: Array, start: Array, shape_sigma: float = 0.05) -> tuple:
    position, shape, out = np.array(start, float), np.eye(2), np.zeros(7)
    trust = np.ones(picture.shape, np.float32)
    done = align(picture.astype(np.float32), trust, template, offset, RADIUS, position, shape, shape_sigma, 25, out)
    return position, shape, out, done


@pytest.mark.parametrize("shift", [(0.3, -0.2), (1.4, 0.7), (-2.3, 2.1)])
def test_known_shift_is_recovered_and_agrees_with_phase_correlation(shift: tuple[float, float]) -> None:
    """A sub-pixel shift is found to 0.01 px; scikit-image's registration of the same pictures agrees within its own
    resolution (Guizar-Sicairos et al. 2008)."""
    picture, place = texture(), np.array([120.3, 98.8])
    moved = warped(picture, place, place + shift, np.eye(2))
    template, offset = template_at(picture, place)
    position, _, out, done = run(moved, template, offset, place)
    assert done
    np.testing.assert_allclose(position - place, shift, atol=0.012)
    assert out[3] > 0.999
    fade = np.outer(np.hanning(200), np.hanning(240))  # the transform takes pictures to be periodic
    faded = [fade * (each - picture.mean()) for each in (moved, picture)]
    outside = phase_cross_correlation(*faded, upsample_factor=50, normalization=None)[0]
    np.testing.assert_allclose(position - place, outside[::-1], atol=0.1)


def test_turning_and_zoom_are_recovered() -> None:
    """With a shape that changes, position and shape are both found."""
    picture, place = texture(), np.array([120.0, 100.0])
    shape = np.array([[1.04, -0.05], [0.03, 0.98]])
    template, offset = template_at(picture, place)
    position, found, _, done = run(warped(picture, place, place + [0.6, -0.4], shape), template, offset, place, 1.0)
    assert done
    np.testing.assert_allclose(position - place, [0.6, -0.4], atol=0.02)
    np.testing.assert_allclose(found, shape, atol=0.006)


def test_brightness_does_not_move_the_result() -> None:
    """Light three times as strong is a log gain, and nothing else."""
    picture, place = texture(), np.array([120.0, 100.0])
    moved = warped(picture, place, place + [0.5, 0.25], np.eye(2))
    template, offset = template_at(picture, place)
    plain, bright = run(moved, template, offset, place), run(moved + np.log(3.0), template, offset, place)
    np.testing.assert_allclose(bright[0], plain[0], atol=2e-3)
    assert bright[2][6] - plain[2][6] == pytest.approx(np.log(3.0), abs=1e-3)


def test_stated_deviation_is_honest_for_white_noise() -> None:
    """Over 200 noisy pictures the errors have the stated deviation, within the spread of such a sample."""
    picture, random = texture(), np.random.default_rng(5)
    pulls = []
    for k in range(200):
        place = np.array([60.0 + 0.6 * k, 60.0 + 0.37 * k])
        template, offset = template_at(picture, place)
        noisy = picture + 0.03 * random.standard_normal(picture.shape)
        position, _, out, done = run(noisy, template, offset, place, 0.0)
        assert done
        pulls.append((position - place) / np.sqrt(out[[0, 2]]))
    # Cubic interpolation joins neighbours, so that a little less noise arrives than the residual shows.
    assert 0.7 < np.std(pulls) < 1.25


def test_jacobian_agrees_with_differences() -> None:
    """The gradient that `gather` returns is the derivative of half the squared residuals by the template's increment.

    The template is a plane, whose slopes are exact, and the picture is what increments of the template make of it.
    """
    slope = np.array([0.02, -0.015])
    rows, columns = np.indices((SIZE, SIZE)) - SIZE // 2
    values = (slope[0] * columns + slope[1] * rows).astype(np.float32)
    template = np.zeros((SIZE, SIZE, 3), np.float32)
    with_slopes(values, template)
    big = np.indices((120, 120)).astype(np.float64) - 60.0
    picture = (0.021 * big[1] - 0.012 * big[0] + 0.01).astype(np.float32)
    trust, offset, p, a = np.ones((120, 120), np.float32), np.array([0.2, -0.3]), np.array([60.3, 59.6]), np.eye(2)
    a += 0.05 * np.array([[1.0, -1.0], [2.0, 0.5]])
    h, g, room = np.zeros((7, 7)), np.zeros(7), np.zeros(4)
    # A huge scale makes all robust weights one.
    gather(picture, trust, template, offset, RADIUS, p, a, 0.1, 1e6, h, g, room, room.copy())

    def cost(step: Array) -> float:
        x, y = columns - offset[0], rows - offset[1]
        reach = np.maximum(abs(x), abs(y))
        weight = np.where(reach <= RADIUS, np.minimum(1.0, RADIUS - reach), 0.0)
        u, v = p[0] + a[0, 0] * x + a[0, 1] * y, p[1] + a[1, 0] * x + a[1, 1] * y
        image = 0.021 * (u - 60.0) - 0.012 * (v - 60.0) + 0.01
        tx = x + step[0] + step[2] * x + step[3] * y + offset[0]
        ty = y + step[1] + step[4] * x + step[5] * y + offset[1]
        residual = image - (slope[0] * tx + slope[1] * ty) - 0.1 - step[6]
        return 0.5 * float(np.sum(weight * residual**2))

    numeric = [(cost(e) - cost(-e)) / 2e-4 for e in 1e-4 * np.eye(7)]
    np.testing.assert_allclose(-g, numeric, rtol=2e-3, atol=2e-3 * np.abs(g).max())


def test_featureless_and_hidden_patches_are_refused() -> None:
    """A flat template, an edge's missing direction and a patch outside the picture do not converge."""
    flat = np.full((200, 240), -1.0)
    template, offset = template_at(flat, np.array([100.0, 100.0]))
    assert not run(flat, template, offset, np.array([100.0, 100.0]))[3]
    edge = np.tile(np.tanh((np.arange(240) - 120.0) / 2.0), (200, 1))
    template, offset = template_at(edge, np.array([120.0, 100.0]))
    assert not run(edge, template, offset, np.array([120.0, 100.0]))[3]
    picture = texture()
    template, offset = template_at(picture, np.array([120.0, 100.0]))
    assert not run(picture, template, offset, np.array([-30.0, 100.0]))[3]


def test_smear_is_the_mean_of_shifted_light() -> None:
    """Smearing over shifts equals averaging the shifted light itself."""
    picture = texture()
    own, out = np.zeros((SIZE, SIZE), np.float32), np.zeros((SIZE, SIZE), np.float32)
    cut_patch(picture.astype(np.float32), 120.0, 100.0, own)
    shifts = np.array([[-4.0, 1.0], [0.0, 0.0], [4.0, -1.0]])
    smear(own, shifts, out)
    parts = [np.exp(picture[76 - int(v) : 125 - int(v), 96 - int(u) : 145 - int(u)]) for u, v in shifts]
    inner = slice(6, -6)
    np.testing.assert_allclose(out[inner, inner], np.log(np.mean(parts, axis=0))[inner, inner], atol=1e-3)


def test_small_algebra() -> None:
    """The solver, the composition of warps and the shape's prior agree with matrix algebra; cubics are reproduced."""
    random = np.random.default_rng(1)
    m = random.standard_normal((7, 7))
    m = m @ m.T + np.eye(7)
    b = random.standard_normal((7, 2))
    expected = np.linalg.solve(m, b)
    solve(m, b)
    np.testing.assert_allclose(b, expected, atol=1e-9)
    p, a, step = np.array([3.0, 4.0]), np.array([[1.1, 0.2], [-0.1, 0.9]]), 0.1 * random.standard_normal(7)
    warp, inner = np.eye(3), np.eye(3)
    warp[:2, :2], warp[:2, 2] = a, p
    inner[:2, :2] += step[2:6].reshape(2, 2)
    inner[:2, 2] = step[:2]
    expected = warp @ np.linalg.inv(inner)
    compose(p, a, step)
    np.testing.assert_allclose(a, expected[:2, :2])
    np.testing.assert_allclose(p, expected[:2, 2])
    h, g = np.zeros((7, 7)), np.zeros(7)
    before = np.array([[1.0, 0.1], [0.0, 1.0]])
    add_shape_prior(before, a, 2.0, h, g)
    np.testing.assert_allclose(g[2:6], 2.0 * (np.linalg.inv(before) @ a - np.eye(2)).ravel())
    rows, columns = np.indices((12, 12)).astype(np.float64)
    plane = 0.5 * columns**2 - 0.2 * rows * columns + rows
    value = bicubic(plane, 5.3, 6.6, np.zeros(4), np.zeros(4))
    assert value == pytest.approx(0.5 * 5.3**2 - 0.2 * 5.3 * 6.6 + 6.6)
