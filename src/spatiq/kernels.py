"""One place that decides how numba compiles: cached, without the GIL, NaN-safe fast arithmetic."""

from __future__ import annotations

import os
import tempfile
from collections.abc import Callable
from pathlib import Path
from typing import Any, TypeVar, cast

import numba
import numpy as np
from numpy.typing import NDArray

# Short names for the bare arrays that kernels take.
F32 = NDArray[np.float32]
F64 = NDArray[np.float64]
C64 = NDArray[np.complex64]
C128 = NDArray[np.complex128]
I32 = NDArray[np.int32]
I64 = NDArray[np.int64]
U8 = NDArray[np.uint8]

F = TypeVar("F", bound=Callable[..., Any])

# Reassociation lets loops vectorise; "nnan" and "ninf" are left out: isnan checks still work.
FAST_ARITHMETIC = {"nsz", "contract", "arcp", "reassoc"}
# Division by zero gives infinity, as in NumPy: checking each division keeps loops from vectorising.
_OPTIONS: dict[str, Any] = {
    "nogil": True,
    "fastmath": FAST_ARITHMETIC,
    "error_model": "numpy",
}


def _cache_is_writable() -> bool:
    """numba refuses to import a cached function when no folder can be written to: probe first."""
    chosen = os.environ.get("NUMBA_CACHE_DIR")
    here = Path(__file__).resolve().parent
    for folder in [Path(chosen)] if chosen else [here / "__pycache__", here]:
        try:
            with tempfile.TemporaryFile(dir=folder):
                return True
        except OSError:
            continue
    return False


CACHED = _cache_is_writable()


_KERNELS: list[Any] = []


def kernel(function: F) -> F:
    """Compile a hot loop: bare arrays in and out, no objects, no files."""
    compiled = numba.njit(cache=CACHED, **_OPTIONS)(function)
    _KERNELS.append(compiled)
    return cast(F, compiled)


def compiled_here() -> bool:
    """Whether this process has compiled a kernel that others will find in the cache.

    A kernel that calls another one then runs that one's first copy, where a process that takes both
    from the cache runs a copy made for the caller: rounding may differ in the last bit.
    """
    # With the compiler off, kernels are plain functions.
    stats = (getattr(k, "stats", None) for k in _KERNELS)
    return CACHED and any(s is not None and s.cache_misses for s in stats)


def inlined(function: F) -> F:
    """A piece of a kernel that runs once per symbol: entered into its caller, for handing arrays
    over would cost as much as its work."""
    return cast(F, numba.njit(forceinline=True, **_OPTIONS)(function))
