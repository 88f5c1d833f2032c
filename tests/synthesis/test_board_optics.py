"""How pixels see a board: coverage against brute force, areas, the sweep of a screen."""

import numpy as np
import pytest
from scipy.stats import multivariate_normal

from hybridtrack.geometry import se3, so3
from hybridtrack.module import EventGrid
from hybridtrack.synthesis.board_kernels import COVER_A, COVER_B, STILL, SWEEP, bivariate
from hybridtrack.synthesis.board_optics import BoardOptics, background_waves
from tests.synthesis.boards import board_scene, board_target, lens_module


def tilted_pose(distance_m: float = 0.25) -> np.ndarray:
    """A pose from which the small board is seen tilted, rolled and off centre."""
    rotation = so3.exp([0.35, -0.3, 0.0]) @ so3.exp([0.0, 0.0, 0.3])
    return se3.compose(rotation, np.array([0.12, 0.075, 0.0]) - rotation @ np.array([0.005, -0.004, distance_m]))


@pytest.mark.parametrize("rho", [-0.8, -0.3, 0.0, 0.45, 0.9])
def test_bivariate_normal_is_that_of_scipy(rho: float) -> None:
    """The corner's integral agrees with scipy's bivariate normal distribution."""
    law = multivariate_normal([0, 0], [[1, rho], [rho, 1]])
    for h, k in ((0.0, 0.0), (-1.2, 0.4), (2.1, 1.9), (-3.0, -2.0), (0.3, -4.0)):
        assert bivariate(h, k, rho) == pytest.approx(law.cdf([h, k]), abs=2e-5)


def brute_force(module, scene, pose, uv, random, samples=40000):  # type: ignore[no-untyped-def]
    """Share of set A's light in a square pixel at `uv`: the lens and the board asked sample by sample."""
    offset = scene.psf_px * random.standard_normal((samples, 2)) + random.uniform(-0.5, 0.5, (samples, 2))
    rays = module.lens_model().unproject(uv + offset) @ pose[:3, :3].T
    hit = pose[:3, 3] - rays * (pose[2, 3] / rays[:, 2])[:, None]
    column, row = (np.floor(hit[:, axis] / scene.square_m[axis]).astype(int) for axis in (0, 1))
    on = (column >= 0) & (column < scene.target.columns) & (row >= 0) & (row < scene.target.rows)
    lit = scene.target.square_sets()[np.where(on, row, 0), np.where(on, column, 0)]
    return float(np.mean(on & (lit == 1)))


def test_coverage_agrees_with_brute_force_through_the_lens() -> None:
    """At edges and corners the analytic share of light is that of 40 000 rays through lens, blur and aperture."""
    module, scene, pose = lens_module(), board_scene(psf_px=0.6), tilted_pose()
    cover = BoardOptics.of_colour_pixels(module, scene).pictures(pose)[COVER_A]
    random = np.random.default_rng(0)
    corners = module.lens_model().project((scene.target.corners_m().reshape(-1, 3) - pose[:3, 3]) @ pose[:3, :3])
    partial = np.argwhere((cover > 0.02) & (cover < 0.98))
    chosen = [np.rint(corners[k] + random.uniform(-1.5, 1.5, 2)).astype(int) for k in range(0, len(corners), 2)]
    chosen += [partial[k][::-1] for k in random.permutation(len(partial))[:25]]
    errors = [cover[v, u] - brute_force(module, scene, pose, np.array([u, v]), random) for u, v in chosen]
    # 40 000 samples leave 0.0025 at one half; the Gaussian stand-in for the square aperture at most 0.002.
    assert np.max(np.abs(errors)) < 0.0025 * 4 + 0.002
    assert abs(np.mean(errors)) < 0.0015


def test_square_aperture_is_close_to_its_gaussian() -> None:
    """Gaussian and square aperture together are within 0.2 % of one Gaussian of their variance."""
    x = np.linspace(-4, 4, 4001)
    psf = np.exp(-0.5 * (x / 0.6) ** 2)
    both = np.convolve(psf / psf.sum(), (np.abs(x) <= 0.5) / np.count_nonzero(np.abs(x) <= 0.5), mode="same")
    stand_in = np.exp(-0.5 * x**2 / (0.36 + 1 / 12))
    assert np.abs(np.cumsum(both) - np.cumsum(stand_in / stand_in.sum())).max() < 0.002


def projected_area(module, pose, low, high, steps=40):  # type: ignore[no-untyped-def]
    """Area in px^2 of the picture of one rectangle of the board (shoelace formula)."""
    s = np.linspace(0, 1, steps, endpoint=False)
    way = [(s, 0 * s), (0 * s + 1, s), (1 - s, 0 * s + 1), (0 * s, 1 - s)]
    unit = np.concatenate([np.stack(pair, axis=1) for pair in way])
    points = np.concatenate([low + unit * (np.asarray(high) - low), np.zeros((len(unit), 1))], axis=1)
    uv = module.lens_model().project((points - pose[:3, 3]) @ pose[:3, :3])
    u, v = uv.T
    return 0.5 * abs(np.dot(u, np.roll(v, -1)) - np.dot(v, np.roll(u, -1)))


def test_coverage_adds_up_to_the_squares_areas() -> None:
    """The sum over the picture of each set's share is the area of that set's squares in the picture."""
    target = board_target(kind="counterphase_checker")
    module, scene, pose = lens_module(), board_scene(target), tilted_pose(0.3)
    pictures = BoardOptics.of_colour_pixels(module, scene).pictures(pose)
    for kind, which in ((COVER_A, 1), (COVER_B, -1)):
        squares = np.argwhere(target.square_sets() == which)
        area = sum(projected_area(module, pose, 0.03 * square[::-1], 0.03 * (square[::-1] + 1)) for square in squares)
        assert pictures[kind].sum() == pytest.approx(area, rel=2e-4)


def test_still_light_is_dark_board_mount_and_background() -> None:
    """What does not blink is the board's dark level inside, the mount round it, the background beyond."""
    module, scene = lens_module(), board_scene()
    still = BoardOptics.of_colour_pixels(module, scene).pictures(tilted_pose(0.3))[STILL]
    assert np.unique(np.round(still, 3)).min() == 15.0
    assert still.max() == pytest.approx(30.0, abs=1e-4)
    assert np.count_nonzero(np.abs(still - 20.0) < 1e-4) > 1000


def test_event_pixels_see_the_colour_picture_at_their_places() -> None:
    """Without centroid, mirrored event pixels see what the clear sites' colour pixels see."""
    module = lens_module(event_grid=EventGrid(width=80, height=50, mirror_x=True), colour_from_event=None)
    mapped = module.model_copy(update={"colour_from_event": None})
    matrix = [[-4.0, 0.0, 2.0 + 4 * 79], [0.0, 4.0, 1.0]]
    module = module.model_copy(update={"colour_from_event": type(lens_module().colour_from_event)(matrix=matrix)})
    scene, pose = board_scene(waves=background_waves(0.3, np.random.default_rng(1))), tilted_pose()
    colour = BoardOptics.of_colour_pixels(module, scene).pictures(pose)
    event = BoardOptics.of_event_pixels(module, scene).pictures(pose)
    uv = np.rint(mapped.event_pixel_positions()).astype(int)
    np.testing.assert_allclose(event[:3], colour[:3, uv[..., 1], uv[..., 0]], atol=1e-3)


def test_rows_see_their_own_poses() -> None:
    """A row given a later pose shows the picture from there."""
    optics = BoardOptics.of_colour_pixels(lens_module(), board_scene())
    poses = np.stack([tilted_pose(0.25), tilted_pose(0.3)])
    rows = (np.arange(200) >= 100).astype(int)
    mixed = optics.pictures(poses, rows)
    np.testing.assert_array_equal(mixed[:, :100], optics.pictures(poses[0])[:, :100])
    np.testing.assert_array_equal(mixed[:, 100:], optics.pictures(poses[1])[:, 100:])


@pytest.mark.parametrize(
    ("direction", "axis", "rising"), [("down", 0, 1), ("up", 0, -1), ("right", 1, 1), ("left", 1, -1)]
)
def test_sweep_runs_over_the_board(direction: str, axis: int, rising: int) -> None:
    """A screen's sweep goes from 0 to 1 across the board in its direction."""
    pose = se3.compose(np.eye(3), np.array([0.12, 0.075, -0.3]))
    optics = BoardOptics.of_colour_pixels(lens_module(), board_scene(board_target(scan_direction=direction)))
    sweep = optics.pictures(pose)[SWEEP]
    assert sweep.min() == 0.0
    assert sweep.max() == 1.0
    assert np.all(rising * np.diff(sweep[20:180, 20:300], axis=axis) >= 0)


def test_background_waves_have_the_stated_contrast() -> None:
    """The background's pattern has the RMS that was asked for."""
    waves = background_waves(0.2, np.random.default_rng(3))
    x, y = np.random.default_rng(4).uniform(-50, 50, (2, 20000))
    pattern = sum(a * np.sin(kx * x + ky * y + phase) for a, kx, ky, phase in waves)
    assert np.std(pattern) == pytest.approx(0.2, rel=0.05)
