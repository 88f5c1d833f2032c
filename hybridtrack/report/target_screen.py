"""A blinking board in the pixels of a screen: which refreshes are bright, PNG frames, and a film.

A screen changes only at its refreshes: a cycle holds a whole number of them, and each phase too. The true rate is the
refresh divided by that number, which the written target says in place of the wished one.
"""

import os
from collections.abc import Iterator
from dataclasses import dataclass
from pathlib import Path

import cv2
import numpy as np

from hybridtrack.errors import OptionError
from hybridtrack.files import replacing
from hybridtrack.module import Target
from hybridtrack.report.target_caution import caution_sentences, in_risk_band, require_rate_accepted

Array = np.ndarray

BRIGHT_DN = 255
DEFAULT_LOG_STEP = 2.1  # about 8 to 1: dark squares stay above a camera's black level
LONGEST_CYCLE = 24  # refreshes


def dark_dn(log_step: float) -> int:
    """Value of an 8-bit sRGB pixel whose light is `log_step` (natural log) below white (IEC 61966-2-1)."""
    if not 0.05 <= log_step <= 5.5:
        raise OptionError(f"log step: 0.05 to 5.5 is required on a screen of 8 bits, got {log_step:g}")
    light = float(np.exp(-log_step))
    encoded = 12.92 * light if light <= 0.0031308 else 1.055 * light ** (1 / 2.4) - 0.055
    return round(BRIGHT_DN * encoded)


def bright_refreshes(refreshes: int, duty: float) -> int | None:
    """Refreshes of a cycle in which set A is bright, or None where that is no whole number of at least one a phase."""
    bright = round(refreshes * duty)
    return bright if abs(refreshes * duty - bright) < 1e-6 and 0 < bright < refreshes else None


def possible_cycles(duty: float) -> list[int]:
    """Cycles, in refreshes, even, that hold `duty` in whole refreshes. Raises OptionError where there is none."""
    cycles = [n for n in range(2, LONGEST_CYCLE + 1, 2) if bright_refreshes(n, duty) is not None]
    if not cycles:
        raise OptionError(
            f"duty: whole refreshes in an even cycle of at most {LONGEST_CYCLE} are required, got {duty:g}"
        )
    return cycles


def choose_cycle(target: Target, display_hz: float) -> int:
    """The cycle, in refreshes, nearest to the target's rate; outside the risk band if any is."""
    cycles = possible_cycles(target.duty)
    safe = [n for n in cycles if not in_risk_band(display_hz / n) and display_hz / n > 30.0]
    return min(safe or cycles, key=lambda n: abs(display_hz / n - target.blink_hz))


@dataclass(frozen=True)
class Screen:
    """A display of `size_px` (width, height) that refreshes at `display_hz`; `pixel_mm` is its pitch where known."""

    size_px: tuple[int, int]
    display_hz: float
    pixel_mm: float | None = None

    def __post_init__(self) -> None:
        if min(self.size_px) < 64 or not 10.0 <= self.display_hz <= 2000.0:
            raise OptionError(
                f"screen: at least 64x64 px at 10 to 2000 Hz are required, got {self.size_px[0]}x{self.size_px[1]} px "
                f"at {self.display_hz:g} Hz"
            )
        if self.pixel_mm is not None and not 0.01 <= self.pixel_mm <= 20.0:
            raise OptionError(f"pixel_mm: 0.01 to 20 mm is required, got {self.pixel_mm:g}")


@dataclass(frozen=True)
class ScreenBoard:
    """The board on a screen: `square_px` and outer corner `origin_px` (x, y) in whole pixels; `bright` of `refreshes` a
    cycle show set A; `dark` is the value of what is dark."""

    target: Target
    screen: Screen
    square_px: tuple[int, int]
    origin_px: tuple[int, int]
    refreshes: int
    bright: int
    dark: int

    @property
    def blink_hz(self) -> float:
        """The rate at which it blinks."""
        return self.screen.display_hz / self.refreshes

    def shown_target(self) -> Target:
        """The target as shown. Raises OptionError where the pixel pitch is not known."""
        pitch = self.screen.pixel_mm
        if pitch is None:
            raise OptionError("pixel_mm: the display's pixel pitch is required for the target's square size, got none")
        across, down = (round(size * pitch * 1e-3, 9) for size in self.square_px)
        return self.target.model_copy(
            update={
                "square_m": across if across == down else (across, down),
                "blink_hz": self.blink_hz,
                "scanout_s": 1.0 / self.screen.display_hz,
                "levels": None,
            }
        )


def _square_px(target: Target, screen: Screen, square_px: int | None) -> tuple[int, int]:
    across, down = target.square_xy_m
    # Half a square stays free on each side.
    largest = min(screen.size_px[0] / (target.columns + 1), screen.size_px[1] * across / down / (target.rows + 1))
    x = int(largest) if square_px is None else square_px
    y = round(x * down / across)
    if min(x, y) < 4 or x * target.columns > screen.size_px[0] or y * target.rows > screen.size_px[1]:
        raise OptionError(
            f"square_px: 4 to {int(largest)} is required for {target.columns}x{target.rows} squares on a screen of "
            f"{screen.size_px[0]}x{screen.size_px[1]} px, got {x}"
        )
    return x, y


def lay_out_on_screen(
    target: Target,
    screen: Screen,
    *,
    square_px: int | None = None,
    refreshes: int | None = None,
    log_step: float = DEFAULT_LOG_STEP,
    accept_risk_band: bool = False,
) -> ScreenBoard:
    """Put the board in the middle of a screen, in whole pixels and whole refreshes.

    None takes the largest square that leaves half a square around the board, and the cycle nearest to the target's
    rate. Raises OptionError for what does not fit, and for a rate in the risk band that was not accepted.
    """
    cycle = choose_cycle(target, screen.display_hz) if refreshes is None else refreshes
    bright = bright_refreshes(cycle, target.duty)
    if bright is None:
        raise OptionError(
            f"refreshes: a cycle whose phases of {target.duty:g} and {1 - target.duty:g} hold whole refreshes is "
            f"required (such as {possible_cycles(target.duty)[0]}), got {cycle}"
        )
    require_rate_accepted(screen.display_hz / cycle, accept_risk_band)
    square = _square_px(target, screen, square_px)
    origin = (
        (screen.size_px[0] - square[0] * target.columns) // 2,
        (screen.size_px[1] - square[1] * target.rows) // 2,
    )
    return ScreenBoard(target, screen, square, origin, cycle, bright, dark_dn(log_step))


def draw_phase(board: ScreenBoard, set_a_bright: bool) -> Array:
    """The screen's picture (height, width) uint8 in one phase; all around the board stays dark."""
    sets = board.target.square_sets()
    lit = sets == 1 if set_a_bright else sets == -1
    squares = np.where(lit, BRIGHT_DN, board.dark).astype(np.uint8)
    picture = np.full(board.screen.size_px[::-1], board.dark, np.uint8)
    (x, y), (across, down) = board.origin_px, board.square_px
    whole = np.kron(squares, np.ones((down, across), np.uint8))
    picture[y : y + whole.shape[0], x : x + whole.shape[1]] = whole
    return picture


def phases(board: ScreenBoard) -> Iterator[bool]:
    """Whether set A is bright, refresh after refresh, without end."""
    while True:
        for refresh in range(board.refreshes):
            yield refresh < board.bright


def write_pngs(board: ScreenBoard, folder: Path) -> list[Path]:
    """Write one cycle, a picture a refresh, as `refresh_00.png` and on; return where they are."""
    pictures = {state: cv2.imencode(".png", draw_phase(board, state))[1].tobytes() for state in (True, False)}
    written = []
    for refresh, state in zip(range(board.refreshes), phases(board), strict=False):
        path = folder / f"refresh_{refresh:02d}.png"
        with replacing(path) as temporary:
            temporary.write_bytes(pictures[state])
        written.append(path)
    return written


def caution_picture(board: ScreenBoard) -> Array:
    """A still picture (height, width) that a film begins with: the cautions in plain words."""
    width, height = board.screen.size_px
    picture = np.full((height, width), 24, np.uint8)
    size = min(width / 1300.0, height / 480.0)
    lines = ["CAUTION: a blinking picture follows"]
    for sentence in caution_sentences(round(board.blink_hz, 3)):
        words = sentence.split()
        line = ""
        for word in words:
            if len(line) + len(word) > 76:
                lines, line = [*lines, line], ""
            line = f"{line} {word}".strip()
        lines = [*lines, line]
    step = min(40.0 * size, height / (len(lines) + 2))
    for number, line in enumerate(lines, start=1):
        place = (int(20 * size), int(step * (number + 0.4)))
        cv2.putText(
            picture, line, place, cv2.FONT_HERSHEY_SIMPLEX, 0.9 * size, 220, max(1, round(1.4 * size)), cv2.LINE_AA
        )
    return picture


def write_film(board: ScreenBoard, path: Path, seconds: float, lead_in_s: float = 5.0) -> Path:
    """Write an MP4 of `seconds` of blinking, a picture a refresh, after `lead_in_s` of still cautions.

    Raises OptionError where the machine's OpenCV writes no MPEG-4 film.
    """
    if not 0.1 <= seconds <= 600.0:
        raise OptionError(f"seconds: 0.1 to 600 is required of a film, got {seconds:g}")
    rate, (width, height) = board.screen.display_hz, board.screen.size_px
    even = (width - width % 2, height - height % 2)  # MPEG-4 wants even sides
    pictures = {state: draw_phase(board, state)[: even[1], : even[0]] for state in (True, False)}
    cycles = max(1, round(seconds * rate / board.refreshes))
    with replacing(path) as temporary:
        film = temporary.with_name(f"{temporary.name}.mp4")
        writer = cv2.VideoWriter(str(film), cv2.VideoWriter.fourcc(*"mp4v"), rate, even, False)
        try:
            if not writer.isOpened():
                raise OptionError("film: an MPEG-4 encoder in OpenCV is required, and this machine's has none")
            caution = caution_picture(board)[: even[1], : even[0]]
            for _ in range(round(lead_in_s * rate)):
                writer.write(caution)
            for _, state in zip(range(cycles * board.refreshes), phases(board), strict=False):
                writer.write(pictures[state])
            writer.release()
            os.replace(film, temporary)
        finally:
            writer.release()
            film.unlink(missing_ok=True)
    return path
