"""Views of a board: where it stands in the picture, tilts, sway, and the ways between."""

import numpy as np
import pytest
from pydantic import ValidationError

from hybridtrack.errors import OptionError
from hybridtrack.geometry import FisheyeLens, Lens, PerspectiveLens, se3, so3
from hybridtrack.synthesis.board_views import BoardMotion, ViewRecipe, board_outline_m, choose_views, look_at, timeline
from tests.synthesis.boards import board_target

SIZE = (1280, 800)
PERSPECTIVE = PerspectiveLens(920.0, 921.0, 630.0, 395.0, (-0.12, 0.02, 0.0), (3e-4, -2e-4))
FISHEYE = FisheyeLens(580.0, 580.5, 645.0, 402.0, (0.02, -0.004, 0.0, 0.0))
OUTLINE = board_outline_m(board_target(columns=12, rows=9, steady_dark=[]), (0.03, 0.03))


def views(recipe: ViewRecipe, lens: Lens, seed: int = 0) -> np.ndarray:
    """Poses of one seed."""
    return choose_views(recipe, OUTLINE, lens, SIZE, np.random.default_rng(seed))


def boxes(poses: np.ndarray, lens: Lens) -> np.ndarray:
    """Lowest and highest (u, v) of the board in each view: (V, 2, 2)."""
    uv = np.stack([lens.project((OUTLINE - pose[:3, 3]) @ pose[:3, :3]) for pose in poses])
    return np.stack([uv.min(axis=1), uv.max(axis=1)], axis=1)


@pytest.mark.parametrize("lens", [PERSPECTIVE, FISHEYE], ids=["perspective", "fisheye"])
@pytest.mark.parametrize("seed", range(4))
def test_whole_board_fills_the_picture_as_asked(lens: Lens, seed: int) -> None:
    """Every view shows the whole board, as large as asked."""
    box = boxes(views(ViewRecipe(fill=(0.7, 0.95)), lens, seed), lens)
    assert box.min() >= 0
    assert np.all(box[:, 1] <= np.array(SIZE) - 1)
    fill = np.max((box[:, 1] - box[:, 0]) / SIZE, axis=1)
    assert np.all((fill > 0.55) & (fill < 0.97))


def test_views_reach_all_corners_of_the_picture() -> None:
    """Over the set of views the board comes within 60 px of each corner's two edges at once."""
    box = boxes(views(ViewRecipe(), PERSPECTIVE), PERSPECTIVE)
    for u, v in ((0, 0), (1, 0), (0, 1), (1, 1)):
        near_u = box[:, 0, 0] < 60 if u == 0 else box[:, 1, 0] > SIZE[0] - 60
        near_v = box[:, 0, 1] < 60 if v == 0 else box[:, 1, 1] > SIZE[1] - 60
        assert np.any(near_u & near_v)


def test_tilt_and_roll_stay_in_their_ranges() -> None:
    """Board and sensor make angles up to the largest tilt, and most views are well tilted."""
    poses = views(ViewRecipe(count=30, tilt_max_deg=35.0), PERSPECTIVE)
    tilt = np.degrees(np.arccos(poses[:, 2, 2]))
    assert tilt.max() <= 35.0 + 1e-9
    assert np.median(tilt) > 17.0


def test_partial_views_hang_over_the_edge() -> None:
    """The asked share of views shows a part of the board only."""
    box = boxes(views(ViewRecipe(count=10, partial=0.5), PERSPECTIVE), PERSPECTIVE)
    over = (box[:, 0].min(axis=1) < 0) | np.any(box[:, 1] > np.array(SIZE) - 1, axis=1)
    assert np.count_nonzero(over) == 5


def test_one_seed_one_set_of_views() -> None:
    """The same seed gives the same views, another seed others."""
    np.testing.assert_array_equal(views(ViewRecipe(), PERSPECTIVE, 3), views(ViewRecipe(), PERSPECTIVE, 3))
    assert np.any(views(ViewRecipe(), PERSPECTIVE, 3) != views(ViewRecipe(), PERSPECTIVE, 4))


def test_look_at_turns_the_axis() -> None:
    """The rotation takes the optical axis to the direction asked for."""
    direction = np.array([0.3, -0.5, 0.8]) / np.linalg.norm([0.3, -0.5, 0.8])
    np.testing.assert_allclose(look_at(direction) @ [0, 0, 1], direction, atol=1e-12)
    np.testing.assert_array_equal(look_at(np.array([0.0, 0.0, 1.0])), np.eye(3))


@pytest.mark.parametrize(("between", "ends", "count"), [("gap", 1.9, 3), ("cut", 1.5, 3), ("move", 1.9, 5)])
def test_timeline_of_views(between: str, ends: float, count: int) -> None:
    """A gap and a move take their time, a cut none; only moves are segments of their own."""
    segments = timeline(ViewRecipe.model_validate({"count": 3, "between": between, "between_s": 0.2}))
    assert segments[-1].t1_ns == pytest.approx(ends * 1e9)
    assert len(segments) == count
    assert [s.is_move for s in segments] == ([False, True, False, True, False] if between == "move" else [False] * 3)


def moving(**fields: object) -> BoardMotion:
    """The motion of a recipe."""
    recipe = ViewRecipe.model_validate({"count": 3, "dwell_s": 2.0, **fields})
    return BoardMotion(recipe, views(recipe, PERSPECTIVE), 920.0, 4.0, np.random.default_rng(5))


def test_still_views_keep_their_pose() -> None:
    """Without sway the pose of a view is the same at all its times."""
    motion = moving()
    poses = motion.poses(np.linspace(0, 2e9 - 1, 50))
    np.testing.assert_array_equal(poses, np.broadcast_to(motion.views[0], poses.shape))


def test_moves_are_smooth_from_view_to_view() -> None:
    """A move starts and ends at rest in the two views' poses, and passes between."""
    motion = moving(between="move", between_s=0.5)
    t = np.linspace(1.9e9, 2.6e9, 1401)
    poses = motion.poses(t)
    np.testing.assert_allclose(poses[0], motion.views[0])
    np.testing.assert_allclose(poses[-1], motion.views[1])
    step = np.linalg.norm(np.diff(poses[:, :3, 3], axis=0), axis=1)
    assert step.max() < 3 * np.linalg.norm(motion.views[1, :3, 3] - motion.views[0, :3, 3]) / 1000
    assert so3.project_to_rotation(poses[700, :3, :3]) == pytest.approx(poses[700, :3, :3], abs=1e-9)


def test_sway_moves_the_picture_as_far_as_asked() -> None:
    """Sway of 3 event pixels moves the board's middle by about that, at most twice, and the board stays near."""
    motion = moving(sway_event_px=3.0)
    poses = motion.poses(np.linspace(0, 2e9 - 1, 400))
    middle = np.array([0.18, 0.135, 0.0])
    uv = np.stack([PERSPECTIVE.project(se3.transform(se3.inverse(pose), middle[None]))[0] for pose in poses])
    still = PERSPECTIVE.project(se3.transform(se3.inverse(motion.views[0]), middle[None]))[0]
    peak = np.linalg.norm(uv - still, axis=1).max() / 4.0
    assert 1.0 < peak < 6.0


def test_refusals() -> None:
    """Ranges that make no sense, and boards that find no place, are refused."""
    with pytest.raises(ValidationError, match="two rising numbers"):
        ViewRecipe(fill=(0.9, 0.5))
    with pytest.raises(ValidationError, match="between_s must be positive"):
        ViewRecipe(between="move", between_s=0.0)
    narrow = PerspectiveLens(900.0, 900.0, 639.5, 399.5, (-2.0, 0.0, 0.0))
    with pytest.raises(OptionError, match="leaves the board no place"):
        views(ViewRecipe(fill=(0.95, 1.0)), narrow)
