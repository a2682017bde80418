"""The one decorator for compiled kernels: no reference counts, no fastmath, no Python objects.

Kernels allocate nothing (``_nrt`` off keeps reference counting of array arguments out of the inner
functions, where it took 40 % of the time), release the interpreter lock and are cached on disk.
"""

from collections.abc import Callable
from typing import Any, ParamSpec, TypeVar, cast

import numba

P = ParamSpec("P")
R = TypeVar("R")


def kernel(function: Callable[P, R]) -> Callable[P, R]:
    """Compile a kernel with the project's flags; to the type checker it stays the same function.

    Parameters
    ----------
    function
        Plain function over arrays and scalars. It must allocate nothing and raise nothing.
    """
    njit: Any = numba.njit  # its stubs don't know _nrt
    compiled = njit(_nrt=False, nogil=True, cache=True, fastmath=False, error_model="numpy")(function)
    return cast("Callable[P, R]", compiled)
