"""Recordings of the greenhouse: repeatable, complete, readable, and true."""

from pathlib import Path

import numpy as np
import pytest
from pydantic import ValidationError

from hybridtrack.geometry import se3
from hybridtrack.module import HybridModule, save_module
from hybridtrack.recording import Recording
from hybridtrack.recording.truth import read_truth
from hybridtrack.synthesis.greenhouse import GreenhouseRecipe, World, build_world, generate_greenhouse
from hybridtrack.synthesis.picture import truth_tracks
from hybridtrack.synthesis.recipe import load_recipe
from tests.synthesis.modules import small_module

SEQUENCES = Path(__file__).parents[2] / "sequences"


def nominal_file(folder: Path) -> Path:
    """A small nominal module on disk."""
    module = small_module(40, 24).model_copy(update={"contrast": None, "colour_from_event": None, "defects": None})
    save_module(module, folder / "small.module.json")
    return folder / "small.module.json"


def small_recipe(folder: Path, **parts: object) -> GreenhouseRecipe:
    """A tenth of a second in a coarsely drawn greenhouse."""
    data = {
        "kind": "greenhouse",
        "module": {"file": str(nominal_file(folder))},
        "truth": {"hot": 2, "dead": 2},
        "scene": {"texel_mm": 9.0},
        "duration_s": 0.1,
        "motion": {"preset": "reversing", "peak_px_s": 300.0, "amplitude_px": 20.0},
    }
    return GreenhouseRecipe.model_validate({**data, **parts})


@pytest.fixture(scope="module")
def recorded(tmp_path_factory: pytest.TempPathFactory) -> tuple[GreenhouseRecipe, Path, World]:
    """A recipe, the recording of its seed 3, and the world rebuilt from them."""
    folder = tmp_path_factory.mktemp("greenhouse")
    recipe = small_recipe(folder)
    generate_greenhouse(recipe, folder / "first.h5", 3)
    return recipe, folder / "first.h5", build_world(recipe, 3)


def test_recording_holds_all_it_should(recorded: tuple[GreenhouseRecipe, Path, World]) -> None:
    """Events fill the time, frames come at their rate with picture content, inertial samples at theirs."""
    with Recording.open(recorded[1]) as recording:
        first, last = recording.event_span_ns
        assert first < 0.01e9
        assert 0.09e9 < last < 0.11e9
        assert 4 <= len(recording.frames) <= 6
        assert np.all(np.abs(np.diff(recording.frames.t_start_ns) - 1e9 / 60) <= 1)
        assert recording.frames.shape == (48, 80)
        assert recording.frame_image(0).std() > 5
        assert recording.imu is not None
        assert len(recording.imu.t) == 50
        assert recording.module is not None
        assert recording.module.lens is None
        assert recording.settings is not None
        assert recording.settings["synthetic"] is True
        events = recording.events()
        assert events.x.max() < 40
        assert events.y.max() < 24
        assert 0.3 < events.on.mean() < 0.7


def test_truth_is_that_of_the_world(recorded: tuple[GreenhouseRecipe, Path, World]) -> None:
    """Poses every millisecond and the true module agree with what the same recipe and seed rebuild."""
    _, path, world = recorded
    truth = read_truth(path)
    assert np.diff(truth.pose_t_ns).max() <= 1_000_000
    np.testing.assert_allclose(truth.world_from_camera, world.trajectory.poses(truth.pose_t_ns), atol=1e-9)
    assert truth.module == world.module_true
    assert truth.extras["on_threshold"].shape == (24, 40)
    assert truth.extras["speed_median_px_s"].max() < 600


def test_same_seed_same_recording(recorded: tuple[GreenhouseRecipe, Path, World], tmp_path: Path) -> None:
    """A second run gives the same events and frames bit by bit; another seed gives others."""
    recipe, path, _ = recorded
    generate_greenhouse(recipe, tmp_path / "again.h5", 3)
    generate_greenhouse(recipe, tmp_path / "other.h5", 4)
    with (
        Recording.open(path) as one,
        Recording.open(tmp_path / "again.h5") as two,
        Recording.open(tmp_path / "other.h5") as other,
    ):
        a, b, c = one.events(), two.events(), other.events()
        for name in ("t", "x", "y", "on"):
            assert np.array_equal(getattr(a, name), getattr(b, name))
        assert len(a) != len(c) or not np.array_equal(a.t, c.t)
        for i in range(len(one.frames)):
            assert np.array_equal(one.frame_image(i), two.frame_image(i))


def test_frames_lie_inside_the_recording(recorded: tuple[GreenhouseRecipe, Path, World]) -> None:
    """On the event clock every row of every frame is exposed between time zero and the end."""
    _, path, world = recorded
    module = world.module_true
    with Recording.open(path) as recording:
        timing, mode = module.known_timing(), module.frame_mode
        starts = timing.exposure_start_ns(recording.frames.t_start_ns[:, None], mode.read_order(np.arange(mode.height)))
        assert starts.min() >= 0
        assert starts.max() + timing.true_exposure_ns(recording.frames.exposure_ns[0]) <= 0.1e9


def test_events_follow_frames(recorded: tuple[GreenhouseRecipe, Path, World]) -> None:
    """Where the picture became brighter from one frame to the next, event pixels counted up, and the other way."""
    _, path, world = recorded
    module = world.module_true
    with Recording.open(path) as recording:
        first, last = recording.frame_image(0).astype(float), recording.frame_image(1).astype(float)
        middle = recording.frames.t_start_ns[:2] + (module.known_timing().frame_offset_ns or 0.0) + 2e6
        events = recording.events(int(middle[0]), int(middle[1]))
    net = np.zeros((24, 40))
    np.add.at(net, (events.y, events.x), np.where(events.on == 1, 1.0, -1.0))
    place = np.rint(module.frame_mode.frame_from_colour(module.event_pixel_positions())).astype(int)
    u, v = np.clip(place[..., 0], 0, 79), np.clip(place[..., 1], 0, 47)
    change = np.log((last[v, u] + 2) / (first[v, u] + 2))
    strong = np.abs(change) > 0.5
    assert strong.sum() > 20
    assert np.corrcoef(change[strong], net[strong])[0, 1] > 0.7


def test_truth_tracks_reproject_by_the_recorded_truth(recorded: tuple[GreenhouseRecipe, Path, World]) -> None:
    """A seed's track is one world point, projected by the poses and the lens in the file, to 1e-6 px."""
    _, path, world = recorded
    truth = read_truth(path)
    assert truth.module is not None
    random = np.random.default_rng(0)
    uv = random.uniform([20, 15], [140, 80], (12, 2))
    index = np.array([0, 20, 55, 90])
    tracks, visible = truth_tracks(world.scene, world.module_true, world.trajectory, uv, 0.0, truth.pose_t_ns[index])
    np.testing.assert_allclose(tracks[0], uv, atol=1e-6)
    lens = truth.module.lens_model()
    rays = lens.unproject(np.nan_to_num(tracks))
    # Two views of one fixed point: it lies on the first view's ray at some depth that both agree on.
    for n in np.flatnonzero(visible.all(axis=0)):
        poses = truth.world_from_camera[index]
        directions = (poses[:, :3, :3] @ rays[:, n, :, None])[..., 0]
        across = np.eye(3) - directions[:, :, None] * directions[:, None, :]
        point = np.linalg.solve(across.sum(axis=0), (across @ poses[:, :3, 3, None])[..., 0].sum(axis=0))
        again = lens.project(se3.transform(se3.inverse(poses), np.broadcast_to(point, (4, 1, 3))))[:, 0]
        np.testing.assert_allclose(again, tracks[:, n], atol=1e-5)


def test_module_and_scene_keep_their_own_seeds(tmp_path: Path) -> None:
    """With seeds of their own, module and scene stay while the path changes with the recording's seed."""
    recipe = small_recipe(tmp_path, module_seed=7, scene={"texel_mm": 9.0, "seed": 5})
    one, two = build_world(recipe, 1), build_world(recipe, 2)
    assert one.module_true == two.module_true
    assert np.array_equal(one.scene.texels, two.scene.texels)
    assert not np.allclose(one.trajectory.poses([0.0]), two.trajectory.poses([0.0]))


@pytest.mark.parametrize("name", ["greenhouse_lap", "greenhouse_lap_long", "greenhouse_reversing"])
def test_recipes_of_the_project_load(name: str) -> None:
    """The recipes in the sequences folder are valid and find their module."""
    recipe = load_recipe(SEQUENCES / f"{name}.toml")
    assert isinstance(recipe, GreenhouseRecipe)
    assert isinstance(recipe.module.load(), HybridModule)
    assert recipe.duration_s <= 8.0


def test_unknown_keys_are_refused(tmp_path: Path) -> None:
    """A misspelt key is refused, not ignored."""
    with pytest.raises(ValidationError, match="Extra inputs are not permitted"):
        small_recipe(tmp_path, durration_s=1.0)
