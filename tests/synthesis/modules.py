"""Small modules that the tests of this room share."""

from typing import Any

from hybridtrack.module import (
    Cluster,
    ColourArray,
    ColourFromEvent,
    Contrast,
    Defects,
    EventGrid,
    FrameMode,
    HybridModule,
    nominal_matrix,
)


def small_module(
    columns: int = 32, rows: int = 20, contrast: dict[str, Any] | None = None, **parts: Any
) -> HybridModule:
    """A 4x4-cluster module without mismatch or noise; `contrast` and `parts` override."""
    cluster, grid = Cluster(width=4, height=4, clear_site=(2, 1)), EventGrid(width=columns, height=rows)
    thresholds: dict[str, Any] = {
        "on_threshold": 0.25,
        "off_threshold": 0.25,
        "on_spread": 0.0,
        "off_spread": 0.0,
        "noise_width": 0.0,
        "refractory_ns": 0.0,
    }
    fields: dict[str, Any] = {
        "name": "small",
        "colour_array": ColourArray(width=4 * columns, height=4 * rows),
        "cluster": cluster,
        "event_grid": grid,
        "frame_mode": FrameMode(width=2 * columns, height=2 * rows, binning=2),
        "contrast": Contrast(**{**thresholds, **(contrast or {})}),
        "colour_from_event": ColourFromEvent(matrix=nominal_matrix(cluster, grid).tolist()),
        "defects": Defects(),
    }
    return HybridModule(**{**fields, **parts})
