"""The clock model on row signals made by its own formula, and by noise: exact, honest, refused."""

from dataclasses import replace

import numpy as np
import pytest

from hybridtrack.calibration.blink import Blink
from hybridtrack.calibration.clocks import (
    PARAMETERS,
    ClockModel,
    Clocks,
    fit_clocks,
    nearest_offset,
    project,
    projected_problem,
    search,
)
from hybridtrack.calibration.row_signals import RowSignals
from hybridtrack.errors import DegenerateDataError

BLINK = Blink(61.0, 1e-5, 0, 0.3, 0.5)
AT_ONCE = PARAMETERS[:-1]  # no sweep
TRUE = Clocks(1.3e6, 18e3, 4e4, 8e-6, 0.48)


def blank_rows(views=5, rows=60, frames=24, exposure_ns=4e6, frame_hz=60.0, signed=True):
    """Row signals without a signal: several views, every tenth row."""
    stamps = np.concatenate([1e9 * v * 0.8 + np.arange(frames) * 1e9 / frame_hz for v in range(views)])
    stamp = np.repeat(stamps.reshape(views, 1, frames), rows, axis=1).reshape(-1, frames)
    order = np.tile(np.arange(rows) * 7.0, views)
    shape = stamp.shape
    return RowSignals(
        0,
        np.zeros(shape),
        np.full(shape, 1.0),
        stamp,
        np.full(shape, exposure_ns),
        order,
        order.astype(int),
        np.repeat(np.arange(views), rows),
        np.zeros(len(order)),
        signed,
    )


def with_signal(rows, clocks, noise, seed):
    """Signals a + b f with random a and b, noise of the stated deviation."""
    rng = np.random.default_rng(seed)
    share = ClockModel(rows, BLINK, 0.0, 0.0, 0).shares(clocks)
    gain, base = rng.uniform(40, 120, (len(share), 1)), rng.uniform(5, 30, (len(share), 1))
    signal = base + gain * share + noise * rng.standard_normal(share.shape)
    return RowSignals(
        rows.origin_ns,
        signal,
        np.full(share.shape, 1.0 / max(noise, 1e-3)),
        rows.stamp_ns,
        rows.exposure_ns,
        rows.order,
        rows.row,
        rows.view,
        rows.delay_ns,
        rows.signed,
    )


def model_of(rows):
    """The clock model with a square wave."""
    return ClockModel(rows, BLINK, 0.0, 0.0, 0)


def test_exact_signals_give_exact_clocks():
    """Without noise all five parameters come out from a start a millisecond off."""
    rows = with_signal(blank_rows(), TRUE, 0.0, 1)
    fit = fit_clocks(model_of(rows), Clocks(2.2e6, 16e3), AT_ONCE)
    assert fit.clocks.offset_ns == pytest.approx(TRUE.offset_ns, abs=1.0)
    assert fit.clocks.line_time_ns == pytest.approx(TRUE.line_time_ns, abs=0.01)
    assert fit.clocks.exposure_correction_ns == pytest.approx(TRUE.exposure_correction_ns, abs=1.0)
    assert fit.clocks.drift == pytest.approx(TRUE.drift, abs=1e-9)
    assert fit.clocks.duty == pytest.approx(TRUE.duty, abs=1e-7)
    assert fit.explained == pytest.approx(1.0, abs=1e-6)


def test_jacobian_matches_differences():
    """The projected Jacobian (Kaufman's) equals differences of the projected residual at a fit without residual."""
    blank = blank_rows(views=2, rows=12)
    rows = with_signal(replace(blank, delay_ns=np.linspace(0.0, 7e6, len(blank.row))), TRUE, 0.0, 2)
    model = model_of(rows)
    _, jacobian = projected_problem(model, TRUE, PARAMETERS)
    for k, (name, step) in enumerate(zip(PARAMETERS, (200.0, 2.0, 200.0, 1e-8, 1e-5, 1e-5), strict=True)):
        ahead, behind = (
            project(rows, model.shares(TRUE.moved((name,), np.array([s]))))[1] * rows.weight for s in (step, -step)
        )
        numeric = (ahead - behind) / (2 * step)
        scale = np.abs(numeric).max()
        # A kink of the square wave inside the step leaves a few entries off.
        assert np.mean(np.abs(numeric - jacobian[k]) > 0.02 * scale) < 0.02, name


def test_search_finds_phase_and_line_time():
    """The grid lands within reach of the fit from no knowledge, with the rows read either way."""
    for line_time in (18e3, -18e3):
        rows = with_signal(blank_rows(), Clocks(5.0e6, line_time), 2.0, 3)
        found = search(model_of(rows), Clocks(), np.arange(-8, 9) * 5e3)
        fit = fit_clocks(model_of(rows), found, ("offset_ns", "line_time_ns"))
        assert fit.clocks.line_time_ns == pytest.approx(line_time, abs=60)


def test_errors_match_their_covariance():
    """Over 60 noise draws the squared errors average to the number of parameters within DESIGN's honest range."""
    nees, inside = [], 0
    for seed in range(60):
        rows = with_signal(blank_rows(), TRUE, 2.0, 100 + seed)
        fit = fit_clocks(model_of(rows), Clocks(1.6e6, 18.5e3, 0.0, 0.0, 0.5), AT_ONCE)
        error = (fit.clocks.values - TRUE.values)[: len(AT_ONCE)]
        value = float(error @ np.linalg.solve(fit.covariance, error)) / len(error)
        nees.append(value)
        inside += value * len(error) < 11.07  # chi-square, 5 degrees of freedom, 95 %
    assert 0.7 <= np.mean(nees) <= 1.4
    assert 0.88 <= inside / 60 <= 1.0


def test_exposure_of_a_whole_period_is_refused():
    """Where every exposure sees the same share nothing can be fitted, and the sentence says so."""
    rows = with_signal(blank_rows(exposure_ns=BLINK.period_ns), Clocks(1e6, 18e3), 1.0, 4)
    with pytest.raises(DegenerateDataError, match=r"cannot determine offset_ns, line_time_ns together"):
        fit_clocks(model_of(rows), Clocks(1e6, 18e3), ("offset_ns", "line_time_ns"))


def test_nearest_offset_moves_by_whole_periods():
    """The offset nearest the nominal one is taken, from either side."""
    assert nearest_offset(17e6, 16e6, 0.0) == pytest.approx(1e6)
    assert nearest_offset(-9e6, 16e6, 0.0) == pytest.approx(7e6)
    assert nearest_offset(1e6, 16e6, 30e6) == pytest.approx(33e6)


def test_a_sweep_is_fitted_with_the_clocks():
    """Rows that a screen's sweep delays, by more than the file says: line time and sweep are told apart where views
    are turned against each other."""
    rows = blank_rows()
    delay_ns = np.where(rows.view % 2 == 0, 1.0, -1.0) * rows.order * 15e3 + 7e6
    rows = replace(rows, delay_ns=delay_ns)
    true = Clocks(-1.2e6, 18.1e3, 20e3, 0.0, 0.5, 0.04)
    fit = fit_clocks(
        model_of(with_signal(rows, true, 0.0, 3)),
        replace(true, offset_ns=-1.3e6, sweep=0.0),
        ("offset_ns", "line_time_ns", "exposure_correction_ns", "sweep"),
    )
    np.testing.assert_allclose(fit.clocks.values, true.values, rtol=1e-6, atol=1e-6)
