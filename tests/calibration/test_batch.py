"""The spread of a lot."""

import csv
import io

import numpy as np
import pytest
from calibrated_modules import drawn

from hybridtrack.calibration.batch import BatchEntry, batch_csv, spread_csv, spread_of, spreads
from hybridtrack.calibration.named_numbers import Number, named_numbers


def entries_of(values: list[float], sigma: float | None = None) -> list[BatchEntry]:
    return [BatchEntry(f"m{k}", numbers={"lens.fx": Number(value, sigma)}) for k, value in enumerate(values)]


def test_percentiles_and_robust_spread_are_those_of_the_values() -> None:
    """1 to 5: median 3, MAD 1, quartiles 2 and 4; z of 5 is 2 / 1.4826."""
    spread = spread_of("lens.fx", entries_of([1, 2, 3, 4, 5]))
    assert spread is not None
    assert spread.percentiles == pytest.approx((1.2, 2, 3, 4, 4.8))
    assert spread.robust_sigma == pytest.approx(1.4826)
    assert spread.z[-1] == pytest.approx(2 / 1.4826)
    assert spread.outliers == ()


def test_outliers_are_named_farthest_first() -> None:
    """By robust z: two far ones do not hide each other, as they would in mean and deviation."""
    rng = np.random.default_rng(2)
    values = [*(840 + 0.1 * rng.normal(size=20)), 842.0, 838.5]
    spread = spread_of("lens.fx", entries_of(values))
    assert spread is not None
    assert spread.outliers == ("m20", "m21")


def test_normal_modules_are_rarely_outliers() -> None:
    """Of 40 lots of 25 normal modules with stated deviations, at most 1 % of the modules are named."""
    rng = np.random.default_rng(7)
    named = 0
    for _ in range(40):
        spread = spread_of("lens.fx", entries_of(list(rng.normal(size=25)), 0.1))
        assert spread is not None
        named += len(spread.outliers)
    assert named <= 10


def test_stated_deviations_keep_a_close_lot_from_making_outliers() -> None:
    """Three within a thousandth and one 0.05 off, each known to 0.1 only: no outlier; known to 0.001 it is one."""
    values = [840.0, 840.001, 840.002, 840.05]
    loose, sharp = spread_of("lens.fx", entries_of(values, 0.1)), spread_of("lens.fx", entries_of(values, 0.001))
    assert loose is not None
    assert sharp is not None
    assert loose.outliers == ()
    assert sharp.outliers == ("m3",)


def test_counts_that_are_mostly_equal_have_outliers_too() -> None:
    """MAD is zero then; the mean deviation judges."""
    spread = spread_of("defects.hot", [BatchEntry(f"m{k}", numbers={"defects.hot": Number(n)})
                                       for k, n in enumerate([2] * 11 + [90])])  # fmt: skip
    assert spread is not None
    assert np.all(np.isfinite(spread.z))
    assert spread.outliers == ("m11",)


def test_distortion_is_compared_within_one_lens_model() -> None:
    """A fisheye's k1 is no outlier among perspective ones, its focal length may be."""
    entries = [BatchEntry(f"m{k}", numbers={"lens.k1": Number(-0.08 + 1e-3 * k), "lens.fx": Number(400.0 + 0.1 * k)},
                          lens_model="k1k2") for k in range(5)]  # fmt: skip
    entries.append(BatchEntry("m5", numbers={"lens.k1": Number(0.3), "lens.fx": Number(450.0)}, lens_model="fisheye2"))
    k1, fx = spread_of("lens.k1", entries), spread_of("lens.fx", entries)
    assert k1 is not None
    assert fx is not None
    assert k1.entries == ("m0", "m1", "m2", "m3", "m4")
    assert fx.outliers == ("m5",)


def test_what_has_no_spread_is_left_out() -> None:
    """Two modules, or equal values, or a number that nobody determined."""
    assert spread_of("lens.fx", entries_of([1, 2])) is None
    assert spread_of("lens.fx", entries_of([3, 3, 3])) is None
    assert spread_of("lens.fy", entries_of([1, 2, 3])) is None


def test_tables_hold_every_entry() -> None:
    """Refused ones with their sentence, numbers that read back exactly."""
    entries = [BatchEntry(f"m{k}", "Sparrow", f"S{k}", named_numbers(drawn(k))) for k in range(4)]
    entries += [BatchEntry("m4", refusal="no blinking, at all"), BatchEntry("m5", failed_limits=("lens.fx: high",))]
    rows = list(csv.DictReader(io.StringIO(batch_csv(entries))))
    assert [row["state"] for row in rows] == ["calibrated"] * 4 + ["refused", "failed"]
    assert rows[4]["reason"] == "no blinking, at all"
    assert float(rows[2]["lens.fx"]) == entries[2].numbers["lens.fx"].value
    assert float(rows[2]["lens.fx sigma"]) == entries[2].numbers["lens.fx"].sigma
    found = spreads(entries)
    lines = {row["number"]: row for row in csv.DictReader(io.StringIO(spread_csv(found)))}
    assert set(lines) == {spread.name for spread in found}
    assert float(lines["lens.fx"]["p50"]) == np.median([entry.numbers["lens.fx"].value for entry in entries[:4]])
