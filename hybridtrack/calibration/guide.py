"""What a set of board views covers, and which view to take next.

A lens, clocks and a map can be told from views that between them tilt the board both ways about both of its axes, turn
it in its plane, reach all four corners of the picture, and stand at two distances (Zhang 2000; practice). Each is a
*need*; the next view is put together from those that are open: a tilt, in a corner, near or far.

Poses are rough: a lens that is not known is taken as the trial lens that explains the views best, and with few views as
one whose focal length is a picture's diagonal.
"""

from dataclasses import dataclass

import numpy as np

from hybridtrack.calibration.bundle import ViewPoints
from hybridtrack.calibration.guide_views import RecordingLook, SeenBoard
from hybridtrack.calibration.lens_start import start_pose, start_scene, trial_lens
from hybridtrack.calibration.view_data import Lens
from hybridtrack.errors import HybridtrackError
from hybridtrack.module import HybridModule, Target

Array = np.ndarray

LEAST_VIEWS, GOOD_VIEWS = 6, 12
LEAST_TILT_DEG, ASKED_TILT_DEG = 15.0, 30.0
LEAST_ROLL_DEG = 15.0
LEAST_DISTANCE_RATIO = 1.25
CORNER_SHARE = (0.2, 0.25)  # of the picture's width and height: so near the edge counts as reaching the corner
CELLS = (8, 5)
LEAST_AREA = 0.8
VIEWS_FOR_LENS = 4
CORNERS = {"upper left": (0, 0), "upper right": (1, 0), "lower left": (0, 1), "lower right": (1, 1)}
# How the board stands when its normal leans: which of its edges is the nearer one, as the camera sees it.
TILTS = {"right edge nearer": (0, 1), "left edge nearer": (0, -1), "lower edge nearer": (1, 1),
         "upper edge nearer": (1, -1)}  # fmt: skip


@dataclass(frozen=True)
class BoardStand:
    """How a board stands in a view: `tilt_deg` about the vertical and the horizontal, positive where its right or lower
    edge is the nearer; `roll_deg` in its plane, half turns taken off; `distance_m` of its middle.
    """

    board: SeenBoard
    tilt_deg: tuple[float, float]
    roll_deg: float
    distance_m: float


@dataclass(frozen=True)
class Need:
    """One thing that a set of views must have: what there is of it in words, and whether that is enough."""

    name: str
    found: str
    met: bool


@dataclass(frozen=True)
class Guidance:
    """Needs, the sentence that says what to do next, what could not be used, and warnings."""

    stands: list[BoardStand]
    needs: list[Need]
    next_step: str
    misses: list[str]
    warnings: list[str]

    @property
    def complete(self) -> bool:
        """Whether every need is met."""
        return all(need.met for need in self.needs)


def points_of(board: SeenBoard, target: Target) -> ViewPoints:
    """The board's corners as the lens fits take them, all of one weight."""
    corners = target.corners_m()[board.ij[:, 1] - 1, board.ij[:, 0] - 1]
    return ViewPoints(corners, board.uv, np.tile(np.eye(2), (len(board.uv), 1, 1)))


def lens_guess(views: list[ViewPoints], module: HybridModule) -> Lens:
    """The module's lens; else the trial lens that explains the views; else one as long as the picture's diagonal."""
    width, height = module.colour_array.width, module.colour_array.height
    if module.lens is not None:
        return module.lens_model()
    if len(views) >= VIEWS_FOR_LENS:
        try:
            return start_scene("perspective", views, width, height).lens
        except HybridtrackError:
            pass
    return trial_lens("perspective", float(np.hypot(width, height)), width, height)


def stand_of(board: SeenBoard, lens: Lens, target: Target) -> BoardStand | None:
    """How the board stands, or None where the lens gives no pose."""
    pose = start_pose(lens, points_of(board, target))
    if pose is None:
        return None
    normal = pose[:3, 2]
    tilt = np.degrees(np.arctan2(normal[:2], normal[2]))
    roll = float(np.degrees(np.arctan2(pose[1, 0], pose[0, 0])))
    across, down = target.square_xy_m
    middle = pose[:3, :3] @ np.array([target.columns * across / 2, target.rows * down / 2, 0.0]) + pose[:3, 3]
    return BoardStand(board, (float(tilt[0]), float(tilt[1])), (roll + 90.0) % 180.0 - 90.0, float(middle[2]))


def corners_reached(uv: Array, width: int, height: int) -> list[str]:
    """Names of the picture's corners that points (N, 2) come near."""
    x, y = (uv[:, 0] + 0.5) / width, (uv[:, 1] + 0.5) / height
    near = {
        name: (np.abs(x - far_x) < CORNER_SHARE[0]) & (np.abs(y - far_y) < CORNER_SHARE[1])
        for name, (far_x, far_y) in CORNERS.items()
    }
    return [name for name, inside in near.items() if np.any(inside)]


def area_share(uv: Array, width: int, height: int) -> float:
    """Share of the picture's cells that hold one of the points (N, 2)."""
    cell = np.clip(np.floor((uv + 0.5) / [width, height] * CELLS).astype(int), 0, np.array(CELLS) - 1)
    return len(np.unique(cell @ [1, CELLS[0]])) / (CELLS[0] * CELLS[1])


def needs_of(stands: list[BoardStand], module: HybridModule) -> list[Need]:
    """Every need, met or not."""
    width, height = module.colour_array.width, module.colour_array.height
    uv = np.concatenate([stand.board.uv for stand in stands]) if stands else np.empty((0, 2))
    tilts = np.array([stand.tilt_deg for stand in stands]).reshape(-1, 2)
    needs = [
        Need("views", f"{len(stands)} of {LEAST_VIEWS} at least, {GOOD_VIEWS} are good", len(stands) >= LEAST_VIEWS)
    ]
    for name, (axis, sign) in TILTS.items():
        most = float(np.max(sign * tilts[:, axis], initial=0.0))
        needs.append(Need(name, f"{most:.0f} of {LEAST_TILT_DEG:.0f} degrees at least", most >= LEAST_TILT_DEG))
    rolls = np.array([stand.roll_deg for stand in stands])
    # Rolls live on a half circle; their spread is the least arc that holds them all.
    turns = np.sort(rolls)
    gaps = np.diff(np.append(turns, turns[:1] + 180.0)) if len(turns) else np.array([180.0])
    spread = 180.0 - float(gaps.max())
    needs.append(
        Need("turned in its plane", f"by {spread:.0f} of {LEAST_ROLL_DEG:.0f} degrees", spread >= LEAST_ROLL_DEG)
    )
    distances = [stand.distance_m for stand in stands]
    ratio = max(distances) / min(distances) if distances else 1.0
    met = ratio >= LEAST_DISTANCE_RATIO
    needs.append(Need("near and far", f"1 : {ratio:.2f} of 1 : {LEAST_DISTANCE_RATIO:g}", met))
    reached = corners_reached(uv, width, height)
    needs += [
        Need(f"{name} of the picture", "seen" if name in reached else "not seen", name in reached) for name in CORNERS
    ]
    area = area_share(uv, width, height)
    needs.append(Need("picture covered", f"{area:.0%} of {LEAST_AREA:.0%}", area >= LEAST_AREA))
    return needs


def _place(open_needs: list[str], stands: list[BoardStand], module: HybridModule) -> str:
    """Where in the picture the next board should stand."""
    corner = next((name for name in CORNERS if f"{name} of the picture" in open_needs), None)
    if corner is not None:
        return f"in the {corner} corner of the picture"
    if "picture covered" not in open_needs:
        return "in the middle of the picture"
    width, height = module.colour_array.width, module.colour_array.height
    uv = np.concatenate([stand.board.uv for stand in stands])
    third = np.clip(np.floor((uv + 0.5) / [width, height] * 3).astype(int), 0, 2)
    row, column = divmod(int(np.argmin(np.bincount(third @ [1, 3], minlength=9))), 3)
    down, across = ("upper", "middle", "lower")[row], ("left", "middle", "right")[column]
    return f"in the {down} {across} of the picture" if down != across else "in the middle of the picture"


def next_step(needs: list[Need], stands: list[BoardStand], module: HybridModule, partial: bool) -> str:
    """One sentence: the view that serves most of what is open; `partial` views of the board can be identified."""
    open_needs = [need.name for need in needs if not need.met]
    if not open_needs:
        more = (
            "" if len(stands) >= GOOD_VIEWS else f"; {GOOD_VIEWS - len(stands)} more views of any kind make it better"
        )
        return f"All is covered: calibrate{more}."
    tilt = next((name for name in TILTS if name in open_needs), None)
    parts = [_place(open_needs, stands, module)]
    if tilt is not None:
        parts.append(f"its {tilt} by {ASKED_TILT_DEG:.0f} degrees of tilt")
    if "turned in its plane" in open_needs:
        parts.append("turned in its plane by 20 to 30 degrees")
    if "near and far" in open_needs and stands:
        usual = float(np.median([stand.distance_m for stand in stands]))
        nearer = any(f"{name} of the picture" in open_needs for name in CORNERS)
        parts.append(f"{'nearer' if nearer else 'farther'}: {usual / 1.4 if nearer else usual * 1.4:.2f} m away")
    if parts == ["in the middle of the picture"]:
        parts.append("tilted another way than before")
    whole = "" if partial else ", all of it in view"
    return f"Next: the board {', '.join(parts)}{whole}; hold it still for half a second."


def guide(looks: list[RecordingLook], target: Target, module: HybridModule) -> Guidance:
    """Put all recordings' views together and say what comes next."""
    boards = [board for look in looks for board in look.boards]
    lens = lens_guess([points_of(board, target) for board in boards], module)
    stands = [stand for board in boards if (stand := stand_of(board, lens, target)) is not None]
    needs = needs_of(stands, module)
    misses = [f"{look.source}, {miss}" for look in looks for miss in look.misses]
    warnings = list(dict.fromkeys(f"{look.source}: {warning}" for look in looks for warning in look.warnings))
    return Guidance(stands, needs, next_step(needs, stands, module, len(target.steady_dark) >= 3), misses, warnings)
