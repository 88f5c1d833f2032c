"""Which distortion terms a set of views supports: chosen by error on views held out of the fit.

Each candidate is fitted to all views but a few; on those only the poses are fitted, and what remains is the
candidate's held-out error. Root mean square over the views that went in says nothing: it falls with every term added,
while the error in the picture's corners may explode.
"""

from dataclasses import dataclass

import numpy as np

from hybridtrack.calibration.bundle import Freedom, Scene, Solution, ViewPoints, adjust, adjust_poses, approach
from hybridtrack.calibration.lens_start import start_scene
from hybridtrack.errors import DegenerateDataError, HybridtrackError, OptionError

Array = np.ndarray

_CENTRED = ("fx", "fy", "cx", "cy")
# In order of preference where held-out errors tie.
MODELS: dict[str, tuple[str, tuple[str, ...]]] = {
    "k1": ("perspective", (*_CENTRED, "k1")),
    "k1k2": ("perspective", (*_CENTRED, "k1", "k2")),
    "k1k2p": ("perspective", (*_CENTRED, "k1", "k2", "p1", "p2")),
    "k1k2k3p": ("perspective", (*_CENTRED, "k1", "k2", "k3", "p1", "p2")),
    "fisheye2": ("fisheye", (*_CENTRED, "k1", "k2")),
    "fisheye4": ("fisheye", (*_CENTRED, "k1", "k2", "k3", "k4")),
}
_FOLDS = 6
_TIE = 1.0  # a simpler model is preferred if it is worse by less than this many deviations of the difference


@dataclass(frozen=True)
class Candidate:
    """One model fitted to all views, and its held-out squared error by view (V,), whitened; infinite if refused."""

    name: str
    solution: Solution
    held_out: Array


def first_scene(kind: str, views: list[ViewPoints], size: tuple[int, int]) -> Scene:
    """A scene of lens `kind` near its optimum with focal lengths, centre and k1 free, freed in this order."""
    scene = start_scene(kind, views, *size)
    for stage in (("fx", "fy"), ("fx", "fy", "k1"), (*_CENTRED, "k1")):
        mask = np.array([n in stage for n in scene.lens.names])
        scene = approach(scene, views, Freedom(mask))
    return scene


def fit_from(name: str, scene: Scene, views: list[ViewPoints], shape_sigma: Array) -> Solution:
    """Fit one model of MODELS from a scene of its kind."""
    free = np.array([n in MODELS[name][1] for n in scene.lens.names])
    return adjust(scene, views, Freedom(free, shape_sigma))


def fit_model(name: str, views: list[ViewPoints], size: tuple[int, int], shape_sigma: Array) -> Solution:
    """Fit one model of MODELS to `views` on an array of `size` (width, height).

    Raises OptionError for a name that is not in MODELS.
    """
    if name not in MODELS:
        raise OptionError(f"lens model: expected one of {', '.join(MODELS)}, got '{name}'")
    return fit_from(name, first_scene(MODELS[name][0], views, size), views, shape_sigma)


def _without(scene: Scene, left_out: Array) -> Scene:
    keep = np.setdiff1d(np.arange(len(scene.poses)), left_out)
    return Scene(scene.lens, scene.poses[keep], scene.shape)


def held_out_errors(solution: Solution, views: list[ViewPoints]) -> Array:
    """Mean squared whitened error (V,) of each view under a lens fitted without it."""
    count = len(views)
    errors = np.full(count, np.inf)
    folds = min(_FOLDS, count)
    for fold in range(folds):
        out = np.arange(fold, count, folds)
        kept = [views[v] for v in range(count) if v not in out]
        try:
            fitted = adjust(_without(solution.scene, out), kept, solution.freedom, 1e-6).scene
            trial = Scene(fitted.lens, solution.scene.poses[out], fitted.shape)
            tested = adjust_poses(trial, [views[v] for v in out])
        except (HybridtrackError, np.linalg.LinAlgError):
            continue
        for v, error, used in zip(out, tested.residuals, tested.used, strict=True):
            whitened = (views[v].whiten @ error[..., None])[..., 0]
            # Corners that are gross under the full fit must not decide; all others do, however far off.
            keep = solution.used[v]
            errors[v] = float(np.mean(np.sum(whitened[keep] ** 2, axis=-1))) if np.any(used) else np.inf
    return errors


def choose(candidates: list[Candidate]) -> Candidate:
    """The simplest candidate whose held-out error is not clearly worse than the best one's."""
    usable = [c for c in candidates if np.all(np.isfinite(c.held_out))]
    if not usable:
        raise DegenerateDataError("lens: expected a model that predicts views left out of its fit, got none that does")
    best = min(usable, key=lambda c: float(np.mean(c.held_out)))
    for candidate in sorted(usable, key=lambda c: len(MODELS[c.name][1])):
        excess = candidate.held_out - best.held_out
        # The few views' scatter is itself uncertain: a share of the best error is always worth a term.
        deviation = float(np.std(excess, ddof=1) / np.sqrt(len(excess))) if len(excess) > 1 else np.inf
        if float(np.mean(excess)) <= min(_TIE * deviation, 0.02 * float(np.mean(best.held_out))):
            return candidate
    return best


def fit_candidates(views: list[ViewPoints], size: tuple[int, int], shape_sigma: Array) -> list[Candidate]:
    """Fit every model of MODELS; those that fail or fold over inside the array get an infinite held-out error."""
    candidates = []
    for kind in ("perspective", "fisheye"):
        try:
            scene = first_scene(kind, views, size)
        except HybridtrackError:
            continue
        for name in (n for n, (k, _) in MODELS.items() if k == kind):
            try:
                solution = fit_from(name, scene, views, shape_sigma)
            except (HybridtrackError, np.linalg.LinAlgError):
                continue
            monotonic = solution.scene.lens.is_monotonic_over(*size)
            held_out = held_out_errors(solution, views) if monotonic else np.full(len(views), np.inf)
            candidates.append(Candidate(name, solution, held_out))
    return candidates
