"""Views found by themselves, sway, and refusals."""

import numpy as np
import pytest

from hybridtrack.calibration.blink import find_blink
from hybridtrack.calibration.views import find_views, fold_view, path_sway_px, stillest_part, translation_px
from hybridtrack.errors import BoardNotFoundError
from hybridtrack.recording import Recording, RecordingWriter

SHAPE = (80, 120)


def test_jumps_without_transit_separate_views(clean, clean_scene):
    """Every dwell is one view that lies within it, and most of it is used."""
    blink = find_blink(clean, SHAPE, clean_scene.target)
    views, findings = find_views(clean, blink, SHAPE)
    assert len(views) == len(clean_scene.poses)
    for k, view in enumerate(views):
        begin = clean_scene.start_ns + k * (clean_scene.view_s + clean_scene.gap_s) * 1e9
        # The scene keeps its pose through the gap that follows; frames stop, events go on.
        assert begin - 1e6 <= view.t0_ns < view.t1_ns <= begin + (clean_scene.view_s + clean_scene.gap_s) * 1e9 + 1e6
        assert view.t1_ns - view.t0_ns > 0.3e9
        assert view.sway_px < 0.2
    assert findings == []


def test_fold_separates_the_halves(clean, clean_scene):
    """Inside set A ON events fall into the bright half and OFF events into the dark one."""
    blink = find_blink(clean, SHAPE, clean_scene.target)
    views, _ = find_views(clean, blink, SHAPE)
    fold = fold_view(clean, views[0], blink, SHAPE)
    strong = fold.amplitude() > 2.0
    on_bright, off_bright, on_dark, off_dark = fold.planes[:, strong].sum(axis=1).astype(float)
    assert on_dark + off_bright < 0.01 * (on_bright + off_dark)
    assert fold.amplitude()[strong] == pytest.approx(0.5 * (fold.on_count() + fold.off_count())[strong], rel=0.05)


def test_shift_of_smooth_pictures():
    """The first-order shift of a smooth pattern is right to a tenth for a third of a pixel."""
    y, x = np.mgrid[0:60, 0:80]
    before = np.sin(x / 5.0) * np.cos(y / 6.0)
    after = np.sin((x - 0.3) / 5.0) * np.cos((y + 0.2) / 6.0)
    assert translation_px(before, after) == pytest.approx([0.3, -0.2], abs=0.03)


def test_stillest_part_of_a_swaying_path():
    """The part about a turning point is taken, not one in full motion."""
    t = np.linspace(0, 1, 41)
    path = np.column_stack([3.0 * np.sin(2 * np.pi * t), np.zeros_like(t)])
    first, last = stillest_part(path, 6, 0.5)
    assert path_sway_px(path[first:last]) <= 0.5
    middle = t[first:last].mean() * 4
    assert abs(middle - np.round(middle)) < 0.2
    assert round(middle) % 2 == 1


def test_blinking_that_never_holds_still_is_refused(folder, clean_scene):
    """Blinking pixels that change place every cycle are no board."""
    rng = np.random.default_rng(1)
    parts = []
    for k in range(120):
        x, y = rng.integers(0, 120, 900), rng.integers(0, 80, 900)
        for phase, on in ((0.0, 1), (0.5, 0)):
            t = (k + phase) / 61.0 * 1e9 + rng.uniform(0, 2e5, (3, 900))
            for repeat in t:
                parts.append(np.stack([repeat, x, y, np.full(900, on)], 1))
    events = np.concatenate(parts)
    events = events[np.argsort(events[:, 0])]
    path = folder / "restless.h5"
    with RecordingWriter(path) as writer:
        writer.append_events(
            events[:, 0].astype(np.int64),
            events[:, 1].astype(np.uint16),
            events[:, 2].astype(np.uint16),
            events[:, 3].astype(np.uint8),
        )
    with Recording.open(path) as recording:
        blink = find_blink(recording, SHAPE, clean_scene.target)
        with pytest.raises(
            BoardNotFoundError, match=r"blinks at 61\.\d+ Hz and holds still .* no pattern of them holds"
        ):
            find_views(recording, blink, SHAPE)
