"""The tracking study: one path at rising speed, followed by every mode, the frozen baseline and the oracle.

A seed survives when it keeps its id, is never lost, and lies within 5 colour px of truth at every 10 ms instant; the
denominator is the seeds that truth says stay visible. Errors are taken at frame instants of seeds within that gate.
"""

import time
from collections.abc import Callable
from dataclasses import dataclass, field
from pathlib import Path
from tempfile import TemporaryDirectory
from typing import Any

import numpy as np

from hybridtrack.benchmark.baseline import track_baseline
from hybridtrack.benchmark.live_replay import LiveReplay, replay_live
from hybridtrack.benchmark.metrics import SURVIVES_WITHIN_PX, Interval, bootstrap, seed_survives
from hybridtrack.benchmark.study import Check, Study
from hybridtrack.benchmark.tracking_truth import Ride, make_ride, track_oracle
from hybridtrack.errors import OptionError
from hybridtrack.recording import Recording
from hybridtrack.recording.truth import read_truth
from hybridtrack.synthesis.generate import generate
from hybridtrack.synthesis.greenhouse import GreenhouseRecipe
from hybridtrack.synthesis.recipe import load_recipe
from hybridtrack.tracking import TrackerOptions, Tracks, track_recording
from hybridtrack.tracking.light_levels import frame_clock

Array = np.ndarray
Progress = Callable[[str, float], None]

MODES = ("hybrid", "frames", "events")
ALL = (*MODES, "baseline", "oracle")
ELLIPSE = 5.991  # chi-square with two degrees of freedom, 95 %
COLUMNS = (
    "peak px/s", "median px/s", "mode", "seeds", "survival", "95 % interval", "median px", "95 % px", "in ellipse",
    "samples a second", "processor s a s",
)  # fmt: skip


@dataclass(frozen=True, eq=False)
class Followed:
    """One way of following one ride: for every seed that stays visible whether it `survived` (S,); at its frame
    instants `error_px` (S, F), NaN where it is not followed within the gate; one `nees` a track, where stated; lines a
    second and feature; processor seconds a second of recording."""

    survived: Array
    error_px: Array
    nees: Array
    rate_hz: float
    cost: float


@dataclass(frozen=True, eq=False)
class SpeedResult:
    """All ways of following at one peak speed, joined over seeds."""

    peak_px_s: float
    speed_px_s: float
    followed: dict[str, Followed]

    def survival(self, mode: str) -> Interval:
        """Share that survived, with its bootstrap interval."""
        return bootstrap(self.followed[mode].survived.astype(float))


@dataclass(frozen=True)
class TrackingStudy:
    """The printed `study`, the `results` by speed for figures, and what they were measured with."""

    study: Study
    results: tuple[SpeedResult, ...]
    circumstances: str
    breakdown_px_s: float | None = field(default=None)


def frame_instants(ride: Ride) -> Array:
    """Middles of exposure (F, S) ns of every seed's own row in each frame after the first, by its true place."""
    mode = ride.module.frame_mode
    with Recording.open(ride.recording) as opened:
        starts, exposures = opened.frames.t_start_ns[1:], opened.frames.exposure_ns[1:]
    ids, out = ride.paths.ids, []
    for start, exposure in zip(starts, exposures, strict=True):
        clock = frame_clock(ride.module, int(start), int(exposure))
        t = np.full(len(ids), int(np.mean(clock.span_ns)))
        for _ in range(3):
            row = np.nan_to_num(mode.frame_from_colour(ride.true_uv(ids, t))[:, 1])
            t = clock.middle_ns(np.clip(row, 0, mode.height - 1))
        out.append(t)
    return np.array(out)


def score_tracks(ride: Ride, tracks: Tracks, instants: Array, cost: float) -> Followed:
    """Score lines of any mode."""
    stay = np.flatnonzero(ride.paths.visible.all(axis=0))
    lost = tracks.with_state("lost") | tracks.with_state("out_of_view")
    survived, errors, nees = np.zeros(len(stay), bool), np.full((len(stay), len(instants)), np.nan), []
    for k, seed in enumerate(stay):
        own = np.flatnonzero(tracks.id == seed)
        if not len(own):
            continue
        t, uv, gone = tracks.t_ns[own], tracks.uv[own], lost[own]
        survived[k] = seed_survives(t, uv, gone, ride.paths.t_ns, ride.paths.uv[:, seed])
        end = t[np.argmax(gone)] if gone.any() else t[-1] + 1
        at = instants[:, seed]
        inside = (at >= t[0]) & (at <= min(end, t[-1]))
        here = np.stack([np.interp(at - t[0], t - t[0], uv[:, axis]) for axis in (0, 1)], axis=1)
        error = np.linalg.norm(here - ride.true_uv(np.full(len(at), seed), at), axis=1)
        # What left the gate is a loss: it counts in survival, not in accuracy.
        left = np.flatnonzero(inside & ~(error <= SURVIVES_WITHIN_PX))
        inside &= np.arange(len(at)) < (left[0] if len(left) else len(at))
        errors[k, inside] = error[inside]
        if survived[k]:
            nees.append(_one_nees(ride, tracks, own, at))
    seconds = 1e-9 * float(ride.paths.t_ns[-1] - ride.paths.t_ns[0])
    rate = len(tracks) / max(len(np.unique(tracks.id)), 1) / seconds
    return Followed(survived, errors, np.array(nees), rate, cost / seconds)


def _one_nees(ride: Ride, tracks: Tracks, own: Array, at: Array) -> float:
    """NEES of the line nearest to one frame instant past the middle of the ride."""
    row = own[int(np.argmin(np.abs(tracks.t_ns[own] - at[(2 * len(at)) // 3])))]
    truth = ride.true_uv(tracks.id[row : row + 1], tracks.t_ns[row : row + 1])[0]
    uu, uv, vv = tracks.cov[row].astype(float)
    error = tracks.uv[row] - truth
    return float(error @ np.linalg.solve(np.array([[uu, uv], [uv, vv]]), error))


def oracle_tracks(ride: Ride) -> Tracks:
    """The oracle's path as tracks, up to where it loses each seed; no covariance is stated."""
    times, uv = track_oracle(ride)
    known = np.isfinite(uv).all(axis=2)
    k, seed = np.nonzero(known)
    count = len(k)
    flag = np.zeros(count, np.uint8)
    cov = np.tile(np.array([np.nan, 0.0, np.nan], np.float32), (count, 1))
    return Tracks(seed, times[k].astype(np.int64), uv[known], cov, flag, flag, flag)


def follow_ride(ride: Ride, modes: tuple[str, ...], progress: Progress) -> dict[str, Followed]:
    """Follow the common seeds in every mode."""
    instants, found = frame_instants(ride), {}
    with Recording.open(ride.recording) as opened:
        for mode in modes:
            progress(f"{mode}", 0.0)
            began = time.process_time()
            if mode == "oracle":
                tracks = oracle_tracks(ride)
            elif mode == "baseline":
                tracks = track_baseline(opened, ride.module, ride.points)
            else:
                options = TrackerOptions(mode=mode, detect=False)  # type: ignore[arg-type]
                tracks = track_recording(opened, ride.module, options, ride.points)
            found[mode] = score_tracks(ride, tracks, instants, time.process_time() - began)
    return found


def live_checks(speed_px_s: float, live: LiveReplay) -> list[Check]:
    """Whether the hybrid tracker keeps up with a recording that comes live, and how late its updates are."""
    at = f"at {speed_px_s:.0f} px/s and {1e-6 * live.events_hz:.1f} million events a second"
    return [
        Check(f"real-time factor {at}", live.realtime_factor, 1.0, at_least=True),
        Check(f"lateness of updates {at}, 95th percentile", live.late_ms, 5.0, "ms"),
    ]


def joined(parts: list[dict[str, Followed]]) -> dict[str, Followed]:
    """Join rides of one speed."""
    out = {}
    for mode in parts[0]:
        each = [part[mode] for part in parts]
        width = max(f.error_px.shape[1] for f in each)
        errors = [np.pad(f.error_px, ((0, 0), (0, width - f.error_px.shape[1])), constant_values=np.nan) for f in each]
        out[mode] = Followed(
            np.concatenate([f.survived for f in each]), np.concatenate(errors), np.concatenate([f.nees for f in each]),
            float(np.mean([f.rate_hz for f in each])), float(np.mean([f.cost for f in each])),
        )  # fmt: skip
    return out


def breakdown_speed(results: list[SpeedResult]) -> float | None:
    """Median image speed at which the baseline's survival falls under one half, between the speeds that were run."""
    before: tuple[float, float] | None = None
    for result in results:
        share = float(np.mean(result.followed["baseline"].survived))
        if share < 0.5:
            if before is None:
                return result.speed_px_s
            speed, above = before
            return speed + (above - 0.5) / max(above - share, 1e-9) * (result.speed_px_s - speed)
        before = result.speed_px_s, share
    return None


def paired_ratio(result: SpeedResult, mode: str, other: str) -> float:
    """Median error of one mode over another's, both taken where both are followed."""
    a, b = result.followed[mode].error_px, result.followed[other].error_px
    both = np.isfinite(a) & np.isfinite(b)
    return float(np.median(a[both]) / np.median(b[both])) if np.count_nonzero(both) > 20 else float("nan")


def _rows(result: SpeedResult) -> list[tuple[str, ...]]:
    rows: list[tuple[str, ...]] = []
    for mode, followed in result.followed.items():
        interval, known = result.survival(mode), followed.error_px[np.isfinite(followed.error_px)]
        nees = followed.nees[np.isfinite(followed.nees)]
        rows.append((
            f"{result.peak_px_s:.0f}", f"{result.speed_px_s:.0f}", mode, str(len(followed.survived)),
            f"{100 * interval.value:.1f} %", f"{100 * interval.low:.0f} to {100 * interval.high:.0f}",
            f"{np.median(known):.3f}" if len(known) else "", f"{np.percentile(known, 95):.2f}" if len(known) else "",
            f"{100 * np.mean(nees <= ELLIPSE):.0f} %" if len(nees) > 20 and mode != "baseline" else "",
            f"{followed.rate_hz:.0f}", f"{followed.cost:.1f}" if mode not in ("oracle",) else "",
        ))  # fmt: skip
    return rows


def _checks(results: list[SpeedResult], breakdown: float | None) -> list[Check]:
    checks = []
    for result in results:
        at = f"at {result.speed_px_s:.0f} px/s"
        hybrid = float(np.mean(result.followed["hybrid"].survived))
        for other in ("baseline", "frames"):
            if other in result.followed:
                against = float(np.mean(result.followed[other].survived))
                gain = 100 * (hybrid - against)
                checks.append(Check(f"survival {at}, hybrid less {other}", gain, -1.0, "points", at_least=True))
                ratio = paired_ratio(result, "hybrid", other)
                if np.isfinite(ratio):
                    checks.append(Check(f"paired median error {at}, hybrid over {other}", ratio, 1.05))
        nees = result.followed["hybrid"].nees
        if len(nees) > 20:
            inside = 100 * float(np.mean(nees <= ELLIPSE))
            checks.append(Check(f"inside the 95 % ellipse {at}", inside, 88.0, "%", at_least=True))
            checks.append(Check(f"inside the 95 % ellipse {at}", inside, 98.0, "%"))
    if breakdown is not None:
        checks += _fast_checks(results, breakdown)
    return checks


def _fast_checks(results: list[SpeedResult], breakdown: float) -> list[Check]:
    """What is asked at multiples of the breakdown speed, at the run speed nearest from above."""
    checks = []
    for times, least in ((4.0, 90.0), (8.0, 50.0)):
        near = [r for r in results if 0.9 * times * breakdown <= r.speed_px_s <= 1.3 * times * breakdown]
        if near:
            share = 100 * float(np.mean(near[0].followed["hybrid"].survived))
            checks.append(Check(f"survival at {times:g} times the breakdown speed", share, least, "%", at_least=True))
    for times, most in ((1.0, 1.5), (4.0, 2.0)):
        near = [r for r in results if 0.7 * times * breakdown <= r.speed_px_s <= 1.3 * times * breakdown]
        if near and "oracle" in near[0].followed:
            ratio = paired_ratio(near[0], "hybrid", "oracle")
            checks.append(Check(f"median error over the oracle's at {times:g} times the breakdown speed", ratio, most))
    return checks


def _circumstances(recipe: GreenhouseRecipe) -> str:
    pixels, frames = recipe.pixels, recipe.frames
    bandwidth_hz = 1e9 / (2 * np.pi * pixels.tau_ns)
    return (
        f"{frames.rate_hz:g} frames a second, {frames.exposure_ms:g} ms exposure; photoreceptor bandwidth "
        f"{bandwidth_hz:.0f} Hz at {pixels.reference_light_dn:g} DN, proportional to light; true module, "
        f"{recipe.duration_s:g} s of reversing motion over {recipe.name}"
    )


def run_tracking_study(
    speeds_px_s: list[float], seeds: list[int], sequences: Path, oracle: bool, progress: Progress, **changes: Any
) -> TrackingStudy:
    """Run the study. `sequences` holds `greenhouse_reversing.toml`; `changes` replace parts of that recipe.

    The tracker is given the true module, so that what is measured is the tracker. Raises OptionError.
    """
    recipe = load_recipe(sequences / "greenhouse_reversing.toml")
    if not isinstance(recipe, GreenhouseRecipe):
        raise OptionError(f"{sequences}: greenhouse_reversing.toml must be a greenhouse recipe")
    recipe = recipe.model_copy(update=changes)
    modes = ALL if oracle else ALL[:-1]
    results, live = [], []
    for speed in sorted(speeds_px_s):
        parts, medians = [], []
        for seed in seeds:
            with TemporaryDirectory(prefix="hybridtrack-") as folder:

                def show(stage: str, part: float, speed: float = speed, seed: int = seed) -> None:
                    progress(f"{speed:.0f} px/s, seed {seed}: {stage}", part)

                path = Path(folder) / "ride.h5"
                motion = recipe.motion.model_copy(update={"peak_px_s": speed})
                own = recipe.model_copy(update={"motion": motion})
                generate(own, path, seed, lambda stage, part: show("synthesis", part))
                ride = make_ride(own, seed, path)
                truth = read_truth(path).module
                assert truth is not None
                parts.append(follow_ride(ride, modes, show))
                medians.append(ride.speed_px_s)
                if seed == seeds[0]:
                    with Recording.open(path) as opened:
                        replay = replay_live(opened, truth, TrackerOptions(detect=False), ride.points)
                    live += live_checks(ride.speed_px_s, replay)
        results.append(SpeedResult(speed, float(np.mean(medians)), joined(parts)))
    breakdown = breakdown_speed(results)
    return TrackingStudy(
        Study(
            title=f"Tracking over {len(seeds)} scenes at {len(results)} speeds",
            columns=COLUMNS,
            rows=tuple(row for result in results for row in _rows(result)),
            checks=(*_checks(results, breakdown), *live),
            notes=(
                _circumstances(recipe),
                "breakdown speed of the baseline: "
                + ("not reached" if breakdown is None else f"{breakdown:.0f} px/s (median of the seeds)"),
                "Synthetic recordings: the gap between pixel models and silicon is untested.",
            ),
        ),
        tuple(results),
        _circumstances(recipe),
        breakdown,
    )
