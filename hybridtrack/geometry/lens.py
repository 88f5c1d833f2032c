"""The lens models under one type, and the choice between them by name.

>>> lens_of_model("fisheye", [300.0, 300.0, 320.0, 240.0, 0.0, 0.0, 0.0, 0.0]).fx
300.0
>>> lens_of_model("mirror", [300.0])
Traceback (most recent call last):
hybridtrack.errors.OptionError: Expected a lens model among perspective, fisheye, got 'mirror'.
"""

from numpy.typing import ArrayLike

from hybridtrack.errors import OptionError
from hybridtrack.geometry.fisheye import FisheyeLens
from hybridtrack.geometry.perspective import PerspectiveLens

Lens = PerspectiveLens | FisheyeLens

_UNIT_LENSES: dict[str, Lens] = {
    lens.model: lens for lens in (PerspectiveLens(1.0, 1.0, 0.0, 0.0), FisheyeLens(1.0, 1.0, 0.0, 0.0))
}


def lens_of_model(model: str, parameters: ArrayLike) -> Lens:
    """The lens of `model` ("perspective" or "fisheye") with `parameters` in the order of its `names`."""
    if model not in _UNIT_LENSES:
        raise OptionError(f"Expected a lens model among {', '.join(_UNIT_LENSES)}, got {model!r}.")
    return _UNIT_LENSES[model].with_parameters(parameters)
