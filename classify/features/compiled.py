"""One way to compile the kernels of this room."""

from __future__ import annotations

from typing import Any

import numba


def compiled(function: Any) -> Any:  # noqa: ANN401 - a numba dispatcher
    """Compile on first use; keep the machine code on disk where a cache folder can be written.

    Arithmetic stays as written (no reordering of sums), so that a pixel's value does not depend on its block.
    """
    try:
        return numba.njit(nogil=True, error_model="numpy", cache=True)(function)
    except RuntimeError:  # no folder for the cache, neither beside the source nor in the user's own
        return numba.njit(nogil=True, error_model="numpy")(function)
