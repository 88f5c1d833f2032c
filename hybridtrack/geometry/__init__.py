"""Lie groups, lens models and closed-form alignment: arrays in, arrays out."""

from hybridtrack.geometry import alignment, lens, se3, sim3, so3
from hybridtrack.geometry.alignment import rigid, similarity
from hybridtrack.geometry.fisheye import FisheyeLens
from hybridtrack.geometry.lens import Lens, lens_of_model
from hybridtrack.geometry.perspective import PerspectiveLens

__all__ = [
    "FisheyeLens",
    "Lens",
    "PerspectiveLens",
    "alignment",
    "lens",
    "lens_of_model",
    "rigid",
    "se3",
    "sim3",
    "similarity",
    "so3",
]
