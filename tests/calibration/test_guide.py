"""What views cover, and advice that leads to a covered set."""

import re

import numpy as np
import pytest
from ideal_board import board_target, nominal_of, small_module

from hybridtrack.calibration.guide import CORNERS, TILTS, Guidance, guide
from hybridtrack.calibration.guide_views import RecordingLook, SeenBoard
from hybridtrack.geometry import se3, so3
from hybridtrack.module import Target

MODULE = small_module()
TARGET = board_target()
MIDDLE_M = np.array([0.18, 0.135, 0.0])


def pose(across_deg: float = 0.0, down_deg: float = 0.0, roll_deg: float = 0.0, at: tuple = (0.0, 0.0), z: float = 0.5):
    """camera_from_board whose normal leans by these angles, its middle at `at` (normalised) and depth `z`."""
    lean = np.array([np.tan(np.radians(across_deg)), np.tan(np.radians(down_deg)), 1.0])
    normal = lean / np.linalg.norm(lean)
    axis = np.cross([0.0, 0.0, 1.0], normal)
    angle = np.arcsin(np.clip(np.linalg.norm(axis), 0, 1))
    tilt = so3.exp(axis / max(np.linalg.norm(axis), 1e-12) * angle)
    rotation = tilt @ so3.exp(np.array([0.0, 0.0, np.radians(roll_deg)]))
    return se3.compose(rotation, np.array([at[0] * z, at[1] * z, z]) - rotation @ MIDDLE_M)


def board_at(camera_from_board: np.ndarray, view: int = 0, target: Target = TARGET) -> SeenBoard:
    """The corners of the board that fall on the array."""
    i, j = np.meshgrid(np.arange(1, target.columns), np.arange(1, target.rows))
    uv = MODULE.lens_model().project(se3.transform(camera_from_board, target.corners_m().reshape(-1, 3)))
    ij = np.stack([i.ravel(), j.ravel()], axis=1)
    inside = np.all((uv >= 0) & (uv <= [479, 319]), axis=1)
    return SeenBoard("r.h5", view, ij[inside], uv[inside])


def guidance(poses: list[np.ndarray], target: Target = TARGET, known_lens: bool = False) -> Guidance:
    boards = tuple(board_at(each, k, target) for k, each in enumerate(poses))
    module = MODULE if known_lens else nominal_of(MODULE)
    return guide([RecordingLook("r.h5", len(boards), boards, (), ())], target, module)


def test_stands_are_exact_with_the_lens_known() -> None:
    """Tilt about both axes, turn of the board's x axis in the picture, and distance, of four boards; a half turn of the
    board counts as none.
    """
    wanted = [(25.0, 0.0, 0.0, 0.5), (-10.0, 18.0, 30.0, 0.45), (0.0, -30.0, -40.0, 0.6), (5.0, 5.0, 170.0, 0.5)]
    poses = [pose(*stand[:3], z=stand[3]) for stand in wanted]
    found = guidance(poses, known_lens=True)
    for stand, (across, down, _, z), true in zip(found.stands, wanted, poses, strict=True):
        assert stand.tilt_deg == pytest.approx((across, down), abs=0.2)
        turn = np.degrees(np.arctan2(true[1, 0], true[0, 0]))
        assert stand.roll_deg == pytest.approx((turn + 90) % 180 - 90, abs=0.2)
        assert stand.distance_m == pytest.approx(z, rel=2e-3)


def test_a_positive_tilt_brings_the_right_or_lower_edge_nearer() -> None:
    """The words agree with depths of the board's edges in the camera."""
    for name, (axis, sign) in TILTS.items():
        tilted = pose(*(sign * 25.0 * np.eye(2)[axis]))
        right, left = (se3.transform(tilted, np.array([[x, 0.135, 0.0]]))[0, 2] for x in (0.36, 0.0))
        lower, upper = (se3.transform(tilted, np.array([[0.18, y, 0.0]]))[0, 2] for y in (0.27, 0.0))
        nearest = min((right, "right"), (left, "left"), (lower, "lower"), (upper, "upper"))[1]
        assert name == f"{nearest} edge nearer"
        met = {need.name for need in guidance([tilted], known_lens=True).needs if need.met}
        assert name in met
        assert not met & (set(TILTS) - {name})


def test_needs_of_nothing_are_all_open() -> None:
    """And the first advice is a tilted board in a corner."""
    found = guidance([])
    assert not any(need.met for need in found.needs)
    assert "in the upper left corner of the picture, its right edge nearer" in found.next_step


def test_central_frontal_views_are_not_enough() -> None:
    """Twelve of them: tilt, corners, distance stay open."""
    found = guidance([pose(at=(1e-3 * k, 0.0)) for k in range(12)])
    still_open = {need.name for need in found.needs if not need.met}
    assert {
        *TILTS,
        "near and far",
        "turned in its plane",
        *(f"{name} of the picture" for name in CORNERS),
    } <= still_open
    assert not found.complete


def obey(sentence: str) -> np.ndarray:
    """What a careful person does on hearing the advice."""
    across = down = roll = 0.0
    place, z = [0.0, 0.0], 0.45
    if match := re.search(r"in the (upper|middle|lower) (left|middle|right)", sentence):
        place = [
            {"left": -0.3, "middle": 0.0, "right": 0.3}[match[2]],
            {"upper": -0.2, "middle": 0.0, "lower": 0.2}[match[1]],
        ]
    if match := re.search(r"its (\w+ edge nearer) by (\d+) degrees", sentence):
        axis, sign = TILTS[match[1]]
        across, down = sign * float(match[2]) * np.eye(2)[axis]
    if "turned in its plane" in sentence:
        roll = 25.0
    if match := re.search(r"er: ([\d.]+) m away", sentence):
        z = float(match[1])
    return pose(across, down, roll, tuple(place), z)


def test_advice_that_is_followed_covers_everything() -> None:
    """From nothing to a complete set in at most twelve views, without the lens known."""
    poses: list[np.ndarray] = []
    while not (found := guidance(poses)).complete:
        assert len(poses) < 12, [need for need in found.needs if not need.met]
        poses.append(obey(found.next_step))
    assert found.next_step.startswith("All is covered: calibrate")


def test_a_board_without_markers_must_be_whole() -> None:
    """Partial views can't be identified then, and the advice says so."""
    words = ", all of it in view;"
    assert words in guidance([], board_target(steady_dark=[])).next_step
    assert words not in guidance([]).next_step


def test_misses_and_warnings_name_their_recording() -> None:
    """Each once, however many recordings repeat it."""
    looks = [RecordingLook("a.h5", 1, (), ("view 0: no grid",), ("too bright",)), RecordingLook("b.h5", 0, (), (), ())]
    found = guide([*looks, looks[0]], TARGET, nominal_of(MODULE))
    assert found.misses[0] == "a.h5, view 0: no grid"
    assert found.warnings == ["a.h5: too bright"]
