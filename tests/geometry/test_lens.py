"""Tests of hybridtrack.geometry.lens."""

import numpy as np
import pytest

from hybridtrack.errors import OptionError
from hybridtrack.geometry import FisheyeLens, Lens, PerspectiveLens, lens_of_model


@pytest.mark.parametrize(
    "lens",
    [
        PerspectiveLens(800.0, 790.0, 320.0, 240.0, (-0.3, 0.1, 0.0), (1e-3, 2e-3)),
        FisheyeLens(300.0, 310.0, 320.0, 240.0, (0.1, 0.0, 0.01, 0.0)),
    ],
)
def test_model_and_parameters_rebuild_the_lens(lens: Lens) -> None:
    """`lens_of_model(lens.model, lens.parameters)` is the lens."""
    assert lens_of_model(lens.model, lens.parameters) == lens


def test_unknown_model_is_refused() -> None:
    """A name that is no model is refused with the names that are."""
    with pytest.raises(OptionError, match="among perspective, fisheye, got 'mirror'"):
        lens_of_model("mirror", np.ones(9))
