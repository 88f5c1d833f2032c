"""Which module description a command works with."""

from pathlib import Path

from hybridtrack.errors import NotCalibratedError
from hybridtrack.module import HybridModule, load_module
from hybridtrack.recording import Recording


def module_for(recording: Recording, path: Path | None) -> HybridModule:
    """The module file that was named, else the description that the recording carries.

    Raises NotCalibratedError where there is neither.
    """
    if path is not None:
        return load_module(path)
    if recording.module is None:
        raise NotCalibratedError(f"{recording.path}: it carries no module description; name one with --module")
    return recording.module
