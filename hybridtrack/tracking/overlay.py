"""Tracks drawn over frames, as a picture or a film."""

from collections.abc import Callable
from dataclasses import dataclass
from pathlib import Path

import cv2
import numpy as np

from hybridtrack.errors import OptionError
from hybridtrack.files import replacing
from hybridtrack.module import HybridModule
from hybridtrack.recording import Recording
from hybridtrack.tracking.light_levels import frame_clock
from hybridtrack.tracking.tracks_file import Tracks

Array = np.ndarray
Progress = Callable[[str, float], None]
# BGR. Told apart by brightness as well as by hue.
STATE_COLOURS = {"alive": (120, 230, 90), "weak": (40, 170, 255), "lost": (60, 60, 230), "out_of_view": (200, 120, 160)}
TAIL_NS = 60_000_000


def _silent(stage: str, fraction: float) -> None:
    """Show no progress."""


@dataclass(frozen=True)
class Canvas:
    """A frame to draw on: `image` uint8 (H, W, 3) BGR, `scale` canvas px a frame px."""

    image: Array
    scale: int


def canvas(picture: Array, black_dn: float, white_dn: float) -> Canvas:
    """A frame (H, W) or (H, W, 3) RGB stretched to 8 bits, enlarged to at least 640 px across."""
    grey = picture.astype(np.float32) if picture.ndim == 2 else picture.astype(np.float32).mean(axis=2)
    share = np.clip((grey - black_dn) / (white_dn - black_dn), 0.0, 1.0) ** 0.6
    scale = max(1, int(np.ceil(640 / picture.shape[1])))
    large = cv2.resize((255.0 * share).astype(np.uint8), None, fx=scale, fy=scale, interpolation=cv2.INTER_LINEAR)
    return Canvas(cv2.cvtColor(large, cv2.COLOR_GRAY2BGR), scale)


def draw_tracks(drawn: Canvas, module: HybridModule, tracks: Tracks, t_ns: int, tail_ns: int = TAIL_NS) -> None:
    """Draw each track's last `tail_ns` up to `t_ns` and a mark where it is, coloured by its state.

    `tracks` sorted by time.
    """
    low, high = np.searchsorted(tracks.t_ns, [t_ns - tail_ns, t_ns + 1])
    recent = tracks[slice(int(low), int(high))]
    uv = (module.frame_mode.frame_from_colour(recent.uv) + 0.5) * drawn.scale - 0.5
    sub_pixel = 16.0
    for identity in np.unique(recent.id):
        mine = np.flatnonzero(recent.id == identity)
        colour = STATE_COLOURS.get(recent.states[recent.state[mine[-1]]], (255, 255, 255))
        path = np.rint(uv[mine] * sub_pixel).astype(np.int32)
        cv2.polylines(drawn.image, [path.reshape(-1, 1, 2)], False, colour, 1, cv2.LINE_AA, 4)
        cv2.circle(drawn.image, tuple(int(c) for c in path[-1]), int(3 * sub_pixel), colour, 1, cv2.LINE_AA, 4)


def overlay_picture(recording: Recording, module: HybridModule, tracks: Tracks, index: int) -> Array:
    """One frame of a recording with tracks over it, uint8 (H, W, 3) BGR."""
    frames, mode = recording.frames, module.frame_mode
    clock = frame_clock(module, int(frames.t_start_ns[index]), int(frames.exposure_ns[index]))
    drawn = canvas(recording.frame_image(index), mode.black_dn, mode.white_dn)
    draw_tracks(drawn, module, tracks, int(clock.middle_ns(np.array(mode.height - 1.0)).max()))
    return drawn.image


def write_overlay(
    recording: Recording, module: HybridModule, tracks: Tracks, path: Path | str, progress: Progress = _silent
) -> None:
    """Write tracks over all frames to a film (`.mp4`), or over the middle frame to a picture (`.png`), atomically.

    Raises OptionError for another ending, or where OpenCV can't write films on this machine.
    """
    target = Path(path)
    count = len(recording.frames)
    recording.require_frames()
    if target.suffix.lower() == ".png":
        encoded = cv2.imencode(".png", overlay_picture(recording, module, tracks, count // 2))[1]
        with replacing(target) as temporary:
            temporary.write_bytes(encoded.tobytes())
        return
    if target.suffix.lower() != ".mp4":
        raise OptionError(f"an overlay must be named *.mp4 or *.png, got '{target.name}'")
    spacing = float(np.median(np.diff(recording.frames.t_start_ns))) if count > 1 else 4e7
    first = overlay_picture(recording, module, tracks, 0)
    with replacing(target) as temporary:
        film_path = temporary.with_suffix(".mp4")
        film = cv2.VideoWriter(
            str(film_path), cv2.VideoWriter.fourcc(*"mp4v"), min(1e9 / spacing, 60.0), first.shape[1::-1]
        )
        if not film.isOpened():
            raise OptionError(f"{target}: films can't be written here; ask for a .png")
        try:
            for index in range(count):
                film.write(overlay_picture(recording, module, tracks, index))
                progress("drawing", (index + 1) / count)
            film.release()
            film_path.rename(temporary)
        finally:
            film.release()
            film_path.unlink(missing_ok=True)
