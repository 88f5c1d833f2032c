"""One hybrid module: nominal, from a data sheet, or calibrated. Layout `hybridtrack-module`, version 1."""

from pathlib import Path
from typing import Any, Literal

import numpy as np

from hybridtrack.errors import NotCalibratedError
from hybridtrack.files import parse_document, read_document, write_document
from hybridtrack.module.event_map import ColourFromEvent, apply_event_map, invert_event_map, map_terms
from hybridtrack.module.layout import (
    Array,
    Cluster,
    ColourArray,
    EventGrid,
    FrameMode,
    Part,
    frame_pixel_centres,
)
from hybridtrack.module.signals import Contrast, Defects, Lens, LensParameters, Timing, Uncertainty

LAYOUT = "hybridtrack-module"


class HybridModule(Part):
    """A module's layout, lens, event map, clocks, contrast and defects, with their uncertainty.

    Blocks that are not known are None; `calibrate` fills them.
    """

    format: Literal["hybridtrack-module"] = "hybridtrack-module"
    version: float = 1
    name: str = ""
    serial: str | None = None
    colour_array: ColourArray
    cluster: Cluster
    event_grid: EventGrid
    frame_mode: FrameMode
    lens: LensParameters | None = None
    colour_from_event: ColourFromEvent | None = None
    timing: Timing | None = None
    contrast: Contrast | None = None
    defects: Defects | None = None
    settings: dict[str, Any] | None = None
    uncertainty: Uncertainty | None = None
    findings: list[str] | None = None
    provenance: dict[str, Any] | None = None

    @property
    def is_calibrated(self) -> bool:
        """Whether lens, map and clocks are all known."""
        timing = self.timing
        return (
            self.lens is not None
            and self.colour_from_event is not None
            and timing is not None
            and timing.frame_offset_ns is not None
        )

    def lens_model(self) -> Lens:
        """The lens as a geometric model. Raises NotCalibratedError where the file has none."""
        if self.lens is None:
            raise NotCalibratedError(f"module '{self.name}': a lens is required here, and its field 'lens' is null")
        return self.lens.lens()

    def known_timing(self) -> Timing:
        """The clocks. Raises NotCalibratedError where the frame offset is not known."""
        if self.timing is None or self.timing.frame_offset_ns is None:
            raise NotCalibratedError(
                f"module '{self.name}': a frame offset is required here, and 'timing.frame_offset_ns' is null"
            )
        return self.timing

    def _map_terms(self) -> tuple[Array, float, Array]:
        return map_terms(self.colour_from_event, self.cluster, self.event_grid, self.colour_array)

    def colour_from_event_px(self, xy: Array) -> Array:
        """Map event-grid positions (..., 2) to colour px (..., 2): the calibrated map, else the nominal lattice."""
        return apply_event_map(self._map_terms()[0], xy, *self._map_terms()[1:], self.colour_array.half_diagonal_px)

    def event_from_colour_px(self, uv: Array) -> Array:
        """Inverse of `colour_from_event_px`."""
        return invert_event_map(self._map_terms()[0], uv, *self._map_terms()[1:], self.colour_array.half_diagonal_px)

    def event_pixel_positions(self) -> Array:
        """Colour-array position (rows, columns, 2) of every event pixel."""
        columns, rows = np.meshgrid(np.arange(self.event_grid.width), np.arange(self.event_grid.height))
        return self.colour_from_event_px(np.stack([columns, rows], axis=-1))

    def frame_pixel_centres(self) -> Array:
        """Colour-array position (height, width, 2) of the light in each frame pixel, omitted clear sites included."""
        return frame_pixel_centres(self.frame_mode, self.cluster)


def parse_module(text: str | bytes, source: str) -> HybridModule:
    """Read a module from JSON text; `source` names it in messages. Raises FileFormatError."""
    return parse_document(text, HybridModule, source, LAYOUT)


def load_module(path: Path | str) -> HybridModule:
    """Read a `*.module.json` file. Raises MissingFileError or FileFormatError."""
    return read_document(path, HybridModule, LAYOUT)


def save_module(module: HybridModule, path: Path | str) -> None:
    """Write a module atomically, unknown fields included."""
    write_document(path, module)
