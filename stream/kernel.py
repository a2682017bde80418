"""The one decorator for compiled kernels: no reference counts, no fastmath, no Python objects.

Kernels allocate nothing (``_nrt`` off keeps reference counting of array arguments out of the inner
functions, where it took 40 % of the time), release the interpreter lock and are cached on disk. A cached
kernel is used only while no file with kernels has changed: a kernel holds the code of those it calls.
"""

import hashlib
from collections.abc import Callable
from functools import cache
from pathlib import Path
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


@cache
def _sources() -> str:
    """Hash the text of every file that holds kernels."""
    digest = hashlib.sha256()
    for path in sorted(Path(__file__).parent.rglob("*.py")):
        text = path.read_bytes()
        if b"stream.kernel" in text or b"def kernel(" in text:
            digest.update(text)
    return digest.hexdigest()


def _stamped(compiled: Any) -> Any:
    """Tie a kernel's file cache to all kernels' sources (numba looks at the kernel's own file alone)."""
    if not hasattr(compiled, "_cache"):
        return compiled  # compiling is switched off (NUMBA_DISABLE_JIT)
    file = compiled._cache._cache_file
    file._source_stamp = (file._source_stamp, _sources())
    return compiled


def kernel(function: Callable[P, R]) -> Callable[P, R]:
    """Compile a kernel with the project's flags; to the type checker it stays the same function.

    Parameters
    ----------
    function
        Plain function over arrays and scalars. It must allocate nothing and raise nothing.
    """
    return cast("Callable[P, R]", _stamped(_NJIT(**_FLAGS)(function)))


def spliced(function: Callable[P, R]) -> Callable[P, R]:
    """Mark a part of a kernel that is put into its caller as it stands, and never compiled alone.

    For the layers of a large kernel: the compiler optimises each function together with all that it
    calls, so layers compiled one by one cost the whole again each time (65 s against 20 s for the pass).
    """
    return cast("Callable[P, R]", _NJIT(inline="always", **_FLAGS)(function))
