"""The event-to-colour map by direct alignment of every event pixel that sees the board.

Board poses, lens, levels and blur come from the frames; they predict each event pixel's log step of light through its
own one-pixel aperture, wherever the map puts it. Gauss-Newton moves the map, together with the curve of counts
against steps (see `event_map_normal`), until predicted and measured counts agree. In log light an edge's
half-amplitude point lies on its dark side; since the light model knows that, no bias comes of it. The aliased event
picture is never interpolated.

Covariance: from the normal equations, plus what the deviations of poses and lens do to the map, all scaled by how much
more the views disagree than these explain. The die's lattice is then tested, and kept where it holds.
"""

from dataclasses import dataclass, replace

import numpy as np

from hybridtrack.calibration.apertures import frame_aperture
from hybridtrack.calibration.board_view import place_frame_pixels
from hybridtrack.calibration.count_curve import CountNoise, fit_noise, straight_curve
from hybridtrack.calibration.event_map_covariance import map_covariance, nuisance_covariance
from hybridtrack.calibration.event_map_normal import (
    MAP_TERMS,
    MapBasis,
    MapModel,
    MapNormal,
    accumulate,
    left_over,
    map_basis,
)
from hybridtrack.calibration.event_map_start import MapStart, event_positions, find_map_start, lattice_matrix
from hybridtrack.calibration.event_prediction import (
    PixelPlaces,
    PixelSteps,
    choose_pixels,
    picture_motion,
    predict_steps,
)
from hybridtrack.calibration.lattice_test import LatticeVerdict, judge_lattice
from hybridtrack.calibration.parallax import distances_m, judge_parallax
from hybridtrack.calibration.view_data import MAP_PARAMETERS, BoardCorners, EventMapFit, LensFit, ViewImages
from hybridtrack.calibration.view_light import ViewLight, fit_view_light
from hybridtrack.errors import BoardNotFoundError, DegenerateDataError
from hybridtrack.module import ColourFromEvent, HybridModule, LatticeTest, Target
from hybridtrack.threads import each

Array = np.ndarray

_STEPS = 25
_PLACED_AT = (0, 3)
_CLOSE_PX = 2e-4
_CLOSE_TO_SITE_PX = 0.01
_LEAST_PIXELS = 300
_ODD_GAIN = 6.0  # deviations of the gains' spread beyond which a pixel is left out
_PATCHES = (16, 10)
# Views may scatter less than their noise was taken for; below this a few views agree by chance.
LEAST_FACTOR = 0.5


@dataclass(frozen=True)
class _Views:
    """What stays fixed: views in the lens fit's order, their light, and the lens fit."""

    images: list[ViewImages]
    lights: list[ViewLight]
    poses: Array
    lens_fit: LensFit
    order: Array
    target: Target


@dataclass(frozen=True)
class _State:
    """What moves: event positions as matrix (2, 3) plus radial term, blur factor, count model, pixels in use."""

    matrix: Array
    radial: float
    log_blur: float
    model: MapModel
    usable: Array


def _measured_views(views: list[ViewImages], lens_fit: LensFit, target: Target, nominal: HybridModule) -> _Views:
    """Fit the light of every view that has a pose."""
    mode, aperture = nominal.frame_mode, frame_aperture(nominal.frame_mode, nominal.cluster)
    by_number = {view.index: view for view in views}
    numbers = lens_fit.views.tolist()

    def light_of(n: int) -> ViewLight | None:
        place = place_frame_pixels(lens_fit.lens, lens_fit.camera_from_board[n], target, mode)
        return fit_view_light(by_number[numbers[n]], place, aperture, target) if numbers[n] in by_number else None

    found = [(n, light) for n, light in enumerate(each(light_of, range(len(numbers)))) if light is not None]
    if len(found) < 2:
        raise BoardNotFoundError(
            f"event map: expected at least 2 views with the board well in the frame, got {len(found)}"
        )
    order = np.array([n for n, _ in found])
    images, lights = [by_number[numbers[n]] for n in order], [light for _, light in found]
    return _Views(images, lights, lens_fit.camera_from_board[order], lens_fit, order, target)


def _positions(state: _State, nominal: HybridModule, centre: Array) -> Array:
    uv = event_positions(nominal, state.matrix)
    offset = uv - centre
    r2 = np.sum((offset / nominal.colour_array.half_diagonal_px) ** 2, axis=-1, keepdims=True)
    return uv + state.radial * r2 * offset


def _choose(views: _Views, state: _State, positions: Array) -> list[PixelPlaces]:
    """Pixels that take part, placed from `positions`."""

    def of_view(v: int) -> PixelPlaces:
        places = choose_pixels(
            views.images[v], views.lights[v], views.lens_fit, views.poses[v], views.target, positions
        )
        return places.only(state.usable[places.pixel])

    return each(of_view, range(len(views.images)))


def _predict(chosen: list[PixelPlaces], state: _State, moved: Array, target: Target) -> list[PixelSteps]:
    """Steps with the pixels moved by `moved` (He * We, 2) from where they were placed."""
    factor = float(np.exp(state.log_blur))
    return each(lambda places: predict_steps(places, target, moved[places.pixel], factor), chosen)


def _signed(views: _Views, sign: float) -> _Views:
    """The views with the blink's other half called bright: the convention of a counterphase board's phase."""
    if sign > 0:
        return views
    return replace(views, images=[replace(view, amplitude=-view.amplitude) for view in views.images])


def _blink_sign(all_steps: list[PixelSteps]) -> float:
    return 1.0 if sum(float(np.sum(s.step * s.count)) for s in all_steps) >= 0 else -1.0


def affine_of(coefficients: Array, nominal: HybridModule) -> Array:
    """Matrix (2, 3) of the affine displacement with coefficients (6,) of `MapBasis`."""
    width, height = nominal.event_grid.width, nominal.event_grid.height
    rows = np.asarray(coefficients, float).reshape(2, 3)
    by_x, by_y = rows[:, 1] / (width / 2.0), rows[:, 2] / (height / 2.0)
    at_origin = rows[:, 0] - by_x * (width - 1) / 2.0 - by_y * (height - 1) / 2.0
    return np.stack([by_x, by_y, at_origin], axis=1)


def coefficient_jacobian(nominal: HybridModule) -> Array:
    """d (a, b, c, d, e, f, radial) / d coefficients, (7, 7)."""
    out = np.zeros((MAP_TERMS, MAP_TERMS))
    for k in range(6):
        out[:6, k] = affine_of(np.eye(6)[k], nominal).ravel()
    out[6, 6] = 1.0
    return out


def _first_model(all_steps: list[PixelSteps], pixels: int) -> MapModel:
    steps, counts = (np.concatenate([getattr(s, name) for s in all_steps]) for name in ("step", "count"))
    curve = straight_curve(steps, counts)
    spread = float(np.median(np.abs(counts - curve.value(steps)))) * 1.48 + 1e-3
    return MapModel(curve, np.zeros(len(all_steps)), CountNoise(spread**2, 0.0, 0.0), 0.05**2,
                    np.ones(pixels))  # fmt: skip


def _stepped_model(model: MapModel, normal: MapNormal, step: Array, seen: Array) -> MapModel:
    """The count model after a Gauss-Newton step, its gains and their spread brought up to date."""
    size = len(model.curve.knots)
    heights = model.curve.heights + step[MAP_TERMS + 1 : MAP_TERMS + 1 + size]
    heights = np.maximum.accumulate(np.maximum(heights, 0.0))
    log_scale = model.log_scale + np.clip(step[MAP_TERMS + 1 + size :], -0.3, 0.3)
    excess = np.clip(normal.gain_excess, -0.5, 0.5)
    # Expectation step (Dempster et al. 1977); the median keeps odd pixels from widening it.
    square = excess[seen] ** 2
    spread = float(np.median(square) / 0.455 + np.median(normal.gain_variance[seen]))
    gain_variance = float(np.clip(spread, 1e-5, 0.3**2))
    return replace(model, curve=replace(model.curve, heights=heights), log_scale=log_scale, gain=1.0 + excess,
                   gain_variance=gain_variance)  # fmt: skip


def _stepped(
    state: _State, normal: MapNormal, step: Array, all_steps: list[PixelSteps], nominal: HybridModule, with_odd: bool
) -> _State:
    """The state after a Gauss-Newton step; `with_odd` also drops pixels whose gain is odd."""
    seen = np.zeros(len(state.usable), bool)
    for steps in all_steps:
        seen[steps.pixel] = True
    model, usable = _stepped_model(state.model, normal, step, seen), state.usable
    if with_odd:
        usable = usable & (np.abs(model.gain - 1.0) < _ODD_GAIN * np.sqrt(model.gain_variance))
    return replace(
        state, matrix=state.matrix + affine_of(step[:6], nominal), radial=state.radial + float(step[6]), model=model,
        usable=usable, log_blur=float(np.clip(state.log_blur + step[MAP_TERMS], -0.7, 0.7)),
    )  # fmt: skip


def _noise_of(all_steps: list[PixelSteps], model: MapModel, basis: MapBasis) -> CountNoise:
    parts = [left_over(steps, v, model, basis) for v, steps in enumerate(all_steps)]
    residual, predicted, slope = (np.concatenate(each) for each in zip(*parts, strict=True))
    return fit_noise(residual, predicted, slope)


@dataclass(frozen=True)
class _Aligned:
    """The state at the end, the pixels and steps there, and the normal equations about it."""

    state: _State
    steps: list[PixelSteps]
    basis: MapBasis
    normal: MapNormal


def _align(views: _Views, state: _State, nominal: HybridModule, centre: Array, close_px: float = _CLOSE_PX) -> _Aligned:
    """Gauss-Newton until a step moves the map by less than `close_px`.

    Pixels are placed anew after a few steps, then only moved.
    """
    target = views.target
    for iteration in range(_STEPS):
        positions = _positions(state, nominal, centre)
        if iteration in _PLACED_AT:
            placed, basis = positions, map_basis(nominal, positions, centre)
            chosen = _choose(views, state, positions)
        all_steps = _predict(chosen, state, (positions - placed).reshape(-1, 2), target)
        if iteration > 0:
            state = replace(state, model=replace(state.model, noise=_noise_of(all_steps, state.model, basis)))
        normal = accumulate(all_steps, state.model, basis, state.log_blur)
        step = np.linalg.solve(normal.matrix, normal.right)
        step[:6] = np.clip(step[:6], -1.5, 1.5)
        step[6] = step[6] if iteration >= 2 else 0.0
        state = _stepped(state, normal, step, all_steps, nominal, with_odd=iteration > 3)
        if iteration > max(_PLACED_AT) and float(np.abs(step[:MAP_TERMS]).max()) < close_px:
            break
    chosen = [places.only(state.usable[places.pixel]) for places in chosen]
    moved = (_positions(state, nominal, centre) - placed).reshape(-1, 2)
    all_steps = _predict(chosen, state, moved, target)
    motions = [picture_motion(places, views.lens_fit, pose) for places, pose in zip(chosen, views.poses, strict=True)]
    return _Aligned(state, all_steps, basis, accumulate(all_steps, state.model, basis, state.log_blur, motions))


def _patches(all_steps: list[PixelSteps], state: _State, basis: MapBasis, nominal: HybridModule) -> tuple[Array, Array]:
    """Displacement (M, 2) px that each patch of the event grid still asks for, at its middle (M, 2) in event px."""
    grid = nominal.event_grid
    normal, right = np.zeros((_PATCHES[0] * _PATCHES[1], 2, 2)), np.zeros((_PATCHES[0] * _PATCHES[1], 2))
    for v, steps in enumerate(all_steps):
        residual, predicted, slope_px = left_over(steps, v, state.model, basis)
        weight = 1.0 / state.model.noise.variance(predicted, slope_px)
        slope = np.exp(state.model.log_scale[v]) * state.model.gain[steps.pixel] * state.model.curve.slope(steps.step)
        J = steps.d_uv * slope[:, None]
        patch = (steps.pixel // grid.width) * _PATCHES[1] // grid.height * _PATCHES[0]
        patch = patch + (steps.pixel % grid.width) * _PATCHES[0] // grid.width
        np.add.at(normal, patch, weight[:, None, None] * J[:, :, None] * J[:, None, :])
        np.add.at(right, patch, (weight * residual)[:, None] * J)
    solid = np.linalg.eigvalsh(normal)[:, 0] > 25.0  # deviation under 0.2 px each way
    index = np.flatnonzero(solid)
    middle = np.stack([(index % _PATCHES[0] + 0.5) * grid.width / _PATCHES[0] - 0.5,
                       (index // _PATCHES[0] + 0.5) * grid.height / _PATCHES[1] - 0.5], axis=1)  # fmt: skip
    return middle, np.linalg.solve(normal[solid], right[solid][..., None])[..., 0]


def _at_middle(deviation: Array, nominal: HybridModule) -> Array:
    """Offset (2,) px at the middle of the event grid of a map (2, 3) less the lattice."""
    middle = np.array([(nominal.event_grid.width - 1) / 2.0, (nominal.event_grid.height - 1) / 2.0, 1.0])
    return np.asarray(deviation @ middle)


def _clear_site(at_centre: Array, nominal: HybridModule) -> tuple[tuple[int, int], Array, list[str]]:
    """Clear site (column, row), centroid (2,), and findings, from the offset (2,) inside the cluster."""
    pitch, findings = np.array([nominal.cluster.width, nominal.cluster.height]), []
    site = np.clip(np.round(at_centre).astype(int), 0, pitch - 1)
    centroid = at_centre - site
    if np.any(np.abs(centroid) > 0.4):
        findings.append(
            f"event map: the optical centroid lies ({centroid[0]:+.2f}, {centroid[1]:+.2f}) px from the clear site "
            f"{site[0]}, {site[1]}, so that a neighbouring site is nearly as likely; the map itself "
            "does not depend on it"
        )
    return (int(site[0]), int(site[1])), centroid, findings


def _lattice_findings(verdict: LatticeVerdict, factor: float) -> list[str]:
    findings = []
    if verdict.linear:
        findings.append(
            f"event map: not the die's lattice (p {verdict.linear_p:.1g}); the affine map is reported as measured"
        )
    if verdict.radial:
        findings.append(f"event map: a radial term is needed (p {verdict.radial_p:.1g})")
    if factor > 4.0:
        findings.append(
            f"event map: views disagree {np.sqrt(factor):.1f} times more than their noise explains; deviations are "
            "enlarged by that; check that the board is flat and held still"
        )
    return findings


def _rows(matrix: Array) -> tuple[tuple[float, float, float], tuple[float, float, float]]:
    (a, b, c), (d, e, f) = matrix.tolist()
    return (a, b, c), (d, e, f)


def _result(
    state: _State, base: Array, verdict: LatticeVerdict, mirror: tuple[bool, bool], centre: Array, nominal: HybridModule
) -> tuple[ColourFromEvent, tuple[int, int], list[str]]:
    """The map with the terms that the verdict keeps, about the lattice `base` (2, 3)."""
    matrix = base + affine_of(verdict.coefficients[:6], nominal)
    if not verdict.linear:
        matrix[:, :2] = lattice_matrix(nominal, mirror, (0.0, 0.0))[:, :2]
    at_centre = _at_middle(matrix - lattice_matrix(nominal, mirror, (0.0, 0.0)), nominal)
    site, centroid, findings = _clear_site(at_centre, nominal)
    fitted = ColourFromEvent(
        matrix=_rows(matrix), centroid=(float(centroid[0]), float(centroid[1])),
        radial=float(verdict.coefficients[6]), centre=(float(centre[0]), float(centre[1])),
        lattice=LatticeTest(consistent=not verdict.linear, p_value=verdict.linear_p),
    )  # fmt: skip
    return fitted, site, findings


def _kept_parameters(verdict: LatticeVerdict) -> Array:
    """Which of MAP_PARAMETERS were estimated."""
    linear = verdict.linear
    return np.flatnonzero([linear, linear, True, linear, linear, True, verdict.radial])


def _centre(nominal: HybridModule) -> Array:
    return np.array([(nominal.colour_array.width - 1) / 2.0, (nominal.colour_array.height - 1) / 2.0])


def _start(measured: _Views, nominal: HybridModule) -> tuple[_State, float, MapStart]:
    """The state to align from, and the blink's sign. Raises DegenerateDataError."""
    start = find_map_start(measured.images, nominal)
    pixels = nominal.event_grid.width * nominal.event_grid.height
    matrix = lattice_matrix(nominal, start.mirror, start.offset)
    state = _State(matrix, 0.0, 0.0, None, np.ones(pixels, bool))  # type: ignore[arg-type]
    first = _choose(measured, state, _positions(state, nominal, _centre(nominal)))
    total = sum(len(places.pixel) for places in first)
    if total < _LEAST_PIXELS:
        raise DegenerateDataError(
            f"event map: expected at least {_LEAST_PIXELS} event pixels on the board, got {total}"
        )
    all_steps = _predict(first, state, np.zeros((pixels, 2)), measured.target)
    sign = _blink_sign(all_steps)
    all_steps = [replace(steps, count=sign * steps.count) for steps in all_steps]
    return replace(state, model=_first_model(all_steps, pixels)), sign, start


def find_clear_site(
    views: list[ViewImages], lens_fit: LensFit, target: Target, nominal: HybridModule
) -> tuple[int, int]:
    """The clear site (column, row) alone, to a few hundredths of a pixel: aligned roughly, without deviations."""
    measured = _measured_views(views, lens_fit, target, nominal)
    state, sign, start = _start(measured, nominal)
    aligned = _align(_signed(measured, sign), state, nominal, _centre(nominal), _CLOSE_TO_SITE_PX)
    base = lattice_matrix(nominal, start.mirror, (0.0, 0.0))
    return _clear_site(_at_middle(aligned.state.matrix - base, nominal), nominal)[0]


def fit_event_map(
    views: list[ViewImages], boards: list[BoardCorners], lens_fit: LensFit, target: Target, nominal: HybridModule
) -> EventMapFit:
    """Find mirroring, clear site and map from all views in `lens_fit`.

    Of `nominal` only sizes, cluster pitch and frame mode are believed. `boards` are not needed beyond the poses that
    came of them. Raises DegenerateDataError where frames and events do not agree.
    """
    measured = _measured_views(views, lens_fit, target, nominal)
    state, sign, start = _start(measured, nominal)
    centre = _centre(nominal)
    aligned = _align(_signed(measured, sign), state, nominal, centre)
    state, normal = aligned.state, aligned.normal
    sure = map_covariance(normal, nuisance_covariance(lens_fit, measured.order))
    factor = max(sure.factor, LEAST_FACTOR)
    base = lattice_matrix(nominal, start.mirror, (0.0, 0.0))
    deviation = state.matrix - base
    middle = _at_middle(deviation, nominal)
    by_x = deviation[:, 0] * nominal.event_grid.width / 2.0
    by_y = deviation[:, 1] * nominal.event_grid.height / 2.0
    coefficients = np.array([middle[0], by_x[0], by_y[0], middle[1], by_x[1], by_y[1], state.radial])
    verdict = judge_lattice(coefficients, sure.covariance * factor, sure.degrees)
    fitted, site, findings = _result(state, base, verdict, start.mirror, centre, nominal)
    J, kept = coefficient_jacobian(nominal), _kept_parameters(verdict)
    middle_m = target.corners_m().reshape(-1, 3).mean(0)
    parallax = judge_parallax(sure.pulls, distances_m(measured.poses, middle_m))
    patch_xy, patch_px = _patches(aligned.steps, state, aligned.basis, nominal)
    return EventMapFit(
        colour_from_event=fitted, mirror_x=start.mirror[0], mirror_y=start.mirror[1], clear_site=site,
        parameters=tuple(MAP_PARAMETERS[k] for k in kept),
        covariance=(J @ verdict.covariance @ J.T)[np.ix_(kept, kept)],
        cross_covariance=(J @ sure.cross)[kept], residual_xy=patch_xy, residuals_px=patch_px,
        findings=findings + _lattice_findings(verdict, factor) + parallax.findings(), parallax=parallax,
    )  # fmt: skip
