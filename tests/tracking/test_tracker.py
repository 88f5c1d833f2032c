"""The tracker, on a module and a scene that share nothing with the package's own synthesis."""

import numpy as np
import pytest
from planar_scene import PlanarScene, small_module
from rides import FIRST_NS, PERIOD_NS, Ride, sway

from hybridtrack.errors import DegenerateDataError, ModuleMismatchError, NotCalibratedError, OptionError
from hybridtrack.module import Contrast, Timing
from hybridtrack.recording import Events
from hybridtrack.tracking import Points, Tracker, TrackerOptions, Tracks
from hybridtrack.tracking.frame_step import pyramidal_flow

Array = np.ndarray


def distances(ride: Ride, tracks: Tracks, source: str | None = None, alive: bool = True) -> Array:
    """Errors (N,) of the points in sight, after the first frame, in px."""
    use = np.isin(tracks.id, ride.in_sight()) & (tracks.t_ns > FIRST_NS + PERIOD_NS)
    if source is not None:
        use &= tracks.source == tracks.sources.index(source)
    if alive:
        use &= tracks.with_state("alive") | tracks.with_state("weak")
    return np.linalg.norm(ride.errors(tracks[use]), axis=1)


def plain_flow_error(ride: Ride) -> float:
    """Median error of pyramidal Lucas-Kanade from frame to frame, of features that pass its own gate."""
    module, at = ride.scene.module, ride.scene.module.frame_mode.frame_from_colour(ride.points.uv)
    alive, errors = np.isin(ride.points.id, ride.in_sight()), []
    for (_, before), (start, after) in zip(ride.frames, ride.frames[1:], strict=False):
        at, good = pyramidal_flow(before, after, at, at, 1.0)
        alive &= good
        rows = module.timing.exposure_start_ns(np.array(start), at[:, 1]) + ride.exposure_ns / 2
        truth = ride.scene.carried(ride.points.uv, ride.points.t_ns, rows)
        errors.append(np.linalg.norm(module.frame_mode.colour_from_frame(at) - truth, axis=1)[alive])
    return float(np.median(np.concatenate(errors)))


def test_slow_movement_is_as_exact_as_frames_alone(slow_ride: Ride) -> None:
    """At 150 px/s no point is lost in either mode, and both are at least as exact as plain Lucas-Kanade."""
    plain = plain_flow_error(slow_ride)
    frames, hybrid = slow_ride.run("frames"), slow_ride.run("hybrid")
    assert slow_ride.survival(frames) == 1.0
    assert slow_ride.survival(hybrid) == 1.0
    assert np.median(distances(slow_ride, frames, "frame")) <= 1.05 * plain
    assert np.median(distances(slow_ride, hybrid, "both")) <= 1.05 * plain
    assert np.median(distances(slow_ride, hybrid, "events")) < 0.4


def test_fast_movement_is_held_by_events(fast_ride: Ride) -> None:
    """At 2500 px/s frames alone lose most points and the hybrid keeps nearly all, with an update every ms."""
    frames, hybrid = fast_ride.run("frames"), fast_ride.run("hybrid")
    assert fast_ride.survival(frames) < 0.5
    assert fast_ride.survival(hybrid) >= 0.9
    assert np.median(distances(fast_ride, hybrid)) < 0.6
    mine = hybrid.of(int(fast_ride.in_sight()[0]))
    between = mine[mine.source == mine.sources.index("events")]
    assert np.median(np.diff(between.t_ns)) == 1_000_000


def test_stated_covariance_covers_the_errors(fast_ride: Ride, slow_ride: Ride) -> None:
    """The 95 % ellipse holds at least 80 % of errors, and is no blanket: its axes are below 2 px at the median."""
    for ride in (slow_ride, fast_ride):
        tracks = ride.run("hybrid")
        tracks = tracks[np.isin(tracks.id, ride.in_sight()) & (tracks.t_ns > FIRST_NS + PERIOD_NS)]
        e, (uu, uv, vv) = ride.errors(tracks), tracks.cov.T.astype(float)
        nees = (vv * e[:, 0] ** 2 - 2 * uv * e[:, 0] * e[:, 1] + uu * e[:, 1] ** 2) / (uu * vv - uv**2)
        assert np.mean(nees < 5.99) > 0.8
        assert np.median(np.sqrt(uu + vv)) < 2.0


def test_events_mode_takes_no_position_from_frames(slow_ride: Ride) -> None:
    """Positions come from events alone after the start, at every instant, and stay near the truth for a while."""
    tracks = slow_ride.run("events")
    later = tracks.t_ns > FIRST_NS + PERIOD_NS
    assert set(tracks.source[later]) == {tracks.sources.index("events")}
    assert np.median(distances(slow_ride, tracks)) < 2.0


def test_same_input_gives_the_same_tracks_however_it_is_cut(fast_ride: Ride) -> None:
    """Two runs agree to the bit, and so does one that gets its events in seven pieces between frames."""
    one, two, cut = fast_ride.run(), fast_ride.run(), fast_ride.run(pieces=7)
    for other in (two, cut):
        np.testing.assert_array_equal(one.id, other.id)
        np.testing.assert_array_equal(one.t_ns, other.t_ns)
        np.testing.assert_array_equal(one.uv, other.uv)


@pytest.mark.parametrize(
    ("pitch", "binning", "mirror"), [(2, 1, False), (4, 2, True), (8, 2, False)], ids=["2x2", "mirrored", "8x8"]
)
def test_other_layouts_work(gravel: Array, pitch: int, binning: int, mirror: bool) -> None:
    """Small clusters at full resolution, a mirrored grid and a coarse one hold fast points all the same."""
    module = small_module(pitch, binning, mirror)
    ride = Ride.of(PlanarScene(module, sway(1500.0), texture=gravel), 0.08)
    tracks = ride.run("hybrid")
    assert ride.survival(tracks) >= 0.85
    assert np.median(distances(ride, tracks, "events")) < 1.0


def test_late_events_are_noticed(gravel: Array) -> None:
    """Events 0.5 ms later than the module says are found to be so, and positions stay exact."""
    ride = Ride.of(PlanarScene(small_module(), sway(1500.0), texture=gravel), 0.2)
    late = Ride(ride.scene, ride.exposure_ns, ride.frames, _later(ride, 500_000), ride.points)
    tracker = Tracker(ride.scene.module, TrackerOptions(), ride.points)
    tracks = late.feed(tracker)
    assert tracker.event_lag_ns == pytest.approx(500_000, abs=150_000)
    half = tracks.t_ns > 120_000_000
    use = half & np.isin(tracks.id, ride.in_sight())
    assert np.median(np.linalg.norm(ride.errors(tracks[use]), axis=1)) < 0.45


def _later(ride: Ride, lag_ns: int) -> list[Events]:
    every = Events.joined(ride.events)
    every = Events(every.t + lag_ns, every.x, every.y, every.on)
    ends = [int(events.t[-1]) for events in ride.events]
    cuts = np.searchsorted(every.t, ends, side="right")
    return [every[a:b] for a, b in zip(np.append(0, cuts[:-1]), cuts, strict=True)]


def test_lamp_flicker_does_not_lose_points(gravel: Array) -> None:
    """Under 100 Hz flicker of 30 % the points in sight survive as in steady light."""
    scene = PlanarScene(
        small_module(), sway(800.0), light=lambda t: 0.75 * (1 + 0.3 * np.sin(200 * np.pi * t)), texture=gravel
    )
    ride = Ride.of(scene, 0.12)
    assert ride.survival(ride.run("hybrid")) >= 0.9


def test_lost_events_make_tracks_weak_and_frames_bring_them_back(slow_ride: Ride) -> None:
    """In a stated gap no event moves a feature; tracks say so, and are alive again at the next frame."""
    begin, end = FIRST_NS + 4 * PERIOD_NS + 12_000_000, FIRST_NS + 5 * PERIOD_NS - 1_000_000
    tracker = Tracker(slow_ride.scene.module, TrackerOptions(), slow_ride.points)
    tracker.push_lost_events(begin, end)
    tracks = slow_ride.feed(tracker)
    inside = (tracks.t_ns > begin + 2_000_000) & (tracks.t_ns < end)
    assert inside.any()
    assert np.all(tracks.with_state("weak")[inside])
    assert {tracks.reasons[k] for k in tracks.reason[inside]} == {"events_lost"}
    after = tracks[tracks.t_ns > end + 2 * PERIOD_NS]
    assert np.mean(after.with_state("alive")) > 0.9
    assert slow_ride.survival(tracks) == 1.0


def test_corners_are_found_kept_dense_and_leave_the_picture(fast_ride: Ride) -> None:
    """Without points, corners start at the first frame; new ones replace those that leave, each with its own id."""
    tracks = Ride.feed(fast_ride, Tracker(fast_ride.scene.module, TrackerOptions(max_features=40)))
    first = tracks[tracks.t_ns < FIRST_NS + 12_000_000]
    assert 25 <= len(np.unique(first.id)) <= 40
    gone = tracks[tracks.with_state("out_of_view")]
    assert len(gone) > 0
    assert {gone.reasons[k] for k in gone.reason} == {"left_picture"}
    assert tracks.id.max() > first.id.max()
    ended = tracks.with_state("lost") | tracks.with_state("out_of_view")
    for identity in np.unique(tracks.id[ended]):
        mine = tracks.of(int(identity))
        still = mine.with_state("alive") | mine.with_state("weak")
        assert mine.t_ns[still].max() < mine.t_ns[~still].max()


def test_points_start_after_their_stamp_and_keep_their_ids(slow_ride: Ride) -> None:
    """A point with a later stamp starts with the first frame after it, and nothing else is followed."""
    stamp = FIRST_NS + 3 * PERIOD_NS - 1_000_000
    here = slow_ride.scene.carried(slow_ride.points.uv[:2], slow_ride.points.t_ns[:2], np.full(2, stamp))
    outside = np.array([[-50.0, 10.0]])
    points = Points(np.array([70, 7, 9]), np.array([stamp, stamp, stamp]), np.concatenate([here, outside]))
    tracks = slow_ride.run("hybrid", points)
    assert set(tracks.id.tolist()) == {70, 7}
    assert tracks.t_ns.min() >= stamp
    assert tracks.t_ns.min() < stamp + 8_000_000
    later = tracks[tracks.t_ns > stamp + 2 * PERIOD_NS]
    row = {70: 0, 7: 1}
    start = np.array([here[row[int(i)]] for i in later.id])
    truth = slow_ride.scene.carried(start, np.full(len(later), stamp), later.t_ns)
    assert np.median(np.linalg.norm(later.uv - truth, axis=1)) < 0.6


def test_a_point_seen_before_a_frame_is_carried_to_it_by_events(fast_ride: Ride) -> None:
    """At 2500 px/s a point stamped 2 ms before its row's exposure starts where it has moved to, not where it was."""
    points = fast_ride.points
    stamp = points.t_ns - 2_000_000
    before = fast_ride.scene.carried(points.uv, points.t_ns, stamp)
    early = Points(points.id, stamp, before)
    tracks = fast_ride.run("hybrid", early)
    first = tracks[tracks.t_ns < FIRST_NS + 12_000_000]
    first = first[first.source == first.sources.index("frame")]
    off = np.linalg.norm(fast_ride.errors(first), axis=1)
    moved = np.linalg.norm(before - points.uv, axis=1)
    assert np.median(moved) > 4.0
    assert np.median(off) < 0.25 * np.median(moved)


def test_modules_that_are_not_calibrated_are_refused() -> None:
    """Missing clocks, map or thresholds are named; frames alone need only the clocks."""
    module = small_module()
    bare = module.model_copy(update={"timing": Timing()})
    with pytest.raises(
        NotCalibratedError, match=r"frame offset is required here, and 'timing\.frame_offset_ns' is null"
    ):
        Tracker(bare, TrackerOptions(mode="frames"))
    unmapped = module.model_copy(update={"colour_from_event": None})
    with pytest.raises(NotCalibratedError, match="requires a calibrated map, and 'colour_from_event' is null"):
        Tracker(unmapped)
    Tracker(unmapped, TrackerOptions(mode="frames"))
    with pytest.raises(NotCalibratedError, match="requires both contrast thresholds"):
        Tracker(module.model_copy(update={"contrast": Contrast(on_threshold=0.2)}))


def test_wrong_input_is_refused() -> None:
    """Pictures of another size, events out of order or off the grid, and exposures of nothing have their sentences."""
    tracker = Tracker(small_module())
    with pytest.raises(ModuleMismatchError, match="pictures of 240x160 px"):
        tracker.push_frame(np.zeros((9, 9), np.uint8), 0, 1000)
    with pytest.raises(DegenerateDataError, match="exposure must be positive, got 0 ns"):
        tracker.push_frame(np.zeros((160, 240), np.uint8), 0, 0)
    one, flag = np.zeros(1, np.uint16), np.zeros(1, np.uint8)
    tracker.push_events(Events(np.array([1000]), one, one, flag))
    with pytest.raises(OptionError, match="events must be pushed in order, got 10 ns after 1000 ns"):
        tracker.push_events(Events(np.array([10]), one, one, flag))
    with pytest.raises(OptionError, match=r"must lie on the module's 120x80 grid, got \(120, 0\)"):
        tracker.push_events(Events(np.array([2000]), one + 120, one, flag))
    with pytest.raises(OptionError, match="must not end before it starts"):
        tracker.push_lost_events(5, 4)


def test_featureless_input_gives_no_tracks() -> None:
    """A blank picture has no corners, and nothing is invented."""
    tracker = Tracker(small_module())
    for k in range(3):
        assert len(tracker.push_frame(np.full((160, 240), 90, np.uint8), k * PERIOD_NS, 4_000_000)) == 0


def test_a_flash_makes_tracks_weak_until_the_next_frame(slow_ride: Ride) -> None:
    """Light that doubles over the whole array within a ms is not followed: tracks coast, say so, and recover."""
    when = FIRST_NS + 5 * PERIOD_NS + 12_000_000
    grid = slow_ride.scene.module.event_grid
    columns, rows = np.meshgrid(np.arange(grid.width), np.arange(grid.height))
    burst = [np.tile(c.ravel(), 4).astype(np.uint16) for c in (columns, rows)]
    t = np.sort(np.random.default_rng(0).integers(when, when + 400_000, len(burst[0])))
    flash = Events(t, *burst, np.ones(len(t), np.uint8))
    flashed = []
    for events in slow_ride.events:
        both = Events.joined([events, flash]) if events.t[0] <= when <= events.t[-1] else events
        flashed.append(both[np.argsort(both.t, kind="stable")])
    ride = Ride(slow_ride.scene, slow_ride.exposure_ns, slow_ride.frames, flashed, slow_ride.points)
    tracker = Tracker(ride.scene.module, TrackerOptions(), ride.points)
    tracks = ride.feed(tracker)
    assert tracker.counters.flashes == 1
    during = tracks[(tracks.t_ns > when + 1_500_000) & (tracks.t_ns < when + 3_000_000)]
    assert {during.reasons[k] for k in during.reason} == {"flash"}
    assert ride.survival(tracks) == 1.0
    assert np.mean(tracks[tracks.t_ns > when + 2 * PERIOD_NS].with_state("alive")) > 0.9
