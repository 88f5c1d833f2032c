"""What passes between the steps of a calibration: one view's pictures in, corners, lens and event map out.

A *view* is a stretch of the recording in which the board holds still. Its frames are demodulated to two pictures,
`bright_dn` (set A bright) and `dark_dn` (set A dark; on a counterphase board set B is then bright), and its events to
images on the event grid. The order of the steps, and who takes what:

    view images -> find_boards (corners) -> fit_lens -> fit_event_map -> clocks, contrast, defects

Frame pictures are indexed [row, column] of the frame, event images [row, column] of the event grid. Positions are
colour-array px unless said. Names of parameters are the paths of the module file (`lens.fx`, `colour_from_event.a`,
`timing.line_time_ns`), so that blocks join into one covariance.
"""

from dataclasses import dataclass, field

import numpy as np

from hybridtrack.calibration.parallax import ParallaxTest
from hybridtrack.geometry import FisheyeLens, PerspectiveLens
from hybridtrack.module import ColourFromEvent

Array = np.ndarray
Lens = PerspectiveLens | FisheyeLens

# Order of the event-to-colour map in a covariance: matrix [[a, b, c], [d, e, f]], then the radial term.
MAP_PARAMETERS = tuple(f"colour_from_event.{name}" for name in ("a", "b", "c", "d", "e", "f", "radial"))


@dataclass(frozen=True)
class ViewImages:
    """One view, demodulated.

    `bright_dn`, `dark_dn` (Hf, Wf): linear light above black, in DN of a frame exposed wholly in that state; grey, with
    mosaic channels brought to one level. NaN where saturated or not determined. `bright_sigma_dn`, `dark_sigma_dn`
    (Hf, Wf): standard deviation of each. `frames`: indices of the frames used.

    `on_count`, `off_count` (He, We): mean events per blink cycle. `amplitude` (He, We): mean events per flip that agree
    with set A (ON while A is bright, OFF while it is dark) minus those that oppose it: positive in set A, negative in a
    counterphase set B, near zero elsewhere. `snr` (He, We) >= 0: |amplitude| over its standard deviation.
    `cycles`: blink cycles that went into the event images. `sway_px`: how far the picture moved during the view, in
    event px, where it could be measured. Times are on the event clock.
    """

    index: int
    t0_ns: int
    t1_ns: int
    frames: Array
    bright_dn: Array
    dark_dn: Array
    bright_sigma_dn: Array
    dark_sigma_dn: Array
    on_count: Array
    off_count: Array
    amplitude: Array
    snr: Array
    cycles: int
    sway_px: float = 0.0


@dataclass(frozen=True)
class BoardCorners:
    """Inner corners of the board in one view.

    `ij` (N, 2) int: corner indices as in `Target.corners_m()[j - 1, i - 1]`. `uv` (N, 2): position on the colour array,
    from the frame pictures; `covariance` (N, 2, 2) px^2. `event_xy` (N, 2): position on the event grid, NaN where not
    found. `identified`: whether steady dark squares told the board from its half turn.
    """

    view: int
    ij: Array
    uv: Array
    covariance: Array
    event_xy: Array
    identified: bool


@dataclass(frozen=True)
class BoardSearch:
    """Boards found, and one sentence for each view without one."""

    boards: list[BoardCorners]
    findings: list[str] = field(default_factory=list)


@dataclass(frozen=True)
class LensFit:
    """Lens and board poses by bundle adjustment.

    `camera_from_board` (V, 4, 4), in the order of `boards` that went in, whose `view` numbers are `views` (V,).
    `residuals_px` (M, 2) with `residual_view` (M,) and `residual_uv` (M, 2): all corners. `parameters`, `covariance`:
    the lens block, poses and nuisance marginalised. `condition`: of the column-scaled Jacobian. `joint_covariance`
    (P + 6V square): the lens block, then each view's pose twist (right side, translation and rotation vector).
    `model`: name of the lens model's free terms, one of `lens_choice.MODELS`.
    """

    lens: Lens
    views: Array
    camera_from_board: Array
    residuals_px: Array
    residual_view: Array
    residual_uv: Array
    parameters: tuple[str, ...]
    covariance: Array
    condition: float
    findings: list[str] = field(default_factory=list)
    joint_covariance: Array = field(default_factory=lambda: np.zeros((0, 0)))
    model: str = ""

    @property
    def rms_px(self) -> float:
        """Root mean square residual per axis."""
        return float(np.sqrt(np.mean(self.residuals_px**2)))


@dataclass(frozen=True)
class EventMapFit:
    """Event-to-colour map with mirroring and clear site as found.

    `parameters` are (a subset of) MAP_PARAMETERS; `covariance` theirs, clustered over views. `cross_covariance`
    (P_map, P_lens) against the lens block, or None where the two are independent. `residual_xy` (M, 2) event-grid
    positions, `residuals_px` (M, 2) displacement of local patches in colour px, for the report; may be empty.
    `parallax`: whether the map depends on the board's distance.
    """

    colour_from_event: ColourFromEvent
    mirror_x: bool
    mirror_y: bool
    clear_site: tuple[int, int]
    parameters: tuple[str, ...]
    covariance: Array
    cross_covariance: Array | None
    residual_xy: Array
    residuals_px: Array
    findings: list[str] = field(default_factory=list)
    parallax: ParallaxTest | None = None
