"""Every exception class of the package.

Each message names the thing, the requirement and what was received. Commands turn a `HybridtrackError` into one
sentence on standard error and exit code 2.
"""


class HybridtrackError(Exception):
    """Base of all refusals; never raised itself."""


class ShapeError(HybridtrackError, ValueError):
    """An array has the wrong shape, type or range."""


class OptionError(HybridtrackError, ValueError):
    """An option or argument is outside what the command or function accepts."""


class FileFormatError(HybridtrackError, ValueError):
    """A file is not what it says, is truncated, or breaks its layout."""


class MissingFileError(HybridtrackError, FileNotFoundError):
    """A file or folder that was named does not exist."""


class LensDomainError(HybridtrackError, ValueError):
    """A point lies where the lens model has no inverse."""


class DegenerateDataError(HybridtrackError, ValueError):
    """The data cannot determine what was asked of them."""


class NoBlinkError(DegenerateDataError):
    """No blinking target was found in a recording."""


class BoardNotFoundError(DegenerateDataError):
    """The board was not found in enough views."""


class ModuleMismatchError(HybridtrackError, ValueError):
    """A recording and a module description disagree."""


class NotCalibratedError(HybridtrackError, ValueError):
    """A value is asked of a module that has not been calibrated for it."""
