"""Rides over the photograph that several tests read; each is made once."""

import sys
from pathlib import Path

import numpy as np
import pytest

# Helpers beside the tests; importlib mode leaves their folder off the path.
sys.path.insert(0, str(Path(__file__).parent))

from planar_scene import PlanarScene, photograph, small_module
from rides import Ride, sway


@pytest.fixture(scope="session")
def gravel():
    """The texture of most rides."""
    return photograph("gravel")


@pytest.fixture(scope="session")
def slow_ride(gravel):
    """150 px/s at most, with some turning and zoom: the domain of frames."""
    scene = PlanarScene(
        small_module(),
        sway(150.0),
        shape=lambda t: np.eye(2) * (1 + 0.1 * t) + np.array([[0.0, -0.2], [0.2, 0.0]]) * t,
        texture=gravel,
    )
    return Ride.of(scene, 0.2)


@pytest.fixture(scope="session")
def fast_ride(gravel):
    """2500 px/s: 40 px between frames, 10 px of blur within one."""
    return Ride.of(PlanarScene(small_module(), sway(2500.0), texture=gravel), 0.12)
