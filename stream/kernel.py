"""The one decorator for compiled kernels: no reference counts, no fastmath, no Python objects.

Kernels allocate nothing (``_nrt`` off keeps reference counting of array arguments out of the inner
functions, where it took 40 % of the time), release the interpreter lock and are cached on disk.
"""

from collections.abc import Callable
from typing import Any, ParamSpec, TypeVar, cast

import numba

P = ParamSpec("P")
R = TypeVar("R")
_NJIT: Any = numba.njit  # its stubs don't know _nrt
_FLAGS: dict[str, Any] = {
    "_nrt": False,
    "nogil": True,
    "cache": True,
    "fastmath": False,
    "error_model": "numpy",
}


def kernel(function: Callable[P, R]) -> Callable[P, R]:
    """Compile a kernel with the project's flags; to the type checker it stays the same function.

    Parameters
    ----------
    function
        Plain function over arrays and scalars. It must allocate nothing and raise nothing.
    """
    return cast("Callable[P, R]", _NJIT(**_FLAGS)(function))


def spliced(function: Callable[P, R]) -> Callable[P, R]:
    """Mark a part of a kernel that is put into its caller as it stands, and never compiled alone.

    For the layers of a large kernel: the compiler optimises each function together with all that it
    calls, so layers compiled one by one cost the whole again each time (65 s against 20 s for the pass).
    """
    return cast("Callable[P, R]", _NJIT(inline="always", **_FLAGS)(function))
