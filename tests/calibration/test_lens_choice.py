"""Distortion terms are chosen by held-out error."""

import numpy as np
import pytest
from rendered_boards import corner_views

from hybridtrack.calibration.lens_choice import Candidate, choose, fit_candidates, fit_model
from hybridtrack.errors import DegenerateDataError, OptionError
from hybridtrack.geometry import FisheyeLens, PerspectiveLens

SIZE = (1280, 800)
RIGID = np.zeros(3)


@pytest.mark.parametrize(
    ("lens", "names"),
    [
        (PerspectiveLens(1000.0, 1000.0, 640.0, 400.0, (-0.15, 0.0, 0.0)), {"k1"}),
        (PerspectiveLens(1000.0, 1000.0, 640.0, 400.0, (-0.25, 0.12, 0.0)), {"k1k2"}),
        (PerspectiveLens(1000.0, 1000.0, 640.0, 400.0, (-0.2, 0.06, 0.0), (1e-3, -8e-4)), {"k1k2p"}),
        (FisheyeLens(450.0, 450.0, 640.0, 400.0, (0.03, -0.01, 0.0, 0.0)), {"fisheye2", "fisheye4"}),
    ],
)
def test_the_simplest_true_model_is_chosen(lens, names):
    """Neither a term too few, whose residual shows, nor one that only fits noise."""
    views, _ = corner_views(np.random.default_rng(3), lens, 10, 0.03)
    chosen = choose(fit_candidates(views, SIZE, RIGID))
    assert chosen.name in names
    assert chosen.solution.scene.lens.fx == pytest.approx(lens.fx, rel=1e-3)


def test_a_model_that_folds_over_inside_the_array_is_rejected():
    """Its held-out error is infinite, however small its residual."""
    views, _ = corner_views(np.random.default_rng(4), PerspectiveLens(700.0, 700.0, 640.0, 400.0, (-0.3, 0.1, 0.0)), 6,
                            0.03, spread=0.1)  # fmt: skip
    for candidate in fit_candidates(views, SIZE, RIGID):
        if not candidate.solution.scene.lens.is_monotonic_over(*SIZE):
            assert not np.isfinite(candidate.held_out).any()


def test_a_tie_goes_to_the_simpler_model():
    """A model with more terms must be clearly better."""
    views, _ = corner_views(np.random.default_rng(5), PerspectiveLens(1000.0, 1000.0, 640.0, 400.0), 3, 0.03)
    solution = fit_model("k1", views, SIZE, RIGID)
    simple = Candidate("k1", solution, np.array([2.00, 2.1, 1.9]))
    complex_ = Candidate("k1k2p", solution, np.array([1.99, 2.11, 1.89]))
    assert choose([simple, complex_]).name == "k1"
    better = Candidate("k1k2p", solution, np.array([1.0, 1.1, 0.9]))
    assert choose([simple, better]).name == "k1k2p"


def test_no_model_that_predicts_is_a_refusal():
    """If every candidate was rejected there is no lens."""
    views, _ = corner_views(np.random.default_rng(5), PerspectiveLens(1000.0, 1000.0, 640.0, 400.0), 3, 0.03)
    rejected = Candidate("k1", fit_model("k1", views, SIZE, RIGID), np.full(3, np.inf))
    with pytest.raises(DegenerateDataError, match="predicts views left out"):
        choose([rejected])


def test_unknown_models_are_refused():
    """The message lists those there are."""
    views, _ = corner_views(np.random.default_rng(5), PerspectiveLens(1000.0, 1000.0, 640.0, 400.0), 3, 0.03)
    with pytest.raises(OptionError, match="expected one of k1, k1k2"):
        fit_model("k9", views, SIZE, RIGID)
