import numpy as np
import pytest

from hybridtrack.benchmark.live_replay import lateness


def test_jobs_that_keep_up_are_late_by_their_own_work() -> None:
    """A worker quicker than what arrives leaves nothing in line."""
    assert lateness(np.array([0.0, 1.0, 2.0]), np.array([0.2, 0.9, 0.5])) == pytest.approx([0.2, 0.9, 0.5])


def test_jobs_in_line_wait_for_those_before() -> None:
    """A worker at half speed falls behind by one interval with every job."""
    assert lateness(np.arange(4.0), np.full(4, 2.0)) == pytest.approx([2.0, 3.0, 4.0, 5.0])


def test_a_pause_lets_the_line_empty() -> None:
    """After a long job the line shortens while nothing arrives."""
    assert lateness(np.array([0.0, 1.0, 10.0]), np.array([3.0, 1.0, 1.0])) == pytest.approx([3.0, 3.0, 1.0])
