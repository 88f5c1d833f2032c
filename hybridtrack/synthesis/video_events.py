"""Simulated events from a plain video, for those who have no hybrid module yet.

Between two pictures the video is followed along its optical flow (dense inverse search, Kroeger et al. 2016, OpenCV's
implementation), so that things move instead of fading over; each event pixel sees what passes one site of its
cluster. The frames are kept as they are and taken as instants: what the video's own exposure blurred stays blurred.
"""

from collections.abc import Iterator
from dataclasses import dataclass, field
from itertools import pairwise
from pathlib import Path
from typing import Any, Literal

import cv2
import numpy as np

from hybridtrack.errors import DegenerateDataError, FileFormatError, MissingFileError, OptionError
from hybridtrack.module import (
    Cluster,
    ColourArray,
    ColourFromEvent,
    Contrast,
    EventGrid,
    FrameMode,
    HybridModule,
    Timing,
)
from hybridtrack.recording import RecordingWriter
from hybridtrack.recording.frame_sources import frame_pictures, video_frame_rate
from hybridtrack.synthesis.event_pixels import EventPixels, PixelPhysics
from hybridtrack.synthesis.event_sink import EventSink
from hybridtrack.synthesis.frame_sensor import GAMMA
from hybridtrack.synthesis.greenhouse import Progress
from hybridtrack.synthesis.readout import RowScanReadout

Array = np.ndarray

INSTANT_NS = 1000  # stamped as the exposure of frames that are taken as instants
_MOST_STEPS = 64
_FEWEST_STEPS = 4
_BLOCK_FRAMES = 16
# A cut: the flow explains little of a large difference between two pictures.
_CUT_DN, _CUT_SHARE = 15.0, 0.75


@dataclass(frozen=True)
class VideoEventOptions:
    """`cluster`: pixels a side that share an event pixel, which sees the middle one (`pixel`) or all of them (`mean`).

    `rate_hz`: frames a second, where the file does not say or says it wrong. Thresholds in natural log units.
    `step_px`: longest motion between two samples of light.
    """

    cluster: int = 4
    aperture: Literal["pixel", "mean"] = "pixel"
    rate_hz: float | None = None
    threshold: float = 0.2
    threshold_spread: float = 0.008
    noise_width: float = 0.01
    refractory_ns: float = 100e3
    step_px: float = 0.5
    # A video is compressed and has 8 bits: below a few DN its logarithm is mostly noise, as under dark current.
    pixels: PixelPhysics = field(default_factory=lambda: PixelPhysics(tau_ns=100e3, dark_light_dn=2.0))

    def __post_init__(self) -> None:
        """Refuse what makes no grid or no events."""
        if self.cluster < 1:
            raise OptionError(f"cluster must be at least 1, got {self.cluster}")
        if self.rate_hz is not None and not 0 < self.rate_hz < np.inf:
            raise OptionError(f"rate_hz must be positive, got {self.rate_hz}")
        if not (self.threshold > 0 and self.step_px > 0):
            raise OptionError(f"threshold and step_px must be positive, got {self.threshold} and {self.step_px}")
        if self.aperture not in ("pixel", "mean"):
            raise OptionError(f"aperture must be 'pixel' or 'mean', got {self.aperture!r}")


def video_module(size: tuple[int, int], options: VideoEventOptions, name: str) -> HybridModule:
    """The module that would have recorded a video of `size` (width, height): global shutter, one clock, no lens."""
    side = options.cluster
    columns, rows = size[0] // side, size[1] // side
    if columns < 8 or rows < 8:
        left = f"{columns} x {rows}"
        raise OptionError(f"{name}: at least 8 x 8 event pixels are required, and clusters of {side} px leave {left}")
    width, height = columns * side, rows * side
    site = side // 2
    middle = 0.5 * (side - 1)
    offset = float(site) if options.aperture == "pixel" else middle
    spread = options.threshold_spread
    return HybridModule(
        name=f"simulated from {name}",
        colour_array=ColourArray(width=width, height=height),
        cluster=Cluster(width=side, height=side, clear_site=(site, site)),
        event_grid=EventGrid(width=columns, height=rows),
        frame_mode=FrameMode(width=width, height=height, shutter="global", response="gamma"),
        colour_from_event=ColourFromEvent(
            matrix=((float(side), 0.0, offset), (0.0, float(side), offset)), centroid=(offset - site, offset - site)
        ),
        timing=Timing(
            frame_offset_ns=0.0, frame_drift_ppm=0.0, drift_epoch_ns=0, line_time_ns=0.0, exposure_correction_ns=0.0
        ),
        contrast=Contrast(
            on_threshold=options.threshold,
            off_threshold=options.threshold,
            on_spread=spread,
            off_spread=spread,
            noise_width=options.noise_width,
            refractory_ns=options.refractory_ns,
        ),
        findings=["events are simulated from a video; frames are taken as instants"],
    )


@dataclass(frozen=True)
class Picture:
    """One picture of the video: grey, 8 bit (H, W), and its linear light, DN, averaged over the aperture."""

    grey: Array
    light: Array


def linear_picture(grey: Array, options: VideoEventOptions) -> Picture:
    """Take a gamma of 2.2 off (common practice) and average over the aperture."""
    light = (255.0 * (np.arange(256) / 255.0) ** GAMMA).astype(np.float32)[grey]
    if options.aperture == "mean" and options.cluster > 1:
        # Anchored at its upper left pixel, so that a whole cluster is read at a whole pixel, not between two boxes.
        light = cv2.blur(light, (options.cluster,) * 2, anchor=(0, 0), borderType=cv2.BORDER_REPLICATE)
    return Picture(grey, light)


def sample(picture: Array, places: Array) -> Array:
    """Bilinear values (rows, columns[, 2]) of a picture at `places` (rows, columns, 2), its border going on outside."""
    return cv2.remap(picture, places[..., 0], places[..., 1], cv2.INTER_LINEAR, borderMode=cv2.BORDER_REPLICATE)


class Passage:
    """The way from one picture to the next, as event pixels at `places` (rows, columns, 2) see it."""

    def __init__(self, before: Picture, after: Picture, places: Array, search: Any) -> None:
        self.before, self.after, self.places = before, after, places
        self.forward = search.calc(before.grey, after.grey, None)
        self.backward = search.calc(after.grey, before.grey, None)
        self.is_cut = self._is_cut()

    def _is_cut(self) -> bool:
        height, width = self.before.grey.shape
        grid = np.stack(np.meshgrid(np.arange(width), np.arange(height)), axis=-1).astype(np.float32)
        after = self.after.grey.astype(np.float32)
        change = float(np.abs(after - self.before.grey).mean())
        left_over = float(np.abs(sample(after, grid + self.forward) - self.before.grey).mean())
        return change > _CUT_DN and left_over > _CUT_SHARE * change

    def steps(self, step_px: float) -> int:
        """Into how many steps of at most `step_px` (for 99 of 100 places) the passage must be cut."""
        if self.is_cut:
            return _MOST_STEPS
        reach = np.linalg.norm(sample(self.forward, self.places), axis=-1)
        return int(np.clip(np.ceil(np.percentile(reach, 99) / step_px), _FEWEST_STEPS, _MOST_STEPS))

    def light(self, part: float) -> Array:
        """Linear light (rows, columns) at `part` of the way, 0..1: both pictures carried along the flow and mixed."""
        if self.is_cut:
            return sample((self.before if part < 0.5 else self.after).light, self.places)
        seen = []
        for picture, flow, way in ((self.before, self.forward, part), (self.after, self.backward, 1.0 - part)):
            # What is here now started where the flow that brought it here began: one step of that fixed point.
            start = self.places - np.float32(way) * sample(flow, self.places)
            start = self.places - np.float32(way) * sample(flow, start)
            seen.append(sample(picture.light, start))
        return (1.0 - part) * seen[0] + part * seen[1]


def cropped_pictures(source: Path, module_size: tuple[int, int]) -> Iterator[Array]:
    """Grey 8-bit pictures of the video, cropped to whole clusters."""
    width, height = module_size
    for image in frame_pictures(source, grey=True):
        grey = image if image.dtype == np.uint8 else (image >> 8).astype(np.uint8)
        if grey.shape[0] < height or grey.shape[1] < width:
            now = f"{grey.shape[1]} x {grey.shape[0]}"
            raise FileFormatError(f"{source}: pictures of one size are required, and they change to {now}")
        yield np.ascontiguousarray(grey[:height, :width])


def _source_rate_and_size(source: Path, options: VideoEventOptions) -> tuple[float, tuple[int, int], int]:
    """Frames a second, size (width, height) of the first picture, number of pictures by the file (0: unknown)."""
    if not source.exists():
        raise MissingFileError(f"{source}: expected a video, found no such file")
    first = next(frame_pictures(source, grey=True))
    count = 0
    if source.is_file():
        video = cv2.VideoCapture(str(source))
        count = max(int(video.get(cv2.CAP_PROP_FRAME_COUNT)), 0)
        video.release()
    return options.rate_hz or video_frame_rate(source), (first.shape[1], first.shape[0]), count


class _Frames:
    """Frames on their way into the recording, in blocks."""

    def __init__(self, writer: RecordingWriter, period_ns: float) -> None:
        self.writer, self.period_ns, self.count = writer, period_ns, 0
        self._held: list[Array] = []

    def stamp(self, number: int) -> int:
        """Time of a frame, ns."""
        return round(number * self.period_ns)

    def take(self, grey: Array) -> None:
        """Take the next frame."""
        self._held.append(grey)
        self.count += 1
        if len(self._held) == _BLOCK_FRAMES:
            self.finish()

    def finish(self) -> None:
        """Write what is held."""
        if self._held:
            numbers = np.arange(self.count - len(self._held), self.count)
            stamps = np.array([self.stamp(int(number)) for number in numbers], np.int64)
            exposures = np.full(len(numbers), INSTANT_NS, np.int64)
            self.writer.append_frames(np.stack(self._held), stamps, exposures, numbers.astype(np.uint64))
            self._held = []


def events_from_video(
    video_path: Path | str,
    out_path: Path | str,
    options: VideoEventOptions | None = None,
    seed: int = 0,
    progress: Progress | None = None,
) -> int:
    """Write a recording of a video's frames and of the events that event pixels would have seen; returns their number.

    The recording names its module, whose event map, clocks and thresholds are the true ones. Memory does not grow with
    the video's length. Raises MissingFileError, FileFormatError, OptionError; DegenerateDataError for a single picture.
    """
    source, options = Path(video_path), options or VideoEventOptions()
    rate_hz, size, expected = _source_rate_and_size(source, options)
    module = video_module(size, options, source.stem)
    pixels = EventPixels(module, options.pixels, seed)
    places = module.event_pixel_positions().astype(np.float32)
    if options.aperture == "mean":
        places -= np.float32(0.5 * (options.cluster - 1))  # the box is anchored at its upper left pixel
    search = cv2.DISOpticalFlow.create(cv2.DISOPTICAL_FLOW_PRESET_MEDIUM)
    settings = {"frame_rate_hz": rate_hz, "events": "simulated from a video", "synthetic": True}
    with RecordingWriter(out_path, module, settings) as writer:
        sink, frames = EventSink(writer, RowScanReadout(pixels.shape)), _Frames(writer, 1e9 / rate_hz)
        array = module.colour_array
        pictures = (linear_picture(grey, options) for grey in cropped_pictures(source, (array.width, array.height)))
        for before, after in pairwise(pictures):
            if frames.count == 0:
                frames.take(before.grey)
            t0, t1 = frames.stamp(frames.count - 1), frames.stamp(frames.count)
            passage = Passage(before, after, places, search)
            parts = np.linspace(0.0, 1.0, passage.steps(options.step_px) + 1)[(0 if frames.count == 1 else 1) :]
            light = np.stack([passage.light(float(part)) for part in parts])
            sink.take(pixels.expose(t0 + parts * (t1 - t0), light), t1)
            frames.take(after.grey)
            if progress is not None:
                progress("simulate events", min(frames.count / max(expected, frames.count), 1.0))
        if frames.count < 2:
            raise DegenerateDataError(f"{source}: at least 2 pictures are required, got a single one")
        sink.finish()
        frames.finish()
    return sink.count
