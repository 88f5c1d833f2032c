"""Boards, lens and map in one call."""

import sys
from dataclasses import replace

import numpy as np
import pytest
from rendered_boards import counterphase_set

from hybridtrack.calibration.geometry_fit import fit_geometry
from hybridtrack.errors import BoardNotFoundError, DegenerateDataError

geometry_fit_module = sys.modules[fit_geometry.__module__]


@pytest.mark.parametrize("told_first", [True, False])
def test_a_wrong_clear_site_ends_at_the_geometry_of_the_right_one(told_first, monkeypatch):
    """With clear sites omitted from bins, whether a few views tell the clear site or only all of them do."""

    def tells_nothing(*arguments):
        raise DegenerateDataError("too few views")

    if not told_first:
        monkeypatch.setattr(geometry_fit_module, "find_clear_site", tells_nothing)
    rendered = counterphase_set()
    stages = []
    wrong = fit_geometry(
        rendered.views, rendered.scene.target, rendered.layout.module(known=False), "k1k2p",
        lambda stage, fraction: stages.append(stage),
    )  # fmt: skip
    right = fit_geometry(rendered.views, rendered.scene.target, rendered.layout.module(), "k1k2p")
    assert stages.count("corners") == (1 if told_first else 2)
    sigma = np.sqrt(np.diag(right.lens_fit.covariance))
    free = [f"lens.{name}" in right.lens_fit.parameters for name in right.lens_fit.lens.names]
    change = (wrong.lens_fit.lens.parameters - right.lens_fit.lens.parameters)[free]
    assert np.all(np.abs(change) < 0.25 * sigma)
    change = np.subtract(wrong.map_fit.colour_from_event.matrix, right.map_fit.colour_from_event.matrix)
    assert np.abs(change[:, 2]).max() < 1e-3


def test_a_board_never_in_view_is_refused():
    """One sentence that says how many views showed it, and why not."""
    rendered = counterphase_set()
    rng = np.random.default_rng(0)
    noise = [rng.normal(size=v.bright_dn.shape) for v in rendered.views]
    empty = [replace(v, bright_dn=20 + n, dark_dn=20 - n) for v, n in zip(rendered.views, noise, strict=True)]
    with pytest.raises(BoardNotFoundError, match="in at least 3 views, and was in 0 of 4"):
        fit_geometry(empty, rendered.scene.target, rendered.layout.module())
