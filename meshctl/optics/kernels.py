"""The one way a numba kernel is declared here: one signature, cached on disk, and NaN kept honest.

Full fastmath would let the compiler assume that NaN never happens and make isnan false; the four flags
below allow fused multiply-add and reordered sums and nothing else.
Public: kernel, inner, given, filled, and numba's scalar types.
"""

from __future__ import annotations

from collections.abc import Callable
from typing import Any

from numba import boolean, complex128, float64, int32, int64, njit, types, uint8, void

FLAGS = {"contract", "reassoc", "nsz", "arcp"}


UniTuple = types.UniTuple


def inner(function: Callable[..., Any]) -> Callable[..., Any]:
    """A function that kernels call: compiled with them, so that loading a cached kernel does not load it."""
    compiled: Callable[..., Any] = njit(function, fastmath=FLAGS, nogil=True)
    return compiled


def given(dtype: Any, dimensions: int = 1) -> Any:
    """Type of an array that a kernel only reads: read-only arrays are taken, and writable ones too."""
    return types.Array(dtype, dimensions, "C", readonly=True)


def filled(dtype: Any, dimensions: int = 1) -> Any:
    """Type of an array that a kernel writes."""
    return types.Array(dtype, dimensions, "C")


def kernel(signature: Any) -> Callable[[Callable[..., Any]], Callable[..., Any]]:
    """Compile a function for exactly this numba signature (text or types), cached on disk."""
    compiled: Callable[[Callable[..., Any]], Callable[..., Any]] = njit(
        signature, cache=True, fastmath=FLAGS, nogil=True
    )
    return compiled


__all__ = [
    "UniTuple",
    "boolean",
    "complex128",
    "filled",
    "float64",
    "given",
    "inner",
    "int32",
    "int64",
    "kernel",
    "uint8",
    "void",
]
