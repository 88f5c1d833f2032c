"""Whether a calibrated module knew how wrong it was: NEES of its blocks under its stated covariance.

Blocks: the event map as displacement over a 5x4 field; the lens as displacement over the same field with orientation
removed; the clocks; the thresholds. Fields have more numbers than the blocks have parameters: errors are judged in the
subspace that the covariance spans, whose rank is the degrees of freedom.
"""

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
from scipy.stats import chi2

from hybridtrack.benchmark.metrics import lens_displacement, map_displacement
from hybridtrack.module import HybridModule

Array = np.ndarray
Displaced = Callable[[Array], Array]  # a field (numbers,) as a function of a change of parameters (P,)

BLOCKS = ("map", "lens", "clocks", "thresholds")
_KEPT = 1e-7  # smallest eigenvalue kept, of the largest


@dataclass(frozen=True)
class BlockNees:
    """Normalised estimation error squared `value` of a block with `freedom` degrees of freedom."""

    value: float
    freedom: int

    @property
    def inside(self) -> bool:
        """Whether the error lies inside the 95 % region."""
        return self.value <= float(chi2.ppf(0.95, self.freedom))


def nees_in_span(error: Array, covariance: Array) -> BlockNees:
    """NEES of `error` (d,) in the span of a covariance (d, d) that may be rank deficient."""
    values, vectors = np.linalg.eigh(0.5 * (covariance + covariance.T))
    kept = values > _KEPT * values[-1]
    along = vectors[:, kept].T @ error
    return BlockNees(float(np.sum(along**2 / values[kept])), int(np.count_nonzero(kept)))


def _covariance_of(module: HybridModule, prefix: str) -> tuple[list[str], Array]:
    """Names (without prefix) and covariance of the estimated parameters of a block."""
    assert module.uncertainty is not None
    rows = [k for k, name in enumerate(module.uncertainty.parameters) if name.startswith(prefix)]
    names = [module.uncertainty.parameters[k].removeprefix(prefix) for k in rows]
    return names, np.array(module.uncertainty.covariance)[np.ix_(rows, rows)]


def _field_jacobian(names: list[str], steps: Array, displaced: Displaced) -> Array:
    """d field / d parameters, (numbers, P), by central differences."""
    columns = []
    for k in range(len(names)):
        step = np.zeros(len(names))
        step[k] = steps[k]
        columns.append((displaced(step) - displaced(-step)) / (2.0 * steps[k]))
    return np.stack(columns, axis=1)


@dataclass(frozen=True)
class _MovedMap:
    module: HybridModule
    names: list[str]

    def __call__(self, change: Array) -> Array:
        fitted = self.module.colour_from_event
        assert fitted is not None
        matrix, radial = np.array(fitted.matrix), fitted.radial
        for name, step in zip(self.names, change, strict=True):
            if name == "radial":
                radial += step
            else:
                matrix[divmod("abcdef".index(name), 3)] += step
        moved = fitted.model_copy(update={"matrix": matrix.tolist(), "radial": radial})
        return map_displacement(self.module.model_copy(update={"colour_from_event": moved}), self.module).ravel()


@dataclass(frozen=True)
class _MovedLens:
    module: HybridModule
    names: list[str]

    def __call__(self, change: Array) -> Array:
        lens = self.module.lens_model()
        parameters = np.array(lens.parameters, float)
        for name, step in zip(self.names, change, strict=True):
            parameters[lens.names.index(name)] += step
        array = self.module.colour_array
        return lens_displacement(lens.with_parameters(parameters), lens, array.width, array.height).ravel()


def map_nees(estimate: HybridModule, truth: HybridModule) -> BlockNees:
    """Of the event map over the field."""
    names, covariance = _covariance_of(estimate, "colour_from_event.")
    steps = np.maximum(np.sqrt(np.diag(covariance)), 1e-12)
    jacobian = _field_jacobian(names, steps, _MovedMap(estimate, names))
    return nees_in_span(map_displacement(estimate, truth).ravel(), jacobian @ covariance @ jacobian.T)


def lens_nees(estimate: HybridModule, truth: HybridModule) -> BlockNees:
    """Of the lens over the field, orientation removed."""
    names, covariance = _covariance_of(estimate, "lens.")
    steps = np.maximum(np.sqrt(np.diag(covariance)), 1e-12)
    jacobian = _field_jacobian(names, steps, _MovedLens(estimate, names))
    array = estimate.colour_array
    error = lens_displacement(estimate.lens_model(), truth.lens_model(), array.width, array.height)
    return nees_in_span(error.ravel(), jacobian @ covariance @ jacobian.T)


def clock_errors(estimate: HybridModule, truth: HybridModule) -> dict[str, float]:
    """Estimate minus truth of each clock parameter that was estimated, in the file's units.

    Where the estimate's offset includes the latency of events, so does the truth that it is compared with; where the
    latency was separated, each is compared with its own truth. (Their reference lights differ by a few percent, which
    is a microsecond or two.)
    """
    fitted, true = estimate.timing, truth.timing
    assert fitted is not None
    assert true is not None
    true_offset = true.frame_offset_ns or 0.0
    if fitted.event_latency_ns is None:
        true_offset += true.event_latency_ns or 0.0
    epoch_ns = (fitted.drift_epoch_ns or 0) - (true.drift_epoch_ns or 0)
    true_offset += (true.frame_drift_ppm or 0.0) * 1e-6 * epoch_ns
    errors = {}
    for name, wanted in (
        ("frame_offset_ns", true_offset),
        ("frame_drift_ppm", true.frame_drift_ppm),
        ("line_time_ns", true.line_time_ns),
        ("exposure_correction_ns", true.exposure_correction_ns),
        ("event_latency_ns", true.event_latency_ns),
    ):
        value = getattr(fitted, name)
        if value is not None:
            errors[name] = value - (wanted or 0.0)
    return errors


def clock_nees(estimate: HybridModule, truth: HybridModule) -> BlockNees:
    """Of all clock parameters that were estimated."""
    names, covariance = _covariance_of(estimate, "timing.")
    errors = clock_errors(estimate, truth)
    names_known = [k for k, name in enumerate(names) if name in errors]
    scale = 1.0 / np.sqrt(np.diag(covariance)[names_known])
    unit = covariance[np.ix_(names_known, names_known)] * np.outer(scale, scale)
    return nees_in_span(np.array([errors[names[k]] for k in names_known]) * scale, unit)


def threshold_nees(estimate: HybridModule, truth: HybridModule) -> BlockNees:
    """Of the ON and OFF thresholds."""
    names, covariance = _covariance_of(estimate, "contrast.")
    assert estimate.contrast is not None
    assert truth.contrast is not None
    kept = [k for k, name in enumerate(names) if name in ("on_threshold", "off_threshold")]
    error = [getattr(estimate.contrast, names[k]) - getattr(truth.contrast, names[k]) for k in kept]
    return nees_in_span(np.array(error), covariance[np.ix_(kept, kept)])


def block_nees(estimate: HybridModule, truth: HybridModule) -> dict[str, BlockNees]:
    """NEES of each of BLOCKS."""
    judges = (map_nees, lens_nees, clock_nees, threshold_nees)
    return {name: judge(estimate, truth) for name, judge in zip(BLOCKS, judges, strict=True)}
