"""The field check: light averaged by events in closed form, shifts recovered, and what cannot be told said."""

from pathlib import Path

import numpy as np
import pytest

from hybridtrack.calibration.field_check import (
    check_field,
    differing_settings,
    freedom_of,
    judge_clock,
    judge_map,
    setting_of,
    stretches,
)
from hybridtrack.calibration.field_check_kernels import average_levels
from hybridtrack.calibration.field_samples import FieldSamples, solve
from hybridtrack.errors import DegenerateDataError, NotCalibratedError
from hybridtrack.module import ColourFromEvent, Contrast, load_module
from hybridtrack.recording import Recording, RecordingWriter

WREN = Path(__file__).parents[2] / "calib_targets" / "wren.module.json"


def averaged(t_ns, on, start_ns, length_ns, longest_ns=1e9, delay_ns=0.0):
    """Mean levels (F,) of one pixel's exposures, and how much of each is covered, thresholds 0.3 and 0.2."""
    count = len(start_ns)
    integral, covered = np.zeros((count, 1, 1)), np.zeros((count, 1, 1))
    zeros = np.zeros(len(t_ns), np.uint16)
    average_levels(
        np.asarray(t_ns, np.int64), zeros, zeros, np.asarray(on, np.uint8), 0, np.asarray(start_ns, float),
        np.asarray(length_ns, float), np.full((1, 1), delay_ns), np.full((1, 1), 0.3), np.full((1, 1), 0.2), longest_ns,
        np.full((1, 1), -np.inf), np.zeros((1, 1)), np.zeros((1, 1), np.int64), integral, covered,
    )  # fmt: skip
    return integral[:, 0, 0] / np.maximum(covered[:, 0, 0], 1e-9), covered[:, 0, 0]


def test_light_that_rises_steadily_is_averaged_exactly():
    """Events of a ramp come evenly; the mean over an exposure is the ramp's value in its middle."""
    t = np.arange(0, 1_000_001, 50_000)  # one threshold of 0.3 each 50 us
    mean, covered = averaged(t, np.ones(len(t)), [200_000, 610_000], [100_000, 30_000])
    assert covered == pytest.approx([100_000, 30_000])
    expected = 0.3 * (np.array([250_000, 625_000]) / 50_000 + 1.0)  # the first event is one threshold up
    assert mean == pytest.approx(expected)


def test_a_row_that_is_exposed_later_sees_later_light():
    """A delay of the row moves its exposure."""
    t = np.arange(0, 1_000_001, 50_000)
    early, _ = averaged(t, np.ones(len(t)), [200_000], [100_000])
    late, _ = averaged(t, np.ones(len(t)), [200_000], [100_000], delay_ns=50_000.0)
    assert late - early == pytest.approx(0.3)


def test_light_between_events_far_apart_counts_as_unknown():
    """An exposure that reaches into a long gap is not covered."""
    _, covered = averaged([0, 40_000, 500_000, 540_000], [1, 1, 0, 1], [10_000, 30_000, 505_000], [20_000] * 3, 100_000)
    assert covered == pytest.approx([20_000, 10_000, 20_000])


def samples(shift, blocks=12, count=2000, noise=0.1, seed=0, same_motion=False):
    """Samples of the linear model about a known shift; `same_motion`: in one direction at one speed all the time."""
    random = np.random.default_rng(seed)
    block = np.repeat(np.arange(blocks), count)
    slope = 0.2 * random.standard_normal((2, blocks * count))
    velocity = np.full((2, blocks), 250.0) if same_motion else 250.0 * random.standard_normal((2, blocks))
    rate = -np.sum(slope * velocity[:, block], axis=0) * 1e-6
    light = np.full(blocks * count, 1.0) if same_motion else random.uniform(0.5, 6.0, blocks * count)
    design = np.stack([random.standard_normal(blocks * count), *slope, -rate, -rate * light])
    truth = np.array([1.0, *shift, 300.0, 150.0])
    measured = truth @ design + noise * random.standard_normal(blocks * count)
    gross = random.random(blocks * count) < 0.02
    measured[gross] += random.choice([-3.0, 3.0], np.count_nonzero(gross))
    return FieldSamples(design, measured, np.full(blocks * count, noise**-2.0), block)


def test_shifts_are_recovered_with_honest_deviations():
    """Over many draws errors of the map are as large as stated, gross samples notwithstanding."""
    errors = []
    for seed in range(40):
        known, covariance = solve(samples((0.1, -0.2), seed=seed))
        errors.append((known[1:3] - [0.1, -0.2]) / np.sqrt(np.diag(covariance)[1:3]))
    assert np.abs(np.array(errors)).max() < 5.0
    assert 0.7 < np.mean(np.square(errors)) < 1.6


def test_motion_in_one_direction_does_not_tell_map_and_clock_apart():
    """The refusal says so."""
    with pytest.raises(DegenerateDataError, match="apart"):
        solve(samples((0.1, -0.2), same_motion=True))


def test_verdicts_follow_size_and_deviation():
    """Small and sure holds; large and sure has drifted; unsure cannot be told."""
    sure, unsure = 0.03**2 * np.eye(2), 0.3**2 * np.eye(2)
    assert judge_map(np.array([0.05, 0.0]), sure).verdict == "holds"
    assert judge_map(np.array([0.2, 0.15]), sure).verdict == "drifted"
    assert judge_map(np.array([0.05, 0.0]), unsure).verdict == "cannot tell"
    # Seen in a few stretches only, the same scatter says less.
    assert judge_map(np.array([0.2, 0.15]), sure, freedom=4.0).verdict == "cannot tell"
    assert freedom_of(sure, sure, 7) == pytest.approx(6.0)
    assert freedom_of(0.1 * sure, sure, 7) == pytest.approx(600.0)
    assert judge_clock(300.0, 400.0).verdict == "holds"
    assert judge_clock(-4000.0, 400.0).verdict == "drifted"
    assert judge_clock(300.0, 2000.0).verdict == "cannot tell"


def test_long_recordings_are_sampled_not_read_whole():
    """A ten-minute recording costs as much as one of seven seconds."""
    assert len(stretches(36_000)) == len(stretches(500)) == 24
    assert len(stretches(100)) == 6


def test_an_uncalibrated_module_is_refused():
    """The sentence says what it lacks."""
    with pytest.raises(NotCalibratedError, match="colour_from_event"):
        setting_of(load_module(WREN), None)


def test_one_threshold_alone_is_refused():
    """The other is not taken to be the same."""
    wren = load_module(WREN)
    half = wren.model_copy(update={
        "colour_from_event": ColourFromEvent(matrix=((4.0, 0.0, 1.0), (0.0, 4.0, 1.0))),
        "contrast": Contrast(on_threshold=0.3),
    })  # fmt: skip
    with pytest.raises(NotCalibratedError, match="both contrast thresholds"):
        setting_of(half, None)


def test_settings_that_differ_are_named(tmp_path):
    """Gains and biases under which the module was calibrated are compared with the recording's."""
    module = load_module(WREN).model_copy(update={"settings": {"gain": 1.0, "bias_on": 40}})
    with RecordingWriter(tmp_path / "r.h5", module, {"gain": 2.0, "bias_on": 40}):
        pass
    with Recording.open(tmp_path / "r.h5") as recording:
        sentences = differing_settings(module, recording)
    assert len(sentences) == 1
    assert "setting 'gain' was 1.0" in sentences[0]


def test_too_few_frames_are_refused(tmp_path):
    """A recording without frames is no motion."""
    module = load_module(WREN)
    with RecordingWriter(tmp_path / "r.h5", module, None):
        pass
    with Recording.open(tmp_path / "r.h5") as recording, pytest.raises(DegenerateDataError, match="events"):
        check_field(recording, module)
