"""The atomic data library, loaded so that its vectorised calls use one thread.

Its calls are short; the threads it would start wait for each other longer than they work, and on a
busy machine a hundred times longer.
"""

from __future__ import annotations

import os


def _load_with_one_thread() -> None:
    """Import the vectorised interface; its OpenMP runtime reads its thread count when it is loaded."""
    before = os.environ.get("OMP_NUM_THREADS")
    os.environ["OMP_NUM_THREADS"] = "1"
    try:
        import xraylib_np  # noqa: F401
    finally:
        if before is None:
            del os.environ["OMP_NUM_THREADS"]
        else:
            os.environ["OMP_NUM_THREADS"] = before


_load_with_one_thread()

import xraylib as xraylib  # noqa: E402
import xraylib_np as xraylib_np  # noqa: E402
