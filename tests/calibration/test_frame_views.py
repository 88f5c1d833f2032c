"""From frames to clocks and pictures on whole recordings, mirrored or not, and refusals."""

from dataclasses import replace

import numpy as np
import pytest
from ideal_board import opened, small_module, tilted_poses

from hybridtrack.calibration.blink import find_blink
from hybridtrack.calibration.frame_views import FrameSettings, fit_frames
from hybridtrack.calibration.onset import fit_onsets
from hybridtrack.calibration.timing_result import LATENCY_FINDING, timing_result
from hybridtrack.calibration.views import find_views, fold_view
from hybridtrack.errors import DegenerateDataError, ModuleMismatchError
from hybridtrack.module import EventGrid, FrameMode, Timing

SHAPE = (80, 120)


def fitted(recording, scene, nominal=None):
    """Settings, onset and frame fit of a recording."""
    rough = find_blink(recording, SHAPE, scene.target)
    views, _ = find_views(recording, rough, SHAPE)
    folds = [fold_view(recording, view, rough, SHAPE) for view in views]
    onset = fit_onsets(recording, rough, views, folds)
    folds = [fold_view(recording, view, onset.blink, SHAPE) for view in views]
    nominal = nominal or recording.module
    settings = FrameSettings(nominal, scene.target, onset.blink, int(recording.frames.t_start_ns.mean()))
    return settings, onset, fit_frames(settings, recording, views, [fold.amplitude() for fold in folds])


def true_offset_ns(scene, settings):
    """Offset at the drift's epoch, latency included, as it is reported."""
    timing = scene.module.timing
    drift = (timing.frame_drift_ppm or 0.0) * 1e-6 * (settings.drift_epoch_ns - (timing.drift_epoch_ns or 0))
    return timing.frame_offset_ns + scene.latency_ns + drift


def wrapped(difference_ns, period_ns):
    """A difference known up to whole periods."""
    return (difference_ns + period_ns / 2) % period_ns - period_ns / 2


def test_clean_frames_give_exact_clocks(clean, clean_scene):
    """Line time to a part in ten thousand, offset to microseconds, exposure to one."""
    settings, onset, frames = fitted(clean, clean_scene)
    clocks = frames.clocks.clocks
    assert clocks.line_time_ns == pytest.approx(30e3, rel=1e-4)
    assert wrapped(clocks.offset_ns - true_offset_ns(clean_scene, settings), onset.blink.period_ns) == pytest.approx(
        0, abs=5e3
    )
    assert abs(clocks.exposure_correction_ns) < 2e3
    assert clocks.duty == pytest.approx(0.5, abs=1e-4)
    assert (frames.agreement.mirror_x, frames.agreement.mirror_y) == (False, False)
    assert frames.agreement.correlation > 0.8


def test_noisy_frames_are_within_their_deviations(noisy, noisy_scene):
    """With noise, drift and an exposure error every clock lies within four deviations of the truth."""
    settings, onset, frames = fitted(noisy, noisy_scene)
    fit, true = frames.clocks, noisy_scene.module.timing
    assert abs(fit.clocks.line_time_ns - true.line_time_ns) < 4 * fit.sigma("line_time_ns")
    assert abs(fit.clocks.exposure_correction_ns - true.exposure_correction_ns) < 4 * fit.sigma(
        "exposure_correction_ns"
    )
    result = timing_result(fit, onset, noisy.module.frame_mode, noisy_scene.target, 0.0)
    named = dict(zip(result.parameters, np.sqrt(np.diag(result.covariance)), strict=True))
    error = wrapped(result.timing.frame_offset_ns - true_offset_ns(noisy_scene, settings), onset.blink.period_ns)
    assert abs(error) < 4 * named["timing.frame_offset_ns"] < 60e3
    assert abs(result.timing.frame_drift_ppm - true.frame_drift_ppm) < 4 * named["timing.frame_drift_ppm"]
    assert LATENCY_FINDING in result.findings


def test_pictures_show_the_two_states(noisy, noisy_scene):
    """Set A is bright by the scene's light, everything else by none, to the stated deviation."""
    _, _, frames = fitted(noisy, noisy_scene)
    picture = frames.demodulated[0]
    still = np.abs(picture.swing_dn) < 10
    assert np.mean(still) > 0.4
    combined = np.hypot(picture.bright_sigma_dn, picture.dark_sigma_dn)
    assert np.std(picture.swing_dn[still] / combined[still]) < 1.4
    # The panel's shading dims some squares by half.
    assert 0.75 * noisy_scene.bright < np.nanmax(picture.swing_dn) < 1.05 * noisy_scene.bright


def test_counterphase_sets_keep_their_names(counterphase, counterphase_scene):
    """Which set is called A is a choice, but events and frames make the same one."""
    _, _, frames = fitted(counterphase, counterphase_scene)
    assert frames.agreement.correlation != 0
    swing = frames.demodulated[0].swing_dn
    assert np.nanmax(swing) > 60
    assert np.nanmin(swing) < -60
    fit = frames.clocks
    assert abs(fit.clocks.line_time_ns - 30e3) < 4 * fit.sigma("line_time_ns") < 60


def test_wrong_row_order_and_mirroring_are_found(folder, clean_scene):
    """Rows read bottom up and a mirrored grid are told from what the nominal module says, line time unknown."""
    mode = clean_scene.module.frame_mode.model_copy(update={"row_order": -1})
    module = small_module(frame_mode=mode, event_grid=EventGrid(width=120, height=80, mirror_x=True))
    scene = replace(clean_scene, module=module, poses=tilted_poses(3))
    with opened(scene, folder, "upward") as recording:
        said = recording.module.frame_mode.model_copy(update={"row_order": 1})
        changes = {"frame_mode": said, "event_grid": EventGrid(width=120, height=80), "timing": Timing()}
        nominal = recording.module.model_copy(update=changes)
        settings, onset, frames = fitted(recording, scene, nominal)
        result = timing_result(frames.clocks, onset, nominal.frame_mode, scene.target, 0.0)
    assert (frames.agreement.mirror_x, frames.agreement.mirror_y) == (True, False)
    assert result.row_order == -1
    assert any("row_order of the nominal module is the other way" in finding for finding in result.findings)
    assert result.timing.line_time_ns == pytest.approx(30e3, rel=3e-4)
    error = wrapped(result.timing.frame_offset_ns - true_offset_ns(scene, settings), onset.blink.period_ns)
    assert error == pytest.approx(0, abs=8e3)


def test_global_shutter_has_no_line_time(folder, clean_scene):
    """All rows at once: the line time is zero and the offset is found all the same."""
    module = small_module(
        frame_mode=FrameMode(width=240, height=160, binning=2, black_dn=4.0, shutter="global"),
        timing=Timing(frame_offset_ns=-2.0e6, line_time_ns=0.0, exposure_correction_ns=0.0, frame_drift_ppm=0.0),
    )
    scene = replace(clean_scene, module=module, poses=tilted_poses(2), frame_hz=24.3)
    with opened(scene, folder, "global") as recording:
        settings, onset, frames = fitted(recording, scene)
    assert frames.clocks.clocks.line_time_ns == 0.0
    error = wrapped(frames.clocks.clocks.offset_ns - true_offset_ns(scene, settings), onset.blink.period_ns)
    assert error == pytest.approx(0, abs=8e3)


def test_exposure_of_a_whole_period_is_refused(folder, clean_scene):
    """Frames that integrate whole blinks show none."""
    scene = replace(clean_scene, exposure_ns=round(clean_scene.period_ns), poses=tilted_poses(1))
    with (
        opened(scene, folder, "whole") as recording,
        pytest.raises(
            DegenerateDataError,
            match=r"frames show no blinking.* whole number of blink periods|do not follow the blinking",
        ),
    ):
        fitted(recording, scene)


def test_frames_of_another_scene_are_refused(noisy, noisy_scene):
    """Events of one recording beside pictures that show something else: the module or recording is mislabelled."""
    rough = find_blink(noisy, SHAPE, noisy_scene.target)
    views, _ = find_views(noisy, rough, SHAPE)
    folds = [fold_view(noisy, view, rough, SHAPE) for view in views]
    onset = fit_onsets(noisy, rough, views, folds)
    settings = FrameSettings(noisy.module, noisy_scene.target, onset.blink, int(noisy.frames.t_start_ns.mean()))
    other = [np.roll(folds[(k + 2) % len(folds)].amplitude(), (31, 47), (0, 1)) for k in range(len(folds))]
    with pytest.raises(ModuleMismatchError, match=r"must show the same board: .* correlate by -?0\.\d+ at best"):
        fit_frames(settings, noisy, views, other)
