"""Pictures at any instant: exact on a noiseless wave, right about rows, losses, defects and lateness; refusals."""

from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest
from moving_wave import PERIOD_NS, THETA, Wave, wave_module

from hybridtrack.errors import DegenerateDataError, ModuleMismatchError, NotCalibratedError, OptionError
from hybridtrack.module import Contrast, ContrastMap, Defects, HybridModule
from hybridtrack.recording import Events, Recording
from hybridtrack.tracking.log_light import LogLightReader
from hybridtrack.tracking.picture import Picture, PictureOptions, covered_ns, reconstruct
from hybridtrack.tracking.picture_plan import FrameStore

Array = np.ndarray
LIVE = PictureOptions(live=True)
# Light that turns between two thresholds shows in no event: no closer can pictures come where a wave has its tops.
CLOSE, CLOSER = 0.4 * THETA, 0.25 * THETA


def pictures(
    path: Path,
    module: HybridModule,
    instants: list[int],
    contrast_map: ContrastMap | None = None,
    options: PictureOptions | None = None,
) -> list[Picture]:
    with Recording.open(path) as recording:
        return list(reconstruct(recording, module, np.array(instants), contrast_map, options))


def error(picture: Picture, wave: Wave) -> float:
    """RMS of log brightness against the truth, away from the rim."""
    return rms(picture.log_light - wave.truth(picture.t_ns))


def rms(difference: Array) -> float:
    return float(np.sqrt(np.mean(difference[8:-8, 8:-8] ** 2)))


@pytest.fixture(scope="module")
def wave() -> Wave:
    """1500 px/s: 9 px of blur, a fifth of a wave; rows 15 us apart."""
    return Wave()


@pytest.fixture(scope="module")
def events(wave: Wave) -> Events:
    """What its event pixels say."""
    return wave.events()


@pytest.fixture(scope="module")
def path(wave: Wave, events: Events, tmp_path_factory: pytest.TempPathFactory) -> Path:
    """Its recording."""
    return wave.write(tmp_path_factory.mktemp("wave") / "wave.h5", events)


@pytest.fixture(scope="module")
def middle_ns(path: Path, wave: Wave) -> int:
    """Middle of exposure of the middle row of the second frame."""
    with Recording.open(path) as recording:
        store = FrameStore(recording, wave.module)
    return int(0.5 * (store.first_middle_ns[1] + store.last_middle_ns[1]))


def test_middle_of_exposure_equals_the_sharp_picture(path: Path, wave: Wave, middle_ns: int) -> None:
    """Within a quarter of a threshold RMS (0.0075 of log brightness); the plain frame is off by five times that."""
    made = pictures(path, wave.module, [middle_ns])[0]
    plain = LogLightReader(wave.module).read(wave.frame(int(wave.starts_ns()[1]))).log_light
    assert error(made, wave) < CLOSER
    assert rms(plain - wave.truth(middle_ns)) > 5 * CLOSER
    assert made.frames == (0, 1, 2)
    assert made.source == "both"


def test_any_instant_equals_the_sharp_picture(path: Path, wave: Wave, middle_ns: int) -> None:
    """In one pass over a period, 1000 pictures a second, each within 0.4 of a threshold."""
    instants = [middle_ns + k * 1_000_000 for k in range(PERIOD_NS // 1_000_000)]
    made = pictures(path, wave.module, instants)
    assert [picture.t_ns for picture in made] == instants
    assert max(error(picture, wave) for picture in made) < CLOSE


def test_a_picture_does_not_depend_on_its_company(path: Path, wave: Wave, middle_ns: int) -> None:
    """One instant alone gives what it gives among others with the same frames."""
    alone = pictures(path, wave.module, [middle_ns + 8_000_000], options=PictureOptions(ramp_ns=2_000_000))[0]
    many = pictures(
        path, wave.module, [middle_ns + k * 1_000_000 for k in (7, 8, 9)], options=PictureOptions(ramp_ns=2_000_000)
    )[1]
    np.testing.assert_allclose(alone.log_light, many.log_light, atol=2e-4)


def test_the_skew_of_a_rolling_shutter_is_gone(path: Path, wave: Wave, middle_ns: int) -> None:
    """The wave stands upright: rows differ by under 0.02, where the frame's first and last differ by over 0.1."""
    made = pictures(path, wave.module, [middle_ns])[0].log_light[8:-8, 8:-8]
    plain = LogLightReader(wave.module).read(wave.frame(int(wave.starts_ns()[1]))).log_light[8:-8, 8:-8]
    assert rms(made - made.mean(axis=0)) < 0.02
    assert np.abs(plain[0] - plain[-1]).max() > 0.1


@pytest.mark.parametrize(
    ("pitch", "binning", "mirror_x"), [(4, 2, True), (2, 1, False), (4, 4, False)], ids=["mirrored", "unbinned", "4x4"]
)
def test_any_layout(tmp_path: Path, pitch: int, binning: int, mirror_x: bool) -> None:
    """Mirrored grids and other binnings go through the module's map."""
    wave = Wave(wave_module(pitch, binning, mirror_x), frames=2)
    made = pictures(wave.write(tmp_path / "w.h5"), wave.module, [14_000_000])[0]
    assert error(made, wave) < CLOSE


def test_bottom_up_rows(tmp_path: Path) -> None:
    """Rows read from the bottom are exposed in that order."""
    module = wave_module(line_time_ns=25_000.0)
    module = module.model_copy(update={"frame_mode": module.frame_mode.model_copy(update={"row_order": -1})})
    wave = Wave(module, frames=2)
    path = wave.write(tmp_path / "w.h5")
    assert error(pictures(path, module, [14_000_000])[0], wave) < CLOSE
    assert error(pictures(path, wave_module(line_time_ns=25_000.0), [14_000_000])[0], wave) > 0.05


def test_forward_and_backward_agree(tmp_path: Path, wave: Wave, events: Events, middle_ns: int) -> None:
    """Events lost within one frame's exposure leave the other: forward alone and backward alone give one picture."""
    instant = middle_ns + PERIOD_NS // 2
    within = [int(start) + 3_000_000 for start in wave.starts_ns()]
    made = []
    for index, source in ((2, "forward"), (1, "backward")):
        path = wave.write(tmp_path / f"{source}.h5", events, lost=[(within[index], within[index] + 10_000)])
        picture = pictures(path, wave.module, [instant])[0]
        assert picture.source == source
        assert "events lost from 0.0" in picture.missing
        assert error(picture, wave) < 0.02
        made.append(picture.log_light)
    assert rms(made[0] - made[1]) < 0.02


def test_lost_events_on_every_way_leave_no_picture(tmp_path: Path, wave: Wave, events: Events, middle_ns: int) -> None:
    """An instant inside the interval has none; the reason names the interval; instants a frame reaches are there."""
    lost = (middle_ns + 5_000_000, middle_ns + 9_000_000)
    path = wave.write(tmp_path / "w.h5", events, lost=[lost])
    nothing, there = pictures(path, wave.module, [middle_ns + 7_000_000, middle_ns + 13_000_000])
    assert nothing.source == "none"
    assert nothing.frames == ()
    assert not np.isfinite(nothing.log_light).any()
    assert f"{1e-9 * lost[0]:.6f} to {1e-9 * lost[1]:.6f} s" in nothing.missing
    assert there.source == "backward"
    assert error(there, wave) < 0.02


def test_live_pictures_do_not_see_the_future(tmp_path: Path, path: Path, wave: Wave, events: Events) -> None:
    """Cut off at the instant, the recording gives the same live picture, and it is close to the truth."""
    instant = int(events.t[events.t <= wave.starts_ns()[2] + 2_000_000][-1])
    cut = replace(wave, frames=2)
    short = cut.write(tmp_path / "cut.h5", events[events.t <= instant])
    whole = pictures(path, wave.module, [instant], options=LIVE)[0]
    np.testing.assert_array_equal(pictures(short, wave.module, [instant], options=LIVE)[0].log_light, whole.log_light)
    assert whole.source == "forward"
    assert whole.frames == (1,)
    assert error(whole, wave) < 1.2 * THETA
    with Recording.open(path) as recording:
        first = covered_ns(recording, wave.module, live=True)[0]
    with pytest.raises(OptionError, match=r"is required for live pictures, got 0\.004000 s"):
        pictures(path, wave.module, [4_000_000], options=LIVE)
    assert pictures(path, wave.module, [first], options=LIVE)[0].frames == (0,)


def test_hot_pixels_of_the_module_are_filled(tmp_path: Path, wave: Wave, events: Events, middle_ns: int) -> None:
    """A pixel that fires without cause does no harm once the module names it, and does where it does not."""
    t = np.arange(0, int(events.t[-1]), 20_000)
    hot = Events(t, np.full(len(t), 60, np.uint16), np.full(len(t), 40, np.uint16), np.ones(len(t), np.uint8))
    joined = Events.joined([events, hot])
    path = wave.write(tmp_path / "w.h5", joined[np.argsort(joined.t, kind="stable")])
    known = wave.module.model_copy(update={"defects": Defects(hot=[(60, 40)])})
    instant = middle_ns + 5_000_000
    u, v = np.rint(wave.module.frame_mode.frame_from_colour(wave.module.event_pixel_positions()[40, 60])).astype(int)

    def worst_near(module: HybridModule) -> float:
        difference = pictures(path, module, [instant])[0].log_light - wave.truth(instant)
        return float(np.abs(difference[v - 3 : v + 4, u - 3 : u + 4]).max())

    assert worst_near(known) < 2 * THETA
    assert worst_near(wave.module) > 10 * THETA


def test_saturated_pixels_are_told(tmp_path: Path) -> None:
    """Where light exceeds white in every frame in use, and nowhere else; a frame that saw a pixel speaks for it."""
    wave = Wave(level=-0.3, speed_px_s=40.0, frames=2, module=wave_module(line_time_ns=0.0))
    picture = pictures(wave.write(tmp_path / "w.h5"), wave.module, [14_000_000])[0]
    over = wave.truth(14_000_000) - np.log(0.985)
    moved = 0.02  # of log light, while the frames were taken
    assert 0.1 < picture.saturated.mean() < 0.5
    assert picture.saturated[over > moved].all()
    assert not picture.saturated[over < -moved].any()
    assert rms(np.where(over > -moved, 0.0, picture.log_light - wave.truth(14_000_000))) < CLOSE
    moving = replace(wave, speed_px_s=1500.0)
    faster = pictures(moving.write(tmp_path / "m.h5"), wave.module, [14_000_000])[0]
    assert faster.saturated.mean() < 0.7 * picture.saturated.mean()


def test_threshold_maps_are_used(tmp_path: Path, middle_ns: int) -> None:
    """With thresholds a tenth of their value apart, the map makes pictures as good as equal thresholds do."""
    shape = wave_module().event_grid.shape
    gain = 1.0 + 0.1 * np.random.default_rng(3).standard_normal(shape)
    wave = Wave(gain=gain, frames=2)
    path = wave.write(tmp_path / "w.h5")
    nothing = np.zeros(shape)
    each = ContrastMap(THETA * gain, THETA * gain, nothing, nothing)
    instant = 14_000_000
    with_map = error(pictures(path, wave.module, [instant], each)[0], wave)
    assert with_map < CLOSE
    assert error(pictures(path, wave.module, [instant])[0], wave) > 1.3 * with_map
    unknown = replace(each, on_threshold=np.full(shape, np.nan), off_threshold=np.full(shape, np.nan))
    np.testing.assert_array_equal(
        pictures(path, wave.module, [instant], unknown)[0].log_light,
        pictures(path, wave.module, [instant])[0].log_light,
    )


def test_lateness_that_follows_light_is_taken_out(tmp_path: Path) -> None:
    """Events late by 0.2 ms at white, inversely with light: better with the module's latency than without, and better
    by light than as one number."""
    wave = Wave(lag_ns=200_000.0, speed_px_s=1500.0, amplitude=0.9, frames=2)
    path = wave.write(tmp_path / "w.h5")
    reference_dn = np.exp(wave.level) * 65535.0
    latency = 25_000.0 + 200_000.0 / np.exp(wave.level)

    def with_latency(event_latency_ns: float | None, reference: float | None) -> float:
        timing = wave.module.timing
        assert timing is not None
        update = {"event_latency_ns": event_latency_ns, "reference_light_dn": reference}
        module = wave.module.model_copy(update={"timing": timing.model_copy(update=update)})
        return error(pictures(path, module, [14_000_000])[0], wave)

    by_light, single, without = (
        with_latency(latency, reference_dn),
        with_latency(latency, None),
        with_latency(None, None),
    )
    assert by_light < 0.8 * single < 0.8 * without


def test_refusals(tmp_path: Path, path: Path, wave: Wave, events: Events) -> None:
    """Each names the thing, what is required and what was given."""
    module = wave.module
    with pytest.raises(NotCalibratedError, match="calibrated map, and 'colour_from_event' is null"):
        pictures(path, module.model_copy(update={"colour_from_event": None}), [14_000_000])
    with pytest.raises(NotCalibratedError, match="both contrast thresholds"):
        pictures(path, module.model_copy(update={"contrast": Contrast(on_threshold=0.2)}), [14_000_000])
    with pytest.raises(NotCalibratedError, match="frame offset is required"):
        pictures(path, module.model_copy(update={"timing": None}), [14_000_000])
    with pytest.raises(OptionError, match=r"an instant between .* is required, got 9\.000000 s"):
        pictures(path, module, [9_000_000_000])
    with pytest.raises(OptionError, match="must not run backwards"):
        pictures(path, module, [14_000_000, 13_000_000])
    with pytest.raises(ModuleMismatchError, match="frames must be 120x80 px"):
        pictures(path, wave_module(binning=4), [14_000_000])
    with pytest.raises(ModuleMismatchError, match="events must lie on the 60x40 grid"):
        pictures(path, wave_module(pitch=8), [14_000_000])
    with pytest.raises(ModuleMismatchError, match=r"threshold map of shape \(80, 120\)"):
        pictures(path, module, [14_000_000], ContrastMap(*(np.ones((3, 4)),) * 4))
    with pytest.raises(DegenerateDataError, match="events are required"):
        pictures(wave.write(tmp_path / "silent.h5", Events.empty()), module, [14_000_000])
    with pytest.raises(OptionError, match="must be positive, got 0"):
        PictureOptions(ramp_ns=0)
