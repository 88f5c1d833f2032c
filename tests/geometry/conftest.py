"""Random draws shared by the geometry tests."""

from collections.abc import Callable

import numpy as np
import pytest

from hybridtrack.geometry.arrays import FloatArray

Draw = Callable[..., FloatArray]


@pytest.fixture
def rng() -> np.random.Generator:
    """One generator, one seed: a failure repeats."""
    return np.random.default_rng(20240611)


@pytest.fixture
def rotation_vectors(rng: np.random.Generator) -> FloatArray:
    """Rotation vectors (600, 3) whose lengths run from 1e-12 to just below half a turn, and zero."""
    axes = rng.normal(size=(600, 3))
    axes /= np.linalg.norm(axes, axis=1, keepdims=True)
    small = np.logspace(-12, 0, 200)
    large = rng.uniform(0.0, np.pi, 200)
    near_half_turn = np.pi - np.logspace(-9, -1, 199)
    return axes * np.concatenate([small, large, near_half_turn, [0.0]])[:, None]
