"""Boards, lens and event map of a recording's views, in one call.

Where frames omit clear sites from their bins, or fill them, the place of a frame pixel's light depends on the clear
site, which only the event map finds: a data sheet that has it wrong puts corners off by up to a tenth of a pixel. It is
then found from a few views first; should all views tell otherwise, corners are fitted again until it stands.
"""

from collections.abc import Callable
from dataclasses import dataclass, replace

from hybridtrack.calibration.corners import find_boards, first_fit, refine_boards
from hybridtrack.calibration.event_map_fit import find_clear_site, fit_event_map
from hybridtrack.calibration.lens_fit import fit_lens
from hybridtrack.calibration.view_data import BoardSearch, EventMapFit, LensFit, ViewImages
from hybridtrack.errors import BoardNotFoundError, HybridtrackError
from hybridtrack.module import HybridModule, Target

Progress = Callable[[str, float], None]

_ROUNDS = 3
_LEAST_VIEWS = 3
_VIEWS_FOR_SITE = 5


@dataclass(frozen=True)
class Geometry:
    """Boards found, the lens and poses they give, and the event map; `findings` of all three."""

    search: BoardSearch
    lens_fit: LensFit
    map_fit: EventMapFit

    @property
    def findings(self) -> list[str]:
        """What search, lens and map have to say, in this order."""
        return [*self.search.findings, *self.lens_fit.findings, *self.map_fit.findings]


def _require_boards(search: BoardSearch, views: int) -> None:
    if len(search.boards) < _LEAST_VIEWS:
        first = f" ({search.findings[0]})" if search.findings else ""
        raise BoardNotFoundError(
            f"the board must be found in at least {_LEAST_VIEWS} views, and was in {len(search.boards)} of {views}"
            f"{first}"
        )


def _with_site(nominal: HybridModule, site: tuple[int, int]) -> HybridModule:
    cluster = nominal.cluster.model_copy(update={"clear_site": site, "filters": None})
    return nominal.model_copy(update={"cluster": cluster})


def _site_first(
    views: list[ViewImages], search: BoardSearch, target: Target, nominal: HybridModule
) -> tuple[BoardSearch, HybridModule]:
    """The corners' last round under the clear site that the views with most corners show."""
    rough = first_fit(search.boards, target, nominal)
    if rough is None:
        return search, nominal
    most = sorted(search.boards, key=lambda board: -len(board.uv))[:_VIEWS_FOR_SITE]
    chosen = {board.view for board in most}
    believed = nominal
    try:
        site = find_clear_site([view for view in views if view.index in chosen], rough, target, nominal)
        if site != nominal.cluster.clear_site:
            believed = _with_site(nominal, site)
    except HybridtrackError:
        pass  # all views may tell where these few do not
    return BoardSearch(refine_boards(views, search.boards, rough, target, believed), search.findings), believed


def fit_geometry(
    views: list[ViewImages],
    target: Target,
    nominal: HybridModule,
    lens_model: str | None = None,
    progress: Progress | None = None,
) -> Geometry:
    """Find boards, lens and event map. Raises BoardNotFoundError, DegenerateDataError, OptionError.

    Of `nominal` sizes, cluster pitch and frame mode are believed; mirroring and clear site are found.
    """
    tell = progress or (lambda stage, fraction: None)
    tell("corners", 0.0)
    site_matters = nominal.frame_mode.clear_in_frame != "included"
    search, believed = find_boards(views, target, nominal, 1 if site_matters else 2), nominal
    _require_boards(search, len(views))
    if site_matters:
        tell("clear site", 0.3)
        search, believed = _site_first(views, search, target, nominal)
    tell("lens", 0.4)
    lens_fit = fit_lens(search.boards, target, believed, lens_model)
    tell("event map", 0.5)
    map_fit = fit_event_map(views, search.boards, lens_fit, target, believed)
    for _ in range(_ROUNDS):
        if not site_matters or map_fit.clear_site == believed.cluster.clear_site:
            break
        tell("corners", 0.6)
        believed = _with_site(nominal, map_fit.clear_site)
        boards = refine_boards(views, search.boards, lens_fit, target, believed)
        search = BoardSearch(boards, search.findings)
        refitted = fit_lens(boards, target, believed, lens_fit.model)
        # How the model was chosen is still worth saying.
        chosen = [finding for finding in lens_fit.findings if finding.startswith("lens: model ")]
        lens_fit = replace(refitted, findings=chosen + refitted.findings)
        map_fit = fit_event_map(views, boards, lens_fit, target, believed)
    tell("event map", 1.0)
    return Geometry(search, lens_fit, map_fit)
