"""Where the example targets, modules and recipes lie: beside the package in a checkout, else where it was installed."""

import sys
from pathlib import Path

from hybridtrack.errors import MissingFileError


def example_folder(name: str) -> Path:
    """Folder `calib_targets` or `sequences`. Raises MissingFileError where neither place has it."""
    places = (Path(__file__).parents[1] / name, Path(sys.prefix) / "share" / "hybridtrack" / name)
    for place in places:
        if place.is_dir():
            return place
    raise MissingFileError(
        f"{name}: the example folder is required here, and is neither at {places[0]} nor {places[1]}"
    )
