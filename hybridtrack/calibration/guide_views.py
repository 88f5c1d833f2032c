"""A quick look at a recording while more arrive: which views it holds, how the board stands in each, what is wrong.

The board is read off the signed amplitude of the events alone, in event pixels, so that neither clocks nor lens are
needed: a tenth of an event pixel is plenty for guidance. Frames serve to see mirroring (what blinks varies from frame
to frame) and exposure.
"""

from dataclasses import dataclass

import cv2
import numpy as np

from hybridtrack.calibration.agreement import compare_pictures
from hybridtrack.calibration.blink import Blink, find_blink
from hybridtrack.calibration.board_detection import detect_board
from hybridtrack.calibration.views import View, find_views, fold_view
from hybridtrack.module import HybridModule, Target
from hybridtrack.recording import Recording
from hybridtrack.recording.health import blink_locked_to_frames

Array = np.ndarray

LOOKED_FRAMES = 8
LEAST_CORRELATION = 0.35
SATURATED_SHARE = 0.02  # of the board's pixels
BLACK_SHARE = 0.2
PHASE_BINS = 128
BUSY_SHARE = 0.5  # of a cycle with more than half the peak rate of events
EVENTS_LOOKED_AT = 3_000_000


@dataclass(frozen=True)
class SeenBoard:
    """A board in one view: `ij` (N, 2) corner indices at `uv` (N, 2) colour px by the nominal map."""

    source: str
    view: int
    ij: Array
    uv: Array


@dataclass(frozen=True)
class RecordingLook:
    """What one recording shows: number of views, boards found in them, why others were not, and warnings."""

    source: str
    views: int
    boards: tuple[SeenBoard, ...]
    misses: tuple[str, ...]
    warnings: tuple[str, ...]


def frames_within(recording: Recording, view: View) -> Array:
    """Indices of up to LOOKED_FRAMES frames that start within a view by their stamps."""
    stamps = recording.frames.t_start_ns
    inside = np.flatnonzero((stamps >= view.t0_ns) & (stamps <= view.t1_ns))
    return inside[np.unique(np.linspace(0, len(inside) - 1, LOOKED_FRAMES).astype(int))] if len(inside) else inside


def grey_pictures(recording: Recording, frames: Array) -> Array:
    """Pictures (K, H, W) float32, colours averaged."""
    pictures = [recording.frame_image(int(index)).astype(np.float32) for index in frames]
    return np.stack([picture.mean(axis=-1) if picture.ndim == 3 else picture for picture in pictures])


def with_mirroring_seen(nominal: HybridModule, swings: list[Array], amplitudes: list[Array]) -> HybridModule:
    """The nominal module with the mirroring under which frames vary where event pixels blink, if that is clear."""
    if not swings:
        return nominal
    seen = compare_pictures(swings, [np.abs(amplitude) for amplitude in amplitudes], nominal)
    if seen.correlation < LEAST_CORRELATION:
        return nominal
    grid = nominal.event_grid.model_copy(update={"mirror_x": seen.mirror_x, "mirror_y": seen.mirror_y})
    return nominal.model_copy(update={"event_grid": grid})


def find_board(amplitude: Array, target: Target, grid_is_mirrored: bool) -> tuple[Array, Array] | str:
    """Corner indices (N, 2) and event-grid positions (N, 2), or a phrase that says what was missing.

    A mirrored picture of the board names its corners wrongly: it is turned first.
    """
    picture = amplitude[:, ::-1] if grid_is_mirrored else amplitude
    found = detect_board(np.ascontiguousarray(picture, float), target)
    if isinstance(found, str):
        return found
    xy = found.xy.copy()
    if grid_is_mirrored:
        xy[:, 0] = amplitude.shape[1] - 1 - xy[:, 0]
    return found.ij, xy


def exposure_shares(pictures: Array, uv: Array, module: HybridModule) -> tuple[float, float]:
    """Shares of the board's pixels that ever reach white, and black, in the pictures (K, H, W) of one view."""
    mode = module.frame_mode
    outline = cv2.convexHull(mode.frame_from_colour(uv).astype(np.float32)).astype(np.int32)
    mask = np.zeros(pictures.shape[1:], np.uint8)
    cv2.fillConvexPoly(mask, outline, 1)
    inside = mask.astype(bool)
    if not inside.any():
        return 0.0, 0.0
    highest, lowest = pictures.max(axis=0)[inside], pictures.min(axis=0)[inside]
    return float(np.mean(highest >= mode.white_dn)), float(np.mean(lowest <= mode.black_dn))


def exposure_warnings(shares: list[tuple[float, float]]) -> list[str]:
    """Sentences on saturation and black, from the shares of all views."""
    white, black = (max((pair[k] for pair in shares), default=0.0) for k in (0, 1))
    warnings = []
    if white > SATURATED_SHARE:
        warnings.append(
            f"saturation: {white:.0%} of the board is white in frames; shorten the exposure or dim the target"
        )
    if black > BLACK_SHARE:
        warnings.append(f"{black:.0%} of the board is at the black level in frames; give its dark squares some light")
    return warnings


def busy_share(recording: Recording, view: View, blink: Blink) -> float:
    """Share of the blink cycle in which events come at more than half their peak rate."""
    counts = np.zeros(PHASE_BINS)
    looked_at = 0
    for events in recording.event_blocks(view.t0_ns, view.t1_ns):
        phase = blink.phase(events.t) % 1.0
        counts += np.bincount((phase * PHASE_BINS).astype(int) % PHASE_BINS, minlength=PHASE_BINS)
        looked_at += len(events)
        if looked_at > EVENTS_LOOKED_AT:
            break
    return float(np.mean(counts > 0.5 * counts.max())) if looked_at else 0.0


def readout_warnings(recording: Recording, views: list[View], blink: Blink) -> list[str]:
    """Lost events, and events that come without pause."""
    warnings = []
    lost = recording.events_lost
    during = [np.any((lost[:, 0] < view.t1_ns) & (lost[:, 1] > view.t0_ns)) for view in views]
    if any(during):
        warnings.append(
            f"readout overload: the module reports lost events in {sum(during)} of {len(views)} views; show fewer "
            "squares, less contrast or a slower blink"
        )
    share = max((busy_share(recording, view, blink) for view in views), default=0.0)
    if share > BUSY_SHARE:
        warnings.append(
            f"events come without pause ({share:.0%} of the cycle near the peak rate): the readout is overloaded, or "
            "the pixels are slow in too little light; show fewer squares, less contrast, or more light"
        )
    return warnings


def rate_warnings(recording: Recording, views: list[View], blink: Blink) -> list[str]:
    """A blink whose phase stands still in the frames of a view."""
    stamps = recording.frames.t_start_ns
    if len(stamps) < 3:
        return ["the recording holds no frames"] if not len(stamps) else []
    frame_hz = 1e9 / float(np.median(np.diff(stamps)))
    most = max(int(np.sum((stamps >= view.t0_ns) & (stamps <= view.t1_ns))) for view in views)
    if not blink_locked_to_frames(blink.hz, frame_hz, most, min_phases=min(8, max(3, most // 2))):
        return []
    return [
        f"the blink of {blink.hz:.2f} Hz is locked to the frame rate of {frame_hz:.2f} Hz: its bands stand still in "
        "a view; change one of the two rates, or hold views longer"
    ]


def look_at(recording: Recording, target: Target, nominal: HybridModule) -> RecordingLook:
    """Look at one recording. Raises NoBlinkError, BoardNotFoundError, DegenerateDataError, ModuleMismatchError."""
    shape = nominal.event_grid.shape
    recording.require_events()
    blink = find_blink(recording, shape, target)
    views, findings = find_views(recording, blink, shape)
    amplitudes = [fold_view(recording, view, blink, shape).amplitude() for view in views]
    pictures = [
        grey_pictures(recording, frames) if len(frames := frames_within(recording, view)) >= 2 else None
        for view in views
    ]
    if any(p is not None and p.shape[1:] != nominal.frame_mode.shape for p in pictures):
        pictures = [None] * len(views)
        findings = [*findings, "frames are not of the size that the module's frame_mode says: they were not looked at"]
    seen = [(p.std(axis=0), a) for p, a in zip(pictures, amplitudes, strict=True) if p is not None]
    module = with_mirroring_seen(nominal, [swing for swing, _ in seen], [amplitude for _, amplitude in seen])
    mirrored = module.event_grid.mirror_x != module.event_grid.mirror_y
    boards, misses, shares = [], [], []
    for k, (amplitude, shown) in enumerate(zip(amplitudes, pictures, strict=True)):
        found = find_board(amplitude, target, mirrored)
        if isinstance(found, str):
            misses.append(f"view {k}: {found}")
            continue
        uv = module.colour_from_event_px(found[1])
        boards.append(SeenBoard(str(recording.path.name), k, found[0], uv))
        if shown is not None:
            shares.append(exposure_shares(shown, uv, module))
    warnings = [
        *findings,
        *exposure_warnings(shares),
        *readout_warnings(recording, views, blink),
        *rate_warnings(recording, views, blink),
    ]
    return RecordingLook(recording.path.name, len(views), tuple(boards), tuple(misses), tuple(warnings))
