"""Shared by all tests: a skipped check against the outside is a failure where the environment requires it."""

import os

import hybridtrack.threads  # noqa: F401  before numpy: pools of threads made the calibrations of tests five times slower

# isort: split

import pytest


@pytest.hookimpl(hookwrapper=True)
def pytest_runtest_makereport(item: pytest.Item, call: pytest.CallInfo[None]) -> object:
    """Turn a skip of an `outside` test into a failure when HYBRIDTRACK_REQUIRE_OUTSIDE is set."""
    outcome = yield
    report = outcome.get_result()
    if report.skipped and os.environ.get("HYBRIDTRACK_REQUIRE_OUTSIDE") and item.get_closest_marker("outside"):
        reason = report.longrepr[2] if isinstance(report.longrepr, tuple) else report.longrepr
        report.outcome = "failed"
        report.longrepr = f"A check against the outside was skipped, and must not be here: {reason}"
