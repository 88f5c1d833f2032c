"""Normal equations with gains integrated out."""

import numpy as np

from hybridtrack.calibration.count_curve import CountCurve, CountNoise
from hybridtrack.calibration.event_map_normal import MAP_TERMS, MapBasis, MapModel, accumulate
from hybridtrack.calibration.event_prediction import PixelSteps

PIXELS, VIEWS = 40, 3


def small_problem(seed=0):
    """Random steps of few pixels in three views, near a model's counts."""
    rng = np.random.default_rng(seed)
    curve = CountCurve(np.array([0.5, 1.0, 1.5, 2.0]), np.array([0.5, 2.0, 4.0, 6.0]))
    model = MapModel(curve, np.array([0.0, 0.05, -0.02]), CountNoise(0.05, 0.0, 0.01), 0.04**2, np.ones(PIXELS))
    grid = rng.uniform(-1, 1, (5, 8, 2))
    basis = MapBasis(grid, grid * 100.0, 200.0)
    all_steps = []
    for v in range(VIEWS):
        pixel = np.sort(rng.choice(PIXELS, 30, replace=False))
        step = rng.uniform(-2, 2, 30)
        count = np.exp(model.log_scale[v]) * curve.value(step) + rng.normal(size=30) * 0.2
        all_steps.append(PixelSteps(pixel, count, step, rng.normal(size=(30, 2)), rng.normal(size=30) * 0.1))
    return all_steps, model, basis


def test_integrating_gains_out_is_fitting_them_under_their_prior():
    """The step equals that of the full system with one gain an unknown for each pixel."""
    all_steps, model, basis = small_problem()
    normal = accumulate(all_steps, model, basis, 0.0)
    bare = accumulate(all_steps, MapModel(model.curve, model.log_scale, model.noise, 1e-30, model.gain), basis, 0.0)
    size = len(normal.right)
    full = np.zeros((size + PIXELS, size + PIXELS))
    right = np.zeros(size + PIXELS)
    full[:size, :size], right[:size] = bare.matrix, bare.right
    from hybridtrack.calibration.event_map_normal import _rows_of

    for v, steps in enumerate(all_steps):
        row = _rows_of(steps, v, VIEWS, model, basis)
        np.add.at(full[size:, :size], steps.pixel, (row.weight * row.predicted)[:, None] * row.design)
        np.add.at(np.einsum("ii->i", full)[size:], steps.pixel, row.weight * row.predicted**2)
        np.add.at(right[size:], steps.pixel, row.weight * row.predicted * row.residual)
    full[:size, size:] = full[size:, :size].T
    full[size:, size:] += np.eye(PIXELS) / model.gain_variance
    exact = np.linalg.solve(full, right)
    np.testing.assert_allclose(np.linalg.solve(normal.matrix, normal.right), exact[:size], rtol=1e-6, atol=1e-9)
    np.testing.assert_allclose(np.linalg.inv(normal.matrix), np.linalg.inv(full)[:size, :size], rtol=1e-5, atol=1e-12)


def test_views_pulls_sum_to_the_whole():
    """Apart from the priors, and although gains are taken off each view's own."""
    all_steps, model, basis = small_problem(1)
    normal = accumulate(all_steps, model, basis, 0.0)
    np.testing.assert_allclose((normal.right - normal.scores.sum(0))[:MAP_TERMS], 0.0, atol=1e-9)


def test_a_views_pull_scatters_as_its_spread_says():
    """Over 300 draws of gains and noise the mean square of each view's pull on the map is its stated variance."""
    all_steps, model, basis = small_problem(3)
    rng, squares = np.random.default_rng(4), []
    for _ in range(300):
        gain = 1.0 + np.sqrt(model.gain_variance) * rng.normal(size=PIXELS)
        drawn = []
        for v, steps in enumerate(all_steps):
            mean = np.exp(model.log_scale[v]) * model.curve.value(steps.step)
            slope = np.exp(model.log_scale[v]) * model.curve.slope(steps.step) * np.linalg.norm(steps.d_uv, axis=1)
            noise = np.sqrt(model.noise.variance(mean, slope)) * rng.normal(size=len(mean))
            drawn.append(
                PixelSteps(steps.pixel, gain[steps.pixel] * mean + noise, steps.step, steps.d_uv, steps.d_blur)
            )
        normal = accumulate(drawn, model, basis, 0.0)
        squares.append(normal.scores[:, :MAP_TERMS] ** 2 / np.einsum("vii->vi", normal.spread)[:, :MAP_TERMS])
    assert 0.8 < np.mean(squares) < 1.2


def test_basis_is_the_displacement():
    """u and v are affine in the grid, plus a radial move about the centre."""
    grid = np.array([[[0.5, -1.0]]])
    basis = MapBasis(grid, np.array([[[30.0, 40.0]]]), 100.0)
    rows = basis.rows(np.array([0]))[0]
    np.testing.assert_allclose(rows @ [1, 2, 3, 0, 0, 0, 0], [1 + 1 - 3, 0])
    np.testing.assert_allclose(rows @ [0, 0, 0, 4, 5, 6, 0], [0, 4 + 2.5 - 6])
    np.testing.assert_allclose(rows @ [0, 0, 0, 0, 0, 0, 1], [0.25 * 30, 0.25 * 40])


def test_wild_counts_have_no_weight():
    """A count far off its prediction does not enter."""
    all_steps, model, basis = small_problem(2)
    before = accumulate(all_steps, model, basis, 0.0)
    all_steps[0].count[4] += 100.0
    after = accumulate(all_steps, model, basis, 0.0)
    all_steps[0].count[4] += 1000.0
    np.testing.assert_allclose(accumulate(all_steps, model, basis, 0.0).right, after.right)
    assert not np.allclose(before.right, after.right)
