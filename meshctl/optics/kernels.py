"""The one way a numba kernel is declared here: one signature, cached on disk, and NaN kept honest.

Full fastmath would let the compiler assume that NaN never happens and make isnan false; the four flags
below allow fused multiply-add and reordered sums and nothing else.
Public: kernel, sized_kernel, inner, given, filled, and numba's scalar types.
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


class SizedKernel:
    """A function that small work runs as plain Python and large work as a kernel, loaded when first needed.

    Loading a cached kernel costs some milliseconds: as much as a few thousand plain steps.
    """

    def __init__(self, signature: Any, plain: Callable[..., Any], up_to: int) -> None:
        self.signature, self.plain, self.up_to = signature, plain, up_to
        self.compiled: Callable[..., Any] | None = None

    def __call__(self, size: int, *arguments: Any) -> Any:
        """Run it on work of `size` steps."""
        if size <= self.up_to:
            return self.plain(*arguments)
        if self.compiled is None:
            self.compiled = kernel(self.signature)(self.plain)
        return self.compiled(*arguments)


def sized_kernel(signature: Any, up_to: int = 2000) -> Callable[[Callable[..., Any]], SizedKernel]:
    """Declare a function whose first argument is the size of the work, not passed on."""
    return lambda function: SizedKernel(signature, function, up_to)


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
    "sized_kernel",
    "uint8",
    "void",
]
