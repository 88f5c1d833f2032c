"""From tracks to views: which sample belongs to which frame, its time, its ray and its weight."""

from collections.abc import Callable
from dataclasses import replace

import numpy as np
import pytest

from hybridtrack.errors import DegenerateDataError, NotCalibratedError
from hybridtrack.geometry import FisheyeLens, PerspectiveLens
from hybridtrack.module import Cluster, ColourArray, EventGrid, FrameMode, HybridModule, Timing
from hybridtrack.odometry.observations import FrameTimes, frame_times, gather_views, view_of, whitening_of
from hybridtrack.recording import FrameTable
from hybridtrack.tracking.tracks_file import Tracks

Array = np.ndarray
LENS = PerspectiveLens(900.0, 900.0, 640.0, 400.0, (-0.1, 0.02, 0.0))
TIMES = FrameTimes(np.array([0, 16_000_000, 32_000_000]), 399.5, 10e-6)


def module(timing: Timing | None, **mode: object) -> HybridModule:
    return HybridModule(
        colour_array=ColourArray(width=1280, height=800),
        cluster=Cluster(width=4, height=4),
        event_grid=EventGrid(width=320, height=200),
        frame_mode=FrameMode(width=640, height=400, binning=2, **mode),  # type: ignore[arg-type]
        timing=timing,
    )


def frames(count: int = 3) -> FrameTable:
    t_start = np.arange(count) * 16_000_000
    exposure = np.full(count, 4_000_000)
    return FrameTable(t_start, exposure, None, None, (400, 640), np.dtype(np.uint8))


def tracks(lines: list[tuple[int, int, float, float, str, str]]) -> Tracks:
    """Tracks from (id, t_ns, u, v, state, source)."""
    ids, t_ns, u, v, states, sources = zip(*lines, strict=True)
    empty = Tracks.empty()
    cov = np.tile(np.array([0.04, 0.0, 0.04], np.float32), (len(lines), 1))
    state = np.array([empty.states.index(s) for s in states], np.uint8)
    source = np.array([empty.sources.index(s) for s in sources], np.uint8)
    uv = np.stack([u, v], axis=1).astype(float)
    return Tracks(np.array(ids), np.array(t_ns), uv, cov, state, np.zeros(len(lines), np.uint8), source).in_order()


def test_frame_times_are_mid_exposure_of_the_middle_row() -> None:
    """Offset, half a true exposure and half the readout after the stamp; rows a line time over the binning apart."""
    timing = Timing(frame_offset_ns=1000.0, line_time_ns=18_000.0, exposure_correction_ns=2000.0)
    times = frame_times(frames(), module(timing))
    expected = frames().t_start_ns + 1000 + 0.5 * 4_002_000 + 199.5 * 18_000
    np.testing.assert_array_equal(times.t_ns, np.round(expected))
    np.testing.assert_allclose(times.row_dt_s(np.array([0.5, 399.5, 798.5])), [-199.5 * 18e-6, 0.0, 199.5 * 18e-6])


def test_rows_may_be_read_upwards_or_at_once() -> None:
    """Bottom up the sign turns; a global shutter has one time for all rows."""
    timing = Timing(frame_offset_ns=0.0, line_time_ns=18_000.0)
    upward = frame_times(frames(), module(timing, row_order=-1))
    assert upward.row_dt_s(np.array(0.5)) > 0
    at_once = frame_times(frames(), module(timing, shutter="global"))
    assert at_once.row_dt_s(np.array(0.5)) == 0.0
    np.testing.assert_array_equal(at_once.t_ns, frames().t_start_ns + 2_000_000)


def test_clocks_must_be_known() -> None:
    """Without a frame offset there is no pose on the event clock."""
    with pytest.raises(NotCalibratedError, match="frame_offset_ns"):
        frame_times(frames(), module(None))


def test_samples_go_to_the_frame_that_read_their_row() -> None:
    """Near the bottom of the picture a sample's time is closer to the next frame's middle; its row says whose it is."""
    times = FrameTimes(np.array([0, 8_000_000, 16_000_000]), 399.5, 15e-6)
    lines = []
    for k in range(3):
        for track, v in ((1, 20.0), (2, 780.0)):
            t_ns = int(times.t_ns[k] + 1e9 * times.row_dt_s(np.array(v)))
            lines.append((track, t_ns, 100.0 + k, v, "alive", "frame"))
    views = gather_views(tracks(lines), times, LENS, 0.1)
    assert [view.ids.tolist() for view in views] == [[1, 2]] * 3
    for k, view in enumerate(views):
        np.testing.assert_allclose(view.uv[:, 0], 100.0 + k)
        np.testing.assert_allclose(view.dt_s, times.row_dt_s(view.uv[:, 1]), atol=1e-9)


def test_a_frame_sample_goes_before_a_nearer_one_from_events() -> None:
    """Of two samples near a frame the one seen by the frame is taken; without one, events do."""
    lines = [
        (1, 300_000, 100.0, 399.5, "alive", "both"),
        (1, 0, 99.0, 399.5, "alive", "events"),
        (2, 100_000, 50.0, 399.5, "weak", "events"),
        (3, 9_000_000, 70.0, 399.5, "alive", "events"),
    ]
    view = gather_views(tracks(lines), TIMES, LENS, 0.1)[0]
    assert view.ids.tolist() == [1, 2]
    np.testing.assert_allclose(view.uv[:, 0], [100.0, 50.0])


def test_lost_and_departed_samples_are_left_out() -> None:
    """A line that says lost or out of view is no observation."""
    lines = [
        (1, 0, 100.0, 399.5, "alive", "frame"),
        (2, 0, 200.0, 399.5, "lost", "frame"),
        (3, 0, 300.0, 399.5, "out_of_view", "frame"),
    ]
    assert gather_views(tracks(lines), TIMES, LENS, 0.1)[0].ids.tolist() == [1]


def test_rays_at_frame_follow_the_track() -> None:
    """A track at 500 px/s seen 2 ms early is moved by one px to the frame's own time, also at its ends."""
    v = 199.5
    dt_s = float(TIMES.row_dt_s(np.array(v)))
    lines = [(1, int(t + 1e9 * dt_s), 300.0 + 5e-7 * (t + 1e9 * dt_s), v, "alive", "frame") for t in TIMES.t_ns]
    for k, view in enumerate(gather_views(tracks(lines), TIMES, LENS, 0.1)):
        np.testing.assert_allclose(LENS.project(view.rays_at_frame)[0], [300.0 + 8.0 * k, v], atol=1e-6)
        np.testing.assert_allclose(LENS.project(view.rays)[0], view.uv[0], atol=1e-8)


def test_no_samples_near_frames_is_refused() -> None:
    """Tracks of another time span are no observations of these frames."""
    with pytest.raises(DegenerateDataError, match="readout of some frame"):
        gather_views(tracks([(1, 10**12, 100.0, 100.0, "alive", "frame")]), TIMES, LENS, 0.1)
    with pytest.raises(DegenerateDataError, match="readout of some frame"):
        gather_views(Tracks.empty(), TIMES, LENS, 0.1)


@pytest.mark.parametrize("lens", [LENS, FisheyeLens(400.0, 405.0, 640.0, 400.0, (0.02, -0.01, 0.0, 0.0))])
def test_whitened_residual_is_the_reprojection_error_over_its_deviation(lens: PerspectiveLens | FisheyeLens) -> None:
    """W n equals L^-1 (uv(n) - uv) to first order, for any lens and a correlated covariance; W b is zero."""
    rng = np.random.default_rng(1)
    uv = rng.uniform([50, 50], [1230, 750], (40, 2))
    rays = lens.unproject(uv)
    covariance = np.tile([0.3, 0.1, 0.2], (40, 1))
    W = whitening_of(lens, rays, covariance, 0.1)
    np.testing.assert_allclose(np.einsum("nij,nj->ni", W, rays), 0.0, atol=1e-9)
    moved = uv + rng.normal(0, 0.02, uv.shape)
    L = np.linalg.cholesky([[0.31, 0.1], [0.1, 0.21]])
    expected = np.linalg.solve(L, (moved - uv).T).T
    np.testing.assert_allclose(np.einsum("nij,nj->ni", W, lens.unproject(moved)), expected, atol=2e-4)


def test_samples_that_can_not_be_used_are_left_out() -> None:
    """Positions beyond the lens and covariances that are none do not reach a view."""
    uv = np.array([[640.0, 400.0], [5000.0, 400.0], [600.0, 300.0], [610.0, 300.0]])
    covariance = np.array([[0.1, 0, 0.1], [0.1, 0, 0.1], [np.nan, 0, 0.1], [0.1, 5.0, 0.1]])
    lens = replace(LENS, radial=(-0.3, 0.0, 0.0))
    table = {"ids": np.arange(4), "uv": uv, "uv_at_frame": uv, "dt_s": np.zeros(4), "covariance": covariance}
    assert view_of(0, 0, table, lens, 0.1).ids.tolist() == [0]


def test_one_time_for_all_rays(make_lap: Callable) -> None:
    """Put at the frame's time, rays still have no residual against themselves, and keep their weight."""
    view = make_lap().views(0.3)[20]
    still = view.at_frame_time()
    assert not still.dt_s.any()
    np.testing.assert_allclose(np.einsum("nij,nj->ni", still.whitening, still.rays), 0.0, atol=1e-9)
    np.testing.assert_allclose(still.ray_sigma_rad, view.ray_sigma_rad, rtol=1e-3)
