"""The filter that carries features on events."""

import numpy as np
import pytest
from planar_scene import small_module

from hybridtrack.tracking import TrackerOptions
from hybridtrack.tracking.advance_kernels import (
    accumulate,
    advance,
    apply_event,
    factorise,
    invert,
    observe_position,
    pixel_residual,
    predict,
    pull_velocity,
    remember,
    rewind,
    substitute,
    trajectory,
    update,
    velocity_field,
)
from hybridtrack.tracking.alignment_kernels import with_slopes
from hybridtrack.tracking.core import Core, new_core
from hybridtrack.tracking.light_levels import new_levels

Array = np.ndarray
SLOPE = np.array([0.05, -0.03])


@pytest.fixture
def core() -> Core:
    """One feature at (100, 80) frame px whose template is a plane."""
    core = new_core(small_module(), TrackerOptions(), 1)
    table = core.table
    table.active[0], table.t_ns[0] = 1, 1_000_000_000
    table.state[0] = [100.2, 80.3, 400.0, -250.0, 0.04]
    random = np.random.default_rng(2)
    root = random.standard_normal((5, 5)) * np.array([0.2, 0.2, 50.0, 50.0, 0.05])[:, None]
    table.cov[0] = root @ root.T + np.diag([0.01, 0.01, 100.0, 100.0, 1e-3])
    table.work_warp[0], table.warp[0] = [[1.03, 0.04], [-0.02, 0.97]], np.eye(2)
    table.work_offset[0] = [0.2, -0.3]
    table.level_sigma[0] = 0.05
    size = core.features.work.shape[1]
    rows, columns = np.indices((size, size)) - size // 2
    with_slopes((SLOPE[0] * columns + SLOPE[1] * rows).astype(np.float32), core.features.work[0])
    return core


def prediction(core: Core, state: Array, u: Array, v: Array, age: Array) -> Array:
    """The model m of the kernels' docstring, for the plane, at pixels (...)."""
    away = np.stack([u, v], axis=-1) - state[:2] + age[..., None] * state[2:4]
    place = away @ np.linalg.inv(core.table.work_warp[0]).T + core.table.work_offset[0]
    return place @ SLOPE + state[4]


def levels_under(core: Core, seed: int = 0, noise: float = 0.01) -> np.recarray:
    """Pixels that all fired within the last ms, at levels that fit the feature but for noise."""
    levels = new_levels(core.module)
    random = np.random.default_rng(seed)
    levels.fresh[:] = 0
    age = random.integers(0, 900_000, levels.shape)
    levels.anchor_ns[:] = levels.last_ns[:] = int(core.table.t_ns[0]) - age
    level = prediction(core, core.table.state[0].copy(), levels.u, levels.v, age * 1e-9)
    levels.level[:] = level + noise * random.standard_normal(levels.shape)
    return levels


def test_jacobian_agrees_with_differences(core: Core) -> None:
    """The gradient by position, velocity and gain is the derivative of half the weighted squared residuals."""
    levels, since = levels_under(core), int(core.table.t_ns[0]) - 1_000_000
    core.table.level_sigma[0] = 1e3  # makes every robust weight one
    fired, _, _ = accumulate(
        core.table.rows[0], core.features.work[0], levels, since, core.pace, np.zeros(5), np.zeros(3)
    )
    assert fired > 60
    g, sigma = core.table.records["g"][0].copy(), core.table.level_sigma[0]
    state = core.table.state[0].copy()

    # The taper counts at the state of the linearisation: it is a weight, not part of the residual.
    age = (core.table.t_ns[0] - levels.anchor_ns) * 1e-9
    away = np.stack([levels.u, levels.v], axis=-1) - state[:2] + age[..., None] * state[2:4]
    reach = np.abs(away @ np.linalg.inv(core.table.work_warp[0]).T).max(axis=-1)
    weight = np.where(reach <= core.pace.radius, np.minimum(1.0, core.pace.radius - reach), 0.0) / sigma**2

    def cost(moved: Array) -> float:
        return 0.5 * float(np.sum(weight * (levels.level - prediction(core, moved, levels.u, levels.v, age)) ** 2))

    for k, step in enumerate([1e-3, 1e-3, 1.0, 1.0, 1e-3]):
        up, down = state.copy(), state.copy()
        up[k] += step
        down[k] -= step
        numeric = (cost(up) - cost(down)) / (2 * step)
        assert -g[k] == pytest.approx(numeric, rel=1e-3, abs=1e-3 * abs(g).max() * (1e-3 if k in (2, 3) else 1.0))


def test_update_recovers_a_displaced_feature(core: Core) -> None:
    """A feature put half a pixel off along the slope comes back to where its pixels say it is."""
    levels, since = levels_under(core, noise=1e-4), int(core.table.t_ns[0]) - 1_000_000
    truth = core.table.state[0].copy()
    along = SLOPE / np.linalg.norm(SLOPE)
    core.table.state[0, :2] += 0.5 * along
    core.table.cov[0] = np.diag([1.0, 1.0, 1.0, 1.0, 1e-8])
    core.table.level_sigma[0] = 0.01
    update(core.table.rows[0], core.features.work[0], levels, since, core.pace, np.zeros(5), np.zeros(3))
    normal = np.linalg.inv(core.table.work_warp[0]).T @ SLOPE
    off = (core.table.state[0, :2] - truth[:2]) @ normal / np.linalg.norm(normal)
    assert abs(off) < 0.02
    eigenvalues = np.linalg.eigvalsh(core.table.cov[0, :2, :2])
    assert eigenvalues[0] < 1e-3  # known along the slope
    assert eigenvalues[1] > 0.5  # and not across it: a plane says nothing there


def test_silence_is_a_bound() -> None:
    """A silent pixel pulls only where the prediction has left the interval of its thresholds."""
    pace = new_core(small_module(), TrackerOptions(), 1).pace
    for fresh, slack in ((False, pace.slack), (True, pace.slack_fresh)):
        assert pixel_residual(0.9 * slack * 0.2, False, fresh, 0.2, 0.2, pace) == (0.0, 0.0)
        residual, share = pixel_residual(slack * 0.2 + 0.05, False, fresh, 0.2, 0.2, pace)
        assert residual == pytest.approx(0.05)
        assert 0.0 < share < 1.0
        assert pixel_residual(-slack * 0.3 - 0.05, False, fresh, 0.3, 0.2, pace)[0] == pytest.approx(-0.05)
    assert pixel_residual(0.7, True, False, 0.2, 0.2, pace) == (0.7, 1.0)


def test_prediction_follows_the_motion_model(core: Core) -> None:
    """State and covariance after 10 ms are F x and F P F' + Q of a constant velocity with white acceleration."""
    table, pace, dt = core.table, core.pace, 0.01
    state, cov = table.state[0].copy(), table.cov[0].copy()
    predict(table.rows[0], int(table.t_ns[0]) + 10_000_000, pace)
    f = np.eye(5)
    f[0, 2] = f[1, 3] = dt
    speed = np.hypot(state[2], state[3])
    q = (pace.acceleration_share * speed + pace.acceleration_floor) ** 2 * pace.acceleration_time_s
    noise = np.zeros((5, 5))
    for k in range(2):
        noise[k, k], noise[k + 2, k + 2] = q * dt**3 / 3, q * dt
        noise[k, k + 2] = noise[k + 2, k] = q * dt**2 / 2
    noise[4, 4] = pace.gain_rate**2 * dt
    np.testing.assert_allclose(table.state[0], f @ state)
    np.testing.assert_allclose(table.cov[0], f @ cov @ f.T + noise, rtol=1e-9)


def test_position_update_is_kalmans(core: Core) -> None:
    """A position joins state and covariance by the textbook formula."""
    table = core.table
    state, cov = table.state[0].copy(), table.cov[0].copy()
    r = np.array([[0.04, 0.01], [0.01, 0.09]])
    observe_position(table.rows[0], 100.9, 79.8, r[0, 0], r[0, 1], r[1, 1])
    gain = cov[:, :2] @ np.linalg.inv(cov[:2, :2] + r)
    np.testing.assert_allclose(table.state[0], state + gain @ (np.array([100.9, 79.8]) - state[:2]))
    np.testing.assert_allclose(table.cov[0], cov - gain @ cov[:2], atol=1e-9)


def test_rewind_returns_to_a_remembered_state(core: Core) -> None:
    """A feature taken back is where it was, later memories are gone, and it refuses to go back before its start."""
    table, row, start = core.table, core.table.rows[0], int(core.table.t_ns[0])
    remember(row, core.pace)
    first = table.state[0].copy()
    for k in range(1, 6):
        predict(row, start + k * 1_000_000, core.pace)
        table.state[0, 0] += 0.5
        remember(row, core.pace)
    path = np.zeros((3, 2))
    trajectory(row, start + np.array([0, 2_500_000, 7_000_000]), path)
    np.testing.assert_allclose(path[0], first[:2])
    assert path[1, 0] == pytest.approx(first[0] + 2.5 * 0.4 + 2.5 * 0.5)
    assert path[2, 0] == pytest.approx(first[0] + 7 * 0.4 + 5 * 0.5)
    assert rewind(row, start + 2_000_000, core.pace)
    assert table.state[0, 0] == pytest.approx(first[0] + 2 * 0.4 + 2 * 0.5)
    assert not rewind(row, start - 1, core.pace)
    assert table.t_ns[0] == start + 2_000_000


def test_an_event_moves_the_level_by_what_is_left_of_its_step(core: Core) -> None:
    """The first event after a frame adds the part of its threshold that came after it; later ones add all of it."""
    levels = new_levels(core.module)
    pixel = levels[10, 10]
    levels.level[10, 10], levels.reference_ns[10, 10], levels.last_ns[10, 10] = -1.0, 2_000_000, 1_000_000
    apply_event(pixel, 3_000_000, 1, 100_000_000, core.pace)
    assert levels.level[10, 10] == pytest.approx(-1.0 + 0.5 * 0.2)
    apply_event(pixel, 4_000_000, 1, 100_000_000, core.pace)
    apply_event(pixel, 5_000_000, 0, 100_000_000, core.pace)
    assert levels.level[10, 10] == pytest.approx(-1.0 + 1.5 * 0.2 - 0.22)
    assert levels.anchor_ns[10, 10] == 5_000_000


def test_lines_come_on_the_output_grid(core: Core) -> None:
    """Between frames each feature has a line at every multiple of the output interval, and no event is used twice."""
    levels, start = new_levels(core.module), int(core.table.t_ns[0])
    clock, base = np.array([start, core.pace.base_ns]), core.pace.base_ns
    t = np.arange(start + 1, start + 5 * base, 10_000)
    x, y, on = (np.full(len(t), v, k) for v, k in ((20, np.uint16), (20, np.uint16), (1, np.uint8)))
    slot, when, rows = np.zeros(50, np.int64), np.zeros(50, np.int64), np.zeros((50, 5))
    args = (levels, core.table.records, core.features.work, core.pace, clock, np.zeros(2), slot, when, rows)
    written, used = advance(t, x, y, on, int(t[-1]), 1_000_000, *args)
    assert when[:written].tolist() == [start + k * base for k in range(1, 5)]
    assert used == len(t)


def test_small_algebra() -> None:
    """Factor, substitution and inverse agree with numpy."""
    random = np.random.default_rng(0)
    m = random.standard_normal((5, 5))
    m = m @ m.T + np.eye(5)
    factor, b = m.copy(), random.standard_normal(5)
    expected = np.linalg.solve(m, b)
    factorise(factor)
    substitute(factor, b)
    np.testing.assert_allclose(b, expected)
    inverse = np.zeros((5, 5))
    invert(m.copy(), inverse, np.zeros(5))
    np.testing.assert_allclose(inverse, np.linalg.inv(m), rtol=1e-9)


def crowd(strays: int = 0) -> tuple[Core, Array]:
    """Forty features that move by an affine field (2, 3), some of them on ways of their own."""
    core, random = new_core(small_module(), TrackerOptions(), 40), np.random.default_rng(7)
    table, pace = core.table, core.pace
    field = np.array([[900.0, 120.0, -60.0], [-300.0, 40.0, 150.0]])
    table.active[:] = 1
    table.state[:, :2] = random.uniform([0, 0], [pace.width, pace.height], (40, 2))
    about = (table.state[:, :2] - 0.5 * np.array([pace.width, pace.height])) / pace.width
    table.state[:, 2:4] = np.column_stack([np.ones(40), about]) @ field.T
    table.state[:strays, 2:4] += random.uniform(2000, 4000, (strays, 2))
    table.cov[:] = np.diag([0.1, 0.1, 900.0, 900.0, 1e-3])
    return core, field


def test_the_common_field_is_that_of_most_features() -> None:
    """Exact but for the weak prior without strays; a quarter of strays moves its middle by a few per cent only."""
    for strays, within in ((0, 0.01), (10, 0.05)):
        core, field = crowd(strays)
        found = np.zeros((2, 3))
        assert velocity_field(core.table.records, core.pace, found)
        assert np.linalg.norm(found[:, 0] - field[:, 0]) < within * np.linalg.norm(field[:, 0])
    few, _ = crowd()
    few.table.active[5:] = 0
    assert not velocity_field(few.table.records, few.pace, np.zeros((2, 3)))


def test_pulls_are_a_kalman_update_and_bounded_for_strays() -> None:
    """A feature near the field is updated by its stated deviation; one that goes its own way is moved little."""
    core, field = crowd()
    row, pace = core.table.rows[0], core.pace
    about = (row.state[:2] - 0.5 * np.array([pace.width, pace.height])) / pace.width
    mean = field @ np.array([1.0, *about])
    row.state[2] = mean[0] + 20.0
    sigma = pace.common_share * np.hypot(*mean) + pace.common_floor
    variance = sigma**2 * pace.common_time_s / 1e-3
    pull_velocity(row, field, 1e-3, pace)
    assert row.state[2] == pytest.approx(mean[0] + 20.0 * variance / (variance + 900.0))
    assert row.cov[2, 2] == pytest.approx(900.0 * variance / (variance + 900.0))
    row.state[2], row.cov[2, 2] = mean[0] + 5000.0, 900.0
    pull_velocity(row, field, 1e-3, pace)
    assert row.state[2] > mean[0] + 4900.0
