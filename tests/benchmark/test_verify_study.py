"""The study of the field check: what is done to a module, and how outcomes are counted."""

from pathlib import Path

import numpy as np
import pytest

from hybridtrack.benchmark.verify_study import Change, Outcome, changes_of, dimmed, share
from hybridtrack.synthesis.greenhouse import GreenhouseRecipe
from hybridtrack.synthesis.recipe import load_recipe

MODERATE = Path(__file__).parents[2] / "sequences" / "greenhouse_moderate.toml"


def test_every_seed_drifts_by_a_quarter_pixel_in_its_own_direction() -> None:
    """The size is the stated one, the direction differs from seed to seed and repeats for a seed."""
    shifts = np.array([changes_of(seed)[1].map_px for seed in range(30)])
    assert np.linalg.norm(shifts, axis=1) == pytest.approx(0.25)
    assert np.linalg.norm(shifts.mean(axis=0)) < 0.15
    assert changes_of(4) == changes_of(4)


def test_clock_changes_are_four_milliseconds_and_fifty_microseconds() -> None:
    """By much and by little, early or late; the unchanged module comes first."""
    nothing, _, clock, little = changes_of(3)
    assert (nothing.map_px, nothing.clock_ms) == ((0.0, 0.0), 0.0)
    assert abs(clock.clock_ms) == pytest.approx(4.0)
    assert abs(little.clock_ms) == pytest.approx(0.05)


def test_shares_count_only_their_own_change_and_refusals_as_cannot_tell() -> None:
    """A refused check is no detection; a change that was never made has no share."""
    outcomes = [Outcome(Change("map"), None), Outcome(Change("nothing"), None)]
    assert share(outcomes, "map", "drifted") == 0.0
    assert share(outcomes, "map", "cannot tell") == 100.0
    assert np.isnan(share(outcomes, "clock", "drifted"))


def test_a_dim_room_differs_in_its_light_alone() -> None:
    """A quarter of the lamp's light, all else the recipe's."""
    base = load_recipe(MODERATE)
    assert isinstance(base, GreenhouseRecipe)
    dim = dimmed(base, 0.25)
    assert dim.lamp.white_dn == pytest.approx(0.25 * base.lamp.white_dn)
    assert dim.model_copy(update={"lamp": base.lamp}) == base
