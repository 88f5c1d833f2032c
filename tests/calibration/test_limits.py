"""Pass or fail per number, and limits files that say what they mean."""

import json
from pathlib import Path

import pytest

from hybridtrack.calibration.limits import check_limits, load_limits, parse_limits
from hybridtrack.calibration.named_numbers import KNOWN, Number
from hybridtrack.errors import FileFormatError, MissingFileError

NUMBERS = {"lens.fx": Number(840.0, 0.2), "timing.line_time_ns": Number(10_000.0, 3.0), "defects.hot": Number(4.0)}


def reasons(data: dict) -> list[str]:
    return [check.reason for check in check_limits(NUMBERS, parse_limits(data, "line"))]


@pytest.mark.parametrize(
    ("bounds", "reason"),
    [
        ({"min": 840.0, "max": 840.0}, ""),
        ({"min": 840.1}, "not above min"),
        ({"max": 839.9}, "not below max"),
        ({"max_sigma": 0.2}, ""),
        ({"min": 800, "max_sigma": 0.19}, "its deviation is above max_sigma"),
    ],
)
def test_a_number_holds_its_bounds_ends_included(bounds: dict, reason: str) -> None:
    """Value against min and max, deviation against max_sigma; the reason names the bound that was broken."""
    assert reasons({"lens.fx": bounds}) == [reason]


def test_guarded_acceptance_counts_deviations() -> None:
    """ISO 14253-1: within the bounds by two deviations of 0.2, or failed; at exactly two it passes."""
    assert reasons({"guard_deviations": 2, "lens.fx": {"min": 839.6}}) == [""]
    assert reasons({"guard_deviations": 2, "lens.fx": {"min": 839.61}}) == ["not above min by 2 deviations"]
    assert reasons({"guard_deviations": 2, "lens.fx": {"max": 840.39}}) == ["not below max by 2 deviations"]
    assert reasons({"guard_deviations": 2, "defects.hot": {"max": 10}}) == ["its deviation is not known"]


def test_what_was_not_determined_fails() -> None:
    """A known number that this calibration lacks, and a deviation that is not known, are no pass."""
    assert reasons({"timing.event_latency_ns": {"max": 1e6}}) == ["not determined"]
    assert reasons({"defects.hot": {"max_sigma": 1.0}}) == ["its deviation is not known"]
    assert reasons({"defects.hot": {"max": 4}}) == [""]


def test_toml_and_json_say_the_same(tmp_path: Path) -> None:
    """Dotted and quoted table names alike; order of the file is kept."""
    dotted, quoted, plain = (tmp_path / name for name in ("a.toml", "b.toml", "c.json"))
    dotted.write_text("[timing.line_time_ns]\nmin = 9_900\nmax = 10_100\n[lens.fx]\nmax_sigma = 0.5\n")
    quoted.write_text('["timing.line_time_ns"]\nmin = 9900\nmax = 10100\n["lens.fx"]\nmax_sigma = 0.5\n')
    plain.write_text(
        json.dumps({"timing.line_time_ns": {"min": 9900, "max": 10100}, "lens": {"fx": {"max_sigma": 0.5}}})
    )
    limits = load_limits(dotted)
    assert limits == load_limits(quoted) == load_limits(plain)
    assert [limit.name for limit in limits.limits] == ["timing.line_time_ns", "lens.fx"]


def test_an_unknown_number_is_refused_with_the_known_ones() -> None:
    """The sentence lists every name that would do."""
    with pytest.raises(FileFormatError, match=r"got 'lens\.focal'; known are lens\.fx, ") as caught:
        parse_limits({"lens": {"focal": {"min": 1}}}, "line.toml")
    assert all(name in str(caught.value) for name in KNOWN)


@pytest.mark.parametrize(
    ("data", "words"),
    [
        ({}, "at least one number with a limit is required"),
        ({"lens": {"fx": {"least": 3}}}, "bounds among min, max, max_sigma are required, got 'least'"),
        ({"lens": {"fx": {}}}, "bounds among min, max, max_sigma are required, got none"),
        ({"lens": {"fx": 3}}, "table of bounds is required at 'lens.fx', got 3"),
        ({"lens.fx": 3}, "table of bounds is required at 'lens.fx', got 3"),
        ({"lens.fx": {"min": "low"}}, r"lens.fx.min: a number is required, got 'low'"),
        ({"lens.fx": {"min": True}}, "a number is required, got True"),
        ({"lens.fx": {"min": 2, "max": 1}}, "min at most max is required, got 2 and 1"),
        ({"lens.fx": {"max_sigma": 0}}, "max_sigma above zero is required, got 0"),
        ({"guard_deviations": -1, "lens.fx": {"max": 1}}, "guard_deviations: zero or more is required, got -1"),
    ],
)
def test_a_file_that_means_nothing_is_refused(data: dict, words: str) -> None:
    """Field, requirement, value received."""
    with pytest.raises(FileFormatError, match=words):
        parse_limits(data, "line")


def test_a_file_that_cannot_be_read_is_refused(tmp_path: Path) -> None:
    """Missing, broken, of another kind."""
    with pytest.raises(MissingFileError, match="expected a limits file"):
        load_limits(tmp_path / "none.toml")
    for name, text in (("a.toml", "[lens"), ("b.json", "{")):
        (tmp_path / name).write_text(text)
        with pytest.raises(FileFormatError, match="syntax error"):
            load_limits(tmp_path / name)
    (tmp_path / "c.json").write_text("[1]")
    with pytest.raises(FileFormatError, match="expected tables of bounds, got list"):
        load_limits(tmp_path / "c.json")
