"""Log brightness as pictures (PNG) and clips (MP4) to look at.

Grey is linear in log brightness between two levels, `black` and `white`, natural log of light as a share of the frame's
white: equal steps of grey are equal contrasts.
"""

from collections.abc import Callable, Iterable
from dataclasses import dataclass
from pathlib import Path

import cv2
import numpy as np

from hybridtrack.errors import OptionError
from hybridtrack.files import replacing
from hybridtrack.tracking.picture import Picture

Array = np.ndarray

LEAST_CROSS_PX = 640
SHARES = (0.5, 99.5)  # percent of pixels that become black, and that do not become white
LEAST_RANGE = 0.5  # natural log: less contrast is not stretched, for it would show noise
SMALLEST_LIGHT = -6.0
MARK_BGR = (40, 170, 255)
MARK_SHARE = 0.02  # width of the mark's border over the picture's height
# A flash is a pair of opposing changes of relative luminance by a tenth (WCAG 2.2, definition of general flash), looked
# for in twelfths of the picture. Slow motion brings lamps and targets into the band of 3 to 30 Hz.
FLASH_STEP = 0.1
FLASH_TILES = (4, 3)
DISPLAY_GAMMA = 2.2


@dataclass(frozen=True)
class Greys:
    """Log brightness that is drawn black and white."""

    black: float
    white: float

    @staticmethod
    def of(log_light: Array) -> "Greys":
        """Levels that show nearly all of a picture (H, W)."""
        known = log_light[np.isfinite(log_light)]
        if not known.size:
            return Greys(SMALLEST_LIGHT, 0.0)
        low, high = np.percentile(np.clip(known, SMALLEST_LIGHT, None), SHARES)
        middle, half = 0.5 * (low + high), 0.5 * max(float(high - low), LEAST_RANGE)
        return Greys(float(middle - half), float(middle + half))

    def drawn(self, log_light: Array, bits: int = 8) -> Array:
        """Grey (H, W), uint8 or uint16; NaN is black."""
        share = np.clip((np.nan_to_num(log_light, nan=self.black) - self.black) / (self.white - self.black), 0.0, 1.0)
        return np.rint(share * (2**bits - 1)).astype(np.uint8 if bits == 8 else np.uint16)


def write_png(path: Path | str, picture: Picture, greys: Greys, bits: int = 8) -> None:
    """Write one picture at the frame's size, atomically; saturated pixels are white."""
    grey = np.where(picture.saturated, 2**bits - 1, greys.drawn(picture.log_light, bits))
    encoded = cv2.imencode(".png", grey.astype(np.uint8 if bits == 8 else np.uint16))[1]
    with replacing(path) as temporary:
        temporary.write_bytes(encoded.tobytes())


def _canvas(picture: Picture, greys: Greys, shown: Array | None) -> Array:
    """A picture as it stands in a clip (H, W, 3) BGR; where there is none, `shown`, the one before, in a border."""
    if picture.source == "none":
        height, width = picture.log_light.shape
        canvas = np.zeros((height, width, 3), np.uint8) if shown is None else shown.copy()
        edge = max(2, round(MARK_SHARE * height))
        cv2.rectangle(canvas, (edge // 2, edge // 2), (width - 1 - edge // 2, height - 1 - edge // 2), MARK_BGR, edge)
        return canvas
    grey = np.where(picture.saturated, 255, greys.drawn(picture.log_light)).astype(np.uint8)
    return cv2.cvtColor(grey, cv2.COLOR_GRAY2BGR)


def _luminance(canvas: Array) -> Array:
    """Mean relative luminance (tiles,) of the parts of a picture, as a display shows it."""
    grey = canvas.astype(np.float32).mean(axis=2) / 255.0
    return cv2.resize(grey**DISPLAY_GAMMA, FLASH_TILES, interpolation=cv2.INTER_AREA).ravel()


def flashes_a_second(luminance: Array, shown_hz: float) -> int:
    """Most flashes in any one second of a film, over its parts; `luminance` (T, tiles) in 0..1."""
    most = 0
    window = max(1, round(shown_hz))
    for tile in np.asarray(luminance, float).T:
        low = high = tile[0]
        direction, turns = 0, []
        for index, value in enumerate(tile):
            low, high = min(low, value), max(high, value)
            turn = -1 if value <= high - FLASH_STEP else 1 if value >= low + FLASH_STEP else 0
            if turn and turn != direction:
                turns.append(index)
                direction = turn
            if turn:
                low = high = value
        inside = [sum(begin <= turn < begin + window for turn in turns) for begin in turns]
        most = max(most, max(inside, default=0) // 2)
    return most


@dataclass(frozen=True)
class Clip:
    """What was written: its greys, and the most flashes that it shows in any one second."""

    greys: Greys
    flashes_a_second: int


def write_clip(
    path: Path | str, pictures: Iterable[Picture], shown_hz: float, seen: Callable[[Picture], None] = lambda _: None
) -> Clip:
    """Write pictures to a film (*.mp4) that shows `shown_hz` of them a second, atomically; its greys are those of the
    first picture there is. `seen` is called with each.

    A time without a picture repeats the one before it in a marked border. Raises OptionError where OpenCV can't write
    films on this machine.
    """
    greys: Greys | None = None
    canvas: Array | None = None
    luminance: list[Array] = []
    with replacing(path) as temporary:
        film_path = temporary.with_suffix(".mp4")
        film: cv2.VideoWriter | None = None
        try:
            for picture in pictures:
                seen(picture)
                if greys is None and picture.source != "none":
                    greys = Greys.of(picture.log_light)
                canvas = _canvas(picture, greys or Greys(SMALLEST_LIGHT, 0.0), canvas)
                luminance.append(_luminance(canvas))
                scale = max(1, round(LEAST_CROSS_PX / canvas.shape[1]))
                large = cv2.resize(canvas, None, fx=scale, fy=scale, interpolation=cv2.INTER_LINEAR)
                if film is None:
                    size = (large.shape[1], large.shape[0])
                    film = cv2.VideoWriter(str(film_path), cv2.VideoWriter.fourcc(*"mp4v"), shown_hz, size)
                    if not film.isOpened():
                        raise OptionError(f"{path}: films can't be written on this machine; ask for pictures with --at")
                film.write(large)
            if film is None:
                raise OptionError(f"{path}: a clip of at least one picture is required, got none")
            film.release()
            film_path.rename(temporary)
        finally:
            if film is not None:
                film.release()
            film_path.unlink(missing_ok=True)
    return Clip(greys or Greys(SMALLEST_LIGHT, 0.0), flashes_a_second(np.array(luminance), shown_hz))
