"""How late events are, learned from frames while tracking.

A photoreceptor is a low pass (Lichtsteiner, Posch and Delbruck 2008), and comparator and readout add to it. A part may
stand in the module's frame offset already; what is left shows at every frame: a feature carried by late events trails
the frame's position by velocity times lag. Least squares over features and frames, with forgetting and a prior at zero,
so that without movement nothing is learned. One lag serves all pixels: a lag for each pixel by its light explained the
trails as well, but spread the positions more.
"""

import numpy as np

Array = np.ndarray
PRIOR_SIGMA_S = 1e-3
# Short, for a trail shows only in part, as frames pull features back: the rest is learned from the frames that follow.
MEMORY_FRAMES = 10.0
LEAST_SPEED = 100.0  # frame px/s
SHORTEST_S, LONGEST_S = -5e-4, 2e-3


class EventLag:
    """The estimate, `seconds`, beyond what the module's clocks allow for."""

    def __init__(self) -> None:
        self._information, self._weighted = 0.0, 0.0
        self.seconds = 0.0

    @property
    def ns(self) -> int:
        """The estimate in whole nanoseconds."""
        return round(1e9 * self.seconds)

    def learn(self, trail_s: Array, sigma_s: Array) -> None:
        """Take one frame's features (N,): by how much time each trailed although the estimate was allowed for, and its
        deviation. Robust by Huber's weight."""
        keep = 1.0 - 1.0 / MEMORY_FRAMES
        weight = 1.0 / sigma_s**2 / np.maximum(1.0, np.abs(trail_s) / (2.0 * sigma_s))
        self._information = keep * self._information + float(weight.sum())
        self._weighted = keep * self._weighted + float(np.sum(weight * (trail_s + self.seconds)))
        estimate = self._weighted / (self._information + PRIOR_SIGMA_S**-2)
        self.seconds = float(np.clip(estimate, SHORTEST_S, LONGEST_S))
