"""Thresholds pixel by pixel, kept in an HDF5 file beside the module file that names it: layout
`hybridtrack-contrast-map`, version 1.

    /on_threshold, /off_threshold, /on_sigma, /off_sigma    float32 (rows, columns), natural log, NaN where unknown
"""

import hashlib
from dataclasses import dataclass
from pathlib import Path

import h5py
import numpy as np

from hybridtrack.errors import FileFormatError, MissingFileError, ModuleMismatchError
from hybridtrack.files import replacing
from hybridtrack.module.hybrid_module import HybridModule

Array = np.ndarray

LAYOUT = "hybridtrack-contrast-map"
NAMES = ("on_threshold", "off_threshold", "on_sigma", "off_sigma")


@dataclass(frozen=True, eq=False)
class ContrastMap:
    """Thresholds and their deviations, each (rows, columns) of the event grid, NaN where unknown."""

    on_threshold: Array
    off_threshold: Array
    on_sigma: Array
    off_sigma: Array


def sha256_of(path: Path) -> str:
    """Digest of a file's bytes."""
    return hashlib.sha256(path.read_bytes()).hexdigest()


def save_contrast_map(contrast_map: ContrastMap, path: Path | str) -> str:
    """Write a map atomically; returns the digest to be named in the module file."""
    with replacing(path) as temporary, h5py.File(temporary, "w") as file:
        file.attrs["format"], file.attrs["version"] = LAYOUT, 1
        for name in NAMES:
            values = np.asarray(getattr(contrast_map, name), np.float32)
            file.create_dataset(name, data=values, compression="gzip", shuffle=True)
    return sha256_of(Path(path))


def load_contrast_map(module: HybridModule, module_path: Path | str) -> ContrastMap | None:
    """The map that a module read from `module_path` names, or None where it names none.

    Raises MissingFileError, FileFormatError (not such a map, or not the one that the module was saved with) and
    ModuleMismatchError (of another event grid).
    """
    contrast = module.contrast
    if contrast is None or contrast.map_file is None:
        return None
    path = Path(module_path).parent / contrast.map_file
    if not path.is_file():
        raise MissingFileError(f"{path}: expected the threshold map that {module_path} names, found no such file")
    if contrast.map_sha256 is not None and sha256_of(path) != contrast.map_sha256:
        raise FileFormatError(f"{path}: is not the threshold map that {module_path} was saved with (SHA-256 differs)")
    try:
        with h5py.File(path, "r") as file:
            if file.attrs.get("format") != LAYOUT or int(file.attrs.get("version", 0)) != 1:
                raise FileFormatError(f"{path}: format '{LAYOUT}', version 1 is required")
            found = ContrastMap(*(np.asarray(file[name], float) for name in NAMES))
    except (OSError, KeyError) as error:
        raise FileFormatError(f"{path}: is not a threshold map that can be read ({error})") from None
    if found.on_threshold.shape != module.event_grid.shape:
        raise ModuleMismatchError(
            f"{path}: a map of the module's event grid {module.event_grid.shape} is required, got one of "
            f"{found.on_threshold.shape} (rows, columns)"
        )
    return found
