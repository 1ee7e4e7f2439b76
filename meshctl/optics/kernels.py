"""The one way a numba kernel is declared here: one signature, cached on disk, and NaN kept honest.

Full fastmath would let the compiler assume that NaN never happens and make isnan false; the four flags
below allow fused multiply-add and reordered sums and nothing else.
"""

from __future__ import annotations

from collections.abc import Callable
from typing import Any

from numba import njit

FLAGS = {"contract", "reassoc", "nsz", "arcp"}


def kernel(signature: str) -> Callable[[Callable[..., Any]], Callable[..., Any]]:
    """Compile a function for exactly this numba signature, cached on disk."""
    compiled: Callable[[Callable[..., Any]], Callable[..., Any]] = njit(
        signature, cache=True, fastmath=FLAGS, nogil=True
    )
    return compiled
