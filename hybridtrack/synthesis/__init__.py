"""Scenes, motion, light, frame exposure, event pixels and readout: synthetic recordings with truth."""

from hybridtrack.synthesis.board import BoardRecipe, generate_board
from hybridtrack.synthesis.event_pixels import EventPixels, PixelPhysics
from hybridtrack.synthesis.frame_sensor import FrameSensor, SensorPhysics
from hybridtrack.synthesis.generate import generate
from hybridtrack.synthesis.greenhouse import GreenhouseRecipe, generate_greenhouse
from hybridtrack.synthesis.module_truth import ModuleDraw, draw_module
from hybridtrack.synthesis.readout import ReadoutPhysics, RowScanReadout
from hybridtrack.synthesis.recipe import Recipe, load_recipe, recipe_from_data

__all__ = [
    "BoardRecipe",
    "EventPixels",
    "FrameSensor",
    "GreenhouseRecipe",
    "ModuleDraw",
    "PixelPhysics",
    "ReadoutPhysics",
    "Recipe",
    "RowScanReadout",
    "SensorPhysics",
    "draw_module",
    "generate",
    "generate_board",
    "generate_greenhouse",
    "load_recipe",
    "recipe_from_data",
]
