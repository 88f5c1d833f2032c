"""The decorator under which every compiled kernel of the package is declared."""

from collections.abc import Callable
from typing import Any, TypeVar

import numba

Function = TypeVar("Function", bound=Callable[..., Any])


def kernel(function: Function | None = None, *, parallel: bool = False, fastmath: bool = False) -> Any:
    """Compile `function` with numba, cached on disk where a folder is writable, else in memory.

    Compiled code lets go of the interpreter, so that `threads.each` runs it side by side.
    Kernels that call each other must live in one file: the cache does not see changes in another file.
    """

    def wrap(target: Function) -> Any:
        options: dict[str, Any] = {"parallel": parallel, "fastmath": fastmath, "error_model": "numpy", "nogil": True}
        try:
            return numba.njit(cache=True, **options)(target)
        except RuntimeError:  # numba found no folder it may write its cache to
            return numba.njit(**options)(target)

    return wrap if function is None else wrap(function)
