"""NEES of a calibration's blocks: one per degree of freedom where the stated covariance is how errors scatter."""

from pathlib import Path

import numpy as np
import pytest

from hybridtrack.benchmark.calibration_honesty import block_nees, clock_errors, nees_in_span
from hybridtrack.benchmark.calibration_score import is_lattice, score_calibration
from hybridtrack.geometry import PerspectiveLens
from hybridtrack.module import (
    ColourFromEvent,
    Contrast,
    HybridModule,
    Timing,
    Uncertainty,
    lens_parameters,
    load_module,
    nominal_matrix,
)

WREN = Path(__file__).parents[2] / "calib_targets" / "wren.module.json"
SIGMAS = {
    "lens.fx": 0.05, "lens.fy": 0.05, "lens.cx": 0.04, "lens.cy": 0.04, "lens.k1": 1e-4, "lens.k2": 2e-4,
    "colour_from_event.c": 0.002, "colour_from_event.f": 0.003,
    "timing.frame_offset_ns": 4000.0, "timing.line_time_ns": 2.0, "timing.exposure_correction_ns": 300.0,
    "contrast.on_threshold": 0.01, "contrast.off_threshold": 0.012,
}  # fmt: skip


def made_module(change: dict[str, float]) -> HybridModule:
    """A module whose estimated parameters are changed by the given amounts."""
    nominal = load_module(WREN)
    of = {name: change.get(name, 0.0) for name in SIGMAS}
    lens = PerspectiveLens(
        900.0 + of["lens.fx"], 900.5 + of["lens.fy"], 640.0 + of["lens.cx"], 398.0 + of["lens.cy"],
        (-0.12 + of["lens.k1"], 0.02 + of["lens.k2"], 0.0), (2e-4, -1e-4),
    )  # fmt: skip
    matrix = nominal_matrix(nominal.cluster, nominal.event_grid)
    matrix[:, 2] += of["colour_from_event.c"], of["colour_from_event.f"]
    fitted = ColourFromEvent.model_validate(
        {"matrix": matrix.tolist(), "centroid": [0.0, 0.0], "radial": 0.0, "centre": [639.5, 399.5]}
    )
    timing = Timing(
        frame_offset_ns=1.5e6 + of["timing.frame_offset_ns"],
        line_time_ns=18e3 + of["timing.line_time_ns"],
        exposure_correction_ns=3e4 + of["timing.exposure_correction_ns"],
    )
    contrast = Contrast(
        on_threshold=0.3 + of["contrast.on_threshold"], off_threshold=0.35 + of["contrast.off_threshold"]
    )
    covariance = np.diag(np.square(list(SIGMAS.values())))
    stated = Uncertainty(parameters=list(SIGMAS), sigma=list(SIGMAS.values()), covariance=covariance.tolist())
    return nominal.model_copy(
        update={
            "lens": lens_parameters(lens), "colour_from_event": fitted, "timing": timing, "contrast": contrast,
            "uncertainty": stated,
        }
    )  # fmt: skip


def test_errors_drawn_from_the_stated_covariance_give_one_per_degree_of_freedom() -> None:
    """For all blocks, over 150 draws; the degrees of freedom are those of the parameters."""
    rng, truth = np.random.default_rng(3), made_module({})
    drawn = []
    for _ in range(150):
        drawn.append(block_nees(made_module({name: s * rng.normal() for name, s in SIGMAS.items()}), truth))
    for block, freedom in (("map", 2), ("lens", 6), ("clocks", 3), ("thresholds", 2)):
        assert {d[block].freedom for d in drawn} == {freedom}
        assert np.mean([d[block].value for d in drawn]) / freedom == pytest.approx(1.0, abs=0.25)
        assert np.mean([d[block].inside for d in drawn]) > 0.88


def test_errors_beyond_what_is_stated_are_told() -> None:
    """Three times the stated deviation in every parameter of a block is nine per degree of freedom."""
    far = block_nees(made_module({name: 3.0 * s for name, s in SIGMAS.items()}), made_module({}))
    for block in ("map", "clocks", "thresholds"):
        assert far[block].value / far[block].freedom == pytest.approx(9.0, rel=0.02)
        assert not far[block].inside


def test_the_span_of_a_deficient_covariance_is_judged_alone() -> None:
    """One direction only: the error across it does not count, along it does."""
    along = np.array([0.6, 0.8])
    judged = nees_in_span(2.0 * along + np.array([-0.8, 0.6]), np.outer(along, along))
    assert judged.freedom == 1
    assert judged.value == pytest.approx(4.0)


def test_an_offset_that_includes_latency_is_compared_with_one_that_does() -> None:
    """The truth's latency is added where the estimate has none of its own."""
    truth = made_module({})
    assert truth.timing is not None
    late = truth.timing.model_copy(update={"event_latency_ns": 9e4, "frame_offset_ns": 1.41e6})
    assert clock_errors(truth, truth.model_copy(update={"timing": late}))["frame_offset_ns"] == pytest.approx(0.0)


def test_a_map_off_the_lattice_is_seen_as_such() -> None:
    """A shift is still the lattice; a turn or a radial term is not."""
    module = made_module({"colour_from_event.c": 0.2})
    assert is_lattice(module)
    fitted = module.colour_from_event
    assert fitted is not None
    assert not is_lattice(module.model_copy(update={"colour_from_event": fitted.model_copy(update={"radial": 1e-5})}))
    (a, b, c), below = fitted.matrix
    turned = fitted.model_copy(update={"matrix": ((a, b + 1e-5, c), below)})
    assert not is_lattice(module.model_copy(update={"colour_from_event": turned}))


def test_the_score_of_the_truth_itself_is_naught() -> None:
    """No error in any number."""
    truth = made_module({})
    score = score_calibration(truth, truth)
    assert score.mirror_right
    assert score.map_rms_px == 0.0
    assert score.lens_rms_px == pytest.approx(0.0, abs=1e-9)
    assert score.offset_us == pytest.approx(0.0, abs=1e-9)
    assert not score.off_lattice


def test_a_separated_latency_is_compared_with_its_own_truth() -> None:
    """Offset and latency each err by what they are off, not by each other."""
    truth = made_module({})
    assert truth.timing is not None
    true = truth.timing.model_copy(update={"event_latency_ns": 9e4})
    fitted = truth.timing.model_copy(update={"event_latency_ns": 9.5e4, "frame_offset_ns": 1.497e6})
    errors = clock_errors(truth.model_copy(update={"timing": fitted}), truth.model_copy(update={"timing": true}))
    assert errors["frame_offset_ns"] == pytest.approx(-3e3)
    assert errors["event_latency_ns"] == pytest.approx(5e3)
