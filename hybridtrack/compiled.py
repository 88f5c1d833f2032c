"""The decorator under which every compiled kernel of the package is declared.

Numba raises at import time when a kernel asks for an on-disk cache and no folder is writable (a read-only
installation). The cache is therefore probed once, and kernels are compiled in memory where it is missing.
"""

from collections.abc import Callable
from typing import Any, TypeVar

import numba

Function = TypeVar("Function", bound=Callable[..., Any])


def _cache_is_writable() -> bool:
    def probe() -> int:
        return 0

    try:
        numba.njit(cache=True)(probe)
    except RuntimeError:
        return False
    return True


_CACHE = _cache_is_writable()


def kernel(function: Function | None = None, *, parallel: bool = False, fastmath: bool = False) -> Any:
    """Compile `function` with numba, cached on disk where that is possible.

    Kernels that call each other must live in one file: the cache does not see changes in another file.
    """

    def wrap(target: Function) -> Any:
        return numba.njit(cache=_CACHE, parallel=parallel, fastmath=fastmath, error_model="numpy")(target)

    return wrap if function is None else wrap(function)
