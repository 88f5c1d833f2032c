"""Does the event map depend on how far the board was? One lens over one sensor has no parallax; two lenses do.

Each view pulls the map's shift its own way. A displacement that grows with inverse distance is fitted to these pulls
beside the map itself, its covariance taken over views as the map's is, and tested with Fisher's distribution.
"""

from dataclasses import dataclass

import numpy as np
from scipy.stats import f as fisher

Array = np.ndarray

SHIFT = np.array([0, 3])  # of the map's coefficients
LEAST_RANGE = 1.15  # farthest over nearest board that tells anything
LEVEL = 0.001
SMALLEST_PX = 0.01


@dataclass(frozen=True)
class ViewPulls:
    """Of each view v on the map's coefficients, all else eliminated: `scores` (V, 7), `information` (V, 7, 7), and the
    `spread` (V, 7, 7) of the scores by noise; `columns` (V, 7, M) times the nuisances' covariance `nuisance` (M, M) is
    what deviations of poses and lens add. `chi_square` of the scores under these, with its `degrees` of freedom."""

    scores: Array
    information: Array
    spread: Array
    columns: Array
    nuisance: Array
    chi_square: float
    degrees: int


@dataclass(frozen=True)
class ParallaxTest:
    """`moved_px` (2,): how far the map at the nearest board lies from that at the farthest, with deviations `sigma_px`
    (2,), distances `nearest_m` and `farthest_m`, and the probability `p_value` of as much where there is no parallax;
    None where distances were too alike."""

    nearest_m: float
    farthest_m: float
    moved_px: Array
    sigma_px: Array
    p_value: float | None

    def findings(self) -> list[str]:
        """One plain sentence."""
        span = f"{self.nearest_m:.2g} and {self.farthest_m:.2g} m"
        if self.p_value is None:
            return [
                f"event map: boards stood at much the same distance ({span}), so that independence of distance was not "
                "tested; add a view at half or twice the distance"
            ]
        size = float(np.linalg.norm(self.moved_px))
        if self.p_value < LEVEL and size > SMALLEST_PX:
            across, down = self.moved_px
            return [
                f"event map: it moves by ({across:+.3f}, {down:+.3f}) px between boards at {span} "
                f"(p {self.p_value:.1g}): the module has parallax, and the map holds near the boards' distances only"
            ]
        return []


def distances_m(camera_from_board: Array, middle_m: Array) -> Array:
    """Depth (V,) of the board's middle (3,) along the optical axis, from poses (V, 4, 4)."""
    return np.asarray(camera_from_board[:, 2, :3] @ middle_m + camera_from_board[:, 2, 3])


def judge_parallax(pulls: ViewPulls, depth_m: Array) -> ParallaxTest:
    """Test the map's shift against the boards' depths (V,)."""
    nearest, farthest = float(depth_m.min()), float(depth_m.max())
    inverse = 1.0 / depth_m
    along = (inverse - inverse.mean()) / (inverse.max() - inverse.min() + 1e-300)
    if farthest < LEAST_RANGE * nearest or len(depth_m) < 3:
        return ParallaxTest(nearest, farthest, np.zeros(2), np.full(2, np.nan), None)
    whole = pulls.information.sum(0)
    cross = np.einsum("v,vij->ij", along, pulls.information)[SHIFT]
    own = np.einsum("v,vij->ij", along**2, pulls.information)[np.ix_(SHIFT, SHIFT)]
    eliminate = cross @ np.linalg.inv(whole)
    inverse_own = np.linalg.inv(own - eliminate @ cross.T)
    # The estimate is linear in the views' scores: gain (V, 2, 7).
    pick = np.zeros((len(SHIFT), whole.shape[0]))
    pick[np.arange(len(SHIFT)), SHIFT] = 1.0
    gain = np.einsum("ij,vjk->vik", inverse_own, along[:, None, None] * pick - eliminate)
    moved = np.einsum("vij,vj->i", gain, pulls.scores)
    by_nuisance = np.einsum("vij,vjm->im", gain, pulls.columns)
    covariance = np.einsum("vij,vjk,vlk->il", gain, pulls.spread, gain) + by_nuisance @ pulls.nuisance @ by_nuisance.T
    # Views may scatter by more than noise and poses explain; what parallax explains is no part of that.
    explained = float(moved @ np.linalg.solve(covariance, moved))
    degrees = pulls.degrees - len(SHIFT)
    factor = max((pulls.chi_square - explained) / degrees, 1.0)
    p_value = float(fisher.sf(explained / len(SHIFT) / factor, len(SHIFT), degrees))
    return ParallaxTest(nearest, farthest, moved, np.sqrt(factor * np.diag(covariance)), p_value)
