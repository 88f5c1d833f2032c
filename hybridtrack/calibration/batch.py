"""The spread of many modules' numbers: percentiles, and the outliers by name.

A module is an outlier in a number x by its robust z, (x - median) / s, beyond 3.5 (Iglewicz and Hoaglin 1993), where

    s^2 = (1.4826 MAD)^2 + median(sigma)^2

MAD, the median absolute deviation, is the spread of the lot; stated deviations are added so that a few modules which
happen to lie close together make no outlier of the next. Terms of distortion mean something only beside the same terms:
they are compared among the modules with the lot's most frequent lens model.
"""

import csv
import io
from collections import Counter
from dataclasses import dataclass, field

import numpy as np

from hybridtrack.calibration.named_numbers import KNOWN, Number

Array = np.ndarray

OUTLIER_Z = 3.5
LEAST_MODULES = 3  # fewer have no spread
DISTORTION = tuple(f"lens.{term}" for term in ("k1", "k2", "k3", "k4", "p1", "p2"))
NO_PROPERTY = ("lattice_p_value", "views_with_board")  # of the module: of the recording
PERCENTILES = (5, 25, 50, 75, 95)


@dataclass(frozen=True)
class BatchEntry:
    """One recording of a lot: its calibrated `numbers`, or why it was refused."""

    name: str
    module: str = ""
    serial: str | None = None
    numbers: dict[str, Number] = field(default_factory=dict)
    lens_model: str = ""
    refusal: str = ""
    failed_limits: tuple[str, ...] = ()

    @property
    def state(self) -> str:
        """calibrated, failed (a limit) or refused."""
        return "refused" if self.refusal else "failed" if self.failed_limits else "calibrated"


@dataclass(frozen=True)
class Spread:
    """One number over the lot. `entries` are the names behind `values` and robust `z` (N,); `percentiles` as in
    PERCENTILES; `robust_sigma` is 1.4826 MAD, `stated_sigma` the median of the stated deviations."""

    name: str
    entries: tuple[str, ...]
    values: Array
    z: Array
    percentiles: tuple[float, ...]
    robust_sigma: float
    stated_sigma: float | None

    @property
    def outliers(self) -> tuple[str, ...]:
        """Names of the entries that lie far off, the farthest first."""
        order = np.argsort(-np.abs(self.z))
        return tuple(self.entries[k] for k in order if abs(self.z[k]) > OUTLIER_Z)


def common_lens_model(entries: list[BatchEntry]) -> str:
    """The lens model that most calibrated entries have; the first of equally frequent ones."""
    counts = Counter(entry.lens_model for entry in entries if entry.numbers)
    return counts.most_common(1)[0][0] if counts else ""


def with_model(entries: list[BatchEntry], model: str) -> list[BatchEntry]:
    """Entries whose lens has that model."""
    return [entry for entry in entries if entry.lens_model == model]


def spread_of(name: str, entries: list[BatchEntry]) -> Spread | None:
    """Spread of one number, or None where fewer than three modules have it, or all have the same."""
    alike = entries if name not in DISTORTION else with_model(entries, common_lens_model(entries))
    found = [(entry.name, entry.numbers[name]) for entry in alike if name in entry.numbers]
    known = [(label, number) for label, number in found if number.value is not None]
    if len(known) < LEAST_MODULES:
        return None
    values = np.array([number.value for _, number in known], float)
    if np.ptp(values) == 0:
        return None
    sigmas = [number.sigma for _, number in known if number.sigma is not None]
    stated = float(np.median(sigmas)) if sigmas else None
    off = values - np.median(values)
    robust = 1.4826 * float(np.median(np.abs(off)))
    scale = float(np.hypot(robust, stated or 0.0))
    if scale == 0:  # more than half are the same number, counts for instance: judged by the mean deviation instead
        scale = 1.2533 * float(np.mean(np.abs(off)))
    return Spread(
        name,
        tuple(label for label, _ in known),
        values,
        off / scale,
        tuple(float(p) for p in np.percentile(values, PERCENTILES)),
        robust,
        stated,
    )


def spreads(entries: list[BatchEntry]) -> list[Spread]:
    """Spread of every number that three modules or more have, in the order of the known names."""
    found = (spread_of(name, entries) for name in KNOWN if name not in NO_PROPERTY)
    return [spread for spread in found if spread is not None]


def batch_csv(entries: list[BatchEntry]) -> str:
    """One line a recording: state, refusal or failed limits, then each number and its deviation."""
    names = [name for name in KNOWN if any(name in entry.numbers for entry in entries)]
    out = io.StringIO()
    writer = csv.writer(out, lineterminator="\n")
    columns = [column for name in names for column in (name, f"{name} sigma")]
    writer.writerow(["recording", "module", "serial", "state", "reason", "lens_model", *columns])
    for entry in entries:
        cells: list[object] = []
        for name in names:
            number = entry.numbers.get(name, Number(None))
            cells += ["" if x is None else repr(float(x)) for x in (number.value, number.sigma)]
        reason = entry.refusal or "; ".join(entry.failed_limits)
        writer.writerow([entry.name, entry.module, entry.serial or "", entry.state, reason, entry.lens_model, *cells])
    return out.getvalue()


def spread_csv(found: list[Spread]) -> str:
    """One line a number: count, percentiles, spread, stated deviation, outliers."""
    out = io.StringIO()
    writer = csv.writer(out, lineterminator="\n")
    writer.writerow(
        ["number", "count", *(f"p{p:02d}" for p in PERCENTILES), "robust_sigma", "stated_sigma", "outliers"]
    )
    for spread in found:
        stated = "" if spread.stated_sigma is None else repr(spread.stated_sigma)
        shown = [*map(repr, spread.percentiles), repr(spread.robust_sigma), stated, " ".join(spread.outliers)]
        writer.writerow([spread.name, len(spread.values), *shown])
    return out.getvalue()
