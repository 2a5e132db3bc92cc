"""One way to compile kernels."""

# mypy: allow-untyped-calls

from __future__ import annotations

from contextlib import suppress
from typing import Any

import numba
from numba.core.caching import FunctionCache


class _Cache(FunctionCache):
    """Machine code kept on disk where that works. A full disk, a folder of somebody else's, a file that a power cut has
    halved: each costs the time to compile again, not the run."""

    def load_overload(self, signature: Any, context: Any) -> Any:  # noqa: ANN401 - objects of numba
        try:
            return super().load_overload(signature, context)
        except Exception:  # a damaged pickle raises anything
            with suppress(OSError):
                self.flush()
            return None

    def save_overload(self, signature: Any, data: Any) -> None:  # noqa: ANN401 - objects of numba
        with suppress(OSError):
            super().save_overload(signature, data)


def compiled(function: Any) -> Any:  # noqa: ANN401 - a numba dispatcher
    """Compile on first use; keep the machine code on disk where a cache folder can be written.

    Arithmetic stays as written (no reordering of sums), so that a pixel's value does not depend on its block.
    """
    dispatcher: Any = numba.njit(nogil=True, error_model="numpy")(function)
    with suppress(RuntimeError):  # no folder for the cache, neither beside the source nor in the user's own
        dispatcher._cache = _Cache(function)
    return dispatcher
