"""Flat panels, small lenses and straight motions that the tests of scenes share."""

from typing import Any

import numpy as np

from hybridtrack.geometry import PerspectiveLens
from hybridtrack.module import ColourArray, FrameMode, HybridModule, PerspectiveParameters, Timing
from hybridtrack.synthesis.motion import CubicSpline, Trajectory
from hybridtrack.synthesis.scene import Scene, flat_panel
from tests.synthesis.modules import small_module

FOCAL_PX = 150.0
DISTANCE_M = 2.0
SECOND_NS = 1e9


def seeing_module(columns: int = 40, rows: int = 24, binning: int = 2, **timing: float) -> HybridModule:
    """A module with a distortion-free lens of `FOCAL_PX` and known clocks."""
    width, height = 4 * columns, 4 * rows
    lens = PerspectiveParameters(fx=FOCAL_PX, fy=FOCAL_PX, cx=(width - 1) / 2, cy=(height - 1) / 2)
    clocks: dict[str, Any] = {"frame_offset_ns": 0.0, "line_time_ns": 0.0, "exposure_correction_ns": 0.0}
    return small_module(
        columns,
        rows,
        colour_array=ColourArray(width=width, height=height),
        frame_mode=FrameMode(width=width // binning, height=height // binning, binning=binning),
        lens=lens,
        timing=Timing(**{**clocks, **timing}),
    )


def sine_panel(period_px: float, texels_a_px: float = 4.0, low: float = 0.2, high: float = 0.8) -> Scene:
    """An upright panel whose light varies as a sine along x, `period_px` as the camera of `FOCAL_PX` sees it."""
    metre_a_px = DISTANCE_M / FOCAL_PX
    width = 240
    x = (np.arange(int(width * texels_a_px)) + 0.5) / texels_a_px - 0.5 * width
    line = 0.5 * (low + high) + 0.5 * (high - low) * np.sin(2 * np.pi * x / period_px)
    return flat_panel(np.tile(line, (len(line), 1)), width * metre_a_px, width * metre_a_px)


def step_panel(dark: float = 0.2, bright: float = 0.8) -> Scene:
    """An upright panel, dark left of x = 0 and bright right of it, with texels finer than a pixel."""
    side = 240 * DISTANCE_M / FOCAL_PX
    return flat_panel(np.tile(np.repeat([dark, bright], 480), (960, 1)), side, side)


def sliding(speed_px_s: float, turned: np.ndarray | None = None) -> Trajectory:
    """A camera before the panel that slides so that the picture moves by `speed_px_s` along u."""
    t = np.linspace(-1.0, 1.0, 4)
    position = np.zeros((4, 3))
    position[:, 0] = -speed_px_s * DISTANCE_M / FOCAL_PX * t
    position[:, 2] = -DISTANCE_M
    rotation = np.zeros((4, 3))
    return Trajectory(np.eye(3) if turned is None else turned, CubicSpline(t, position), CubicSpline(t, rotation))


def lens_of(module: HybridModule) -> PerspectiveLens:
    """The module's lens, known to be a perspective one."""
    lens = module.lens_model()
    assert isinstance(lens, PerspectiveLens)
    return lens
