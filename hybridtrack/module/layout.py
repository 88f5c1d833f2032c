"""What a hybrid module's die looks like: colour array, clusters, event grid and the frames that come off it.

Positions on the colour array are `(u, v)`, on the event grid `(x, y)`: right and down, integers at pixel centres.
"""

from typing import Literal

import numpy as np
from pydantic import BaseModel, ConfigDict, Field, model_validator

Array = np.ndarray


class Part(BaseModel):
    """A part of a document: frozen, and keeping fields it does not know."""

    model_config = ConfigDict(frozen=True, extra="allow", allow_inf_nan=False)


class ColourArray(Part):
    """Size of the colour array in colour pixels."""

    width: int = Field(gt=0)
    height: int = Field(gt=0)

    @property
    def half_diagonal_px(self) -> float:
        """Half the array's diagonal, the unit of radius in radial map terms."""
        return 0.5 * float(np.hypot(self.width, self.height))


class Cluster(Part):
    """The small block of colour pixels that holds one clear-filter pixel.

    `clear_site` is `[column, row]` inside the cluster, counted in colour-array orientation.
    """

    width: int = Field(gt=0)
    height: int = Field(gt=0)
    filters: list[str] | None = None
    clear_site: tuple[int, int] | None = None

    @model_validator(mode="after")
    def _inside(self) -> "Cluster":
        if self.clear_site is not None:
            column, row = self.clear_site
            if not (0 <= column < self.width and 0 <= row < self.height):
                raise ValueError(f"clear_site must lie inside the {self.width}x{self.height} cluster")
        if self.filters is not None and (
            len(self.filters) != self.height or any(len(line) != self.width for line in self.filters)
        ):
            raise ValueError(f"filters must be {self.height} strings of {self.width} letters")
        return self


class EventGrid(Part):
    """Size and mirroring of the event grid against the colour array."""

    width: int = Field(gt=0, le=65536)
    height: int = Field(gt=0, le=65536)
    mirror_x: bool = False
    mirror_y: bool = False

    @property
    def shape(self) -> tuple[int, int]:
        """(rows, columns)."""
        return self.height, self.width


class FrameMode(Part):
    """How frames are read off the colour array: crop and binning, mosaic, shutter and response."""

    width: int = Field(gt=0)
    height: int = Field(gt=0)
    binning: int = Field(default=1, gt=0)
    crop: tuple[int, int] = (0, 0)
    mosaic: str = "none"
    clear_in_frame: Literal["included", "filled", "omitted"] = "included"
    shutter: Literal["rolling", "global"] = "rolling"
    row_order: Literal[1, -1] = 1
    response: Literal["linear", "gamma"] = "linear"
    black_dn: float = 0.0
    white_dn: float = 255.0

    @model_validator(mode="after")
    def _levels(self) -> "FrameMode":
        if self.white_dn <= self.black_dn:
            raise ValueError("white_dn must lie above black_dn")
        if min(self.crop) < 0:
            raise ValueError("crop must not be negative")
        return self

    @property
    def shape(self) -> tuple[int, int]:
        """(rows, columns)."""
        return self.height, self.width

    def read_order(self, row: Array) -> Array:
        """Return how many rows were read before `row` (any shape), by `row_order`."""
        rows = np.asarray(row, dtype=float)
        return rows if self.row_order == 1 else self.height - 1 - rows

    def colour_from_frame(self, xy_frame: Array) -> Array:
        """Map frame positions (..., 2) to colour-array positions of the full bins' centres (..., 2)."""
        return np.asarray(self.crop, float) + self.binning * (np.asarray(xy_frame, float) + 0.5) - 0.5

    def frame_from_colour(self, uv: Array) -> Array:
        """Inverse of `colour_from_frame`."""
        return (np.asarray(uv, float) - np.asarray(self.crop, float) + 0.5) / self.binning - 0.5


def clear_in_bin(mode: FrameMode, cluster: Cluster) -> tuple[Array, Array]:
    """Count the clear sites in each frame pixel's bin and sum their positions.

    Returns `count` (height, width) and `offset_sum` (height, width, 2): the sum over the bin's clear sites of
    their position minus the bin's centre, in colour px. Both are zero where the clear site is not known.
    """
    count = np.zeros(mode.shape)
    offset_sum = np.zeros((*mode.shape, 2))
    if cluster.clear_site is None:
        return count, offset_sum
    steps = np.arange(mode.binning)
    u = mode.crop[0] + mode.binning * np.arange(mode.width)[:, None] + steps
    v = mode.crop[1] + mode.binning * np.arange(mode.height)[:, None] + steps
    clear_u = (u % cluster.width == cluster.clear_site[0]).astype(float)
    clear_v = (v % cluster.height == cluster.clear_site[1]).astype(float)
    centred = steps - 0.5 * (mode.binning - 1)
    count[:] = clear_v.sum(1)[:, None] * clear_u.sum(1)
    offset_sum[..., 0] = clear_v.sum(1)[:, None] * (clear_u @ centred)
    offset_sum[..., 1] = (clear_v @ centred)[:, None] * clear_u.sum(1)
    return count, offset_sum


def frame_pixel_centres(mode: FrameMode, cluster: Cluster) -> Array:
    """Colour-array position (height, width, 2) of the light that each frame pixel averages.

    Equal to the full bin's centre, but where clear sites are omitted: there it is the mean of the pixels that
    contribute, 0.167 px off on each axis for a 2x2 bin with one clear site. A bin that is nothing but clear sites
    has no such pixels, and must have been filled: its centre is the bin's.
    """
    columns, rows = np.meshgrid(np.arange(mode.width), np.arange(mode.height))
    centres = mode.colour_from_frame(np.stack([columns, rows], axis=-1))
    if mode.clear_in_frame == "omitted":
        count, offset_sum = clear_in_bin(mode, cluster)
        remaining = mode.binning**2 - count
        centres -= offset_sum / np.maximum(remaining, 1.0)[..., None] * (remaining > 0)[..., None]
    return centres
