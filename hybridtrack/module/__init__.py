"""What a hybrid module and its calibration target are; JSON in and out."""

from hybridtrack.module.contrast_map import ContrastMap, load_contrast_map, save_contrast_map
from hybridtrack.module.event_map import ColourFromEvent, LatticeTest, nominal_matrix
from hybridtrack.module.hybrid_module import HybridModule, load_module, parse_module, save_module
from hybridtrack.module.layout import (
    Cluster,
    ColourArray,
    EventGrid,
    FrameMode,
    clear_in_bin,
    frame_pixel_centres,
)
from hybridtrack.module.signals import (
    Contrast,
    Defects,
    FisheyeParameters,
    Lens,
    PerspectiveParameters,
    Timing,
    Uncertainty,
    lens_parameters,
)
from hybridtrack.module.target import Target, load_target, save_target

__all__ = [
    "Cluster",
    "ColourArray",
    "ColourFromEvent",
    "Contrast",
    "ContrastMap",
    "Defects",
    "EventGrid",
    "FisheyeParameters",
    "FrameMode",
    "HybridModule",
    "LatticeTest",
    "Lens",
    "PerspectiveParameters",
    "Target",
    "Timing",
    "Uncertainty",
    "clear_in_bin",
    "frame_pixel_centres",
    "lens_parameters",
    "load_contrast_map",
    "load_module",
    "load_target",
    "nominal_matrix",
    "parse_module",
    "save_contrast_map",
    "save_module",
    "save_target",
]
