"""One BLAS thread: the fit's matrices are small, and its results must not depend on how many cores there are."""

from __future__ import annotations

from contextlib import AbstractContextManager
from functools import lru_cache
from typing import Any


def one_blas_thread() -> AbstractContextManager[Any]:
    """Return a context in which matrix products use one thread."""
    return _controller().limit(limits=1, user_api="blas")  # type: ignore[no-any-return]


@lru_cache(maxsize=1)
def _controller() -> Any:
    import scipy.linalg  # noqa: F401  # its own BLAS must be loaded before the libraries are listed
    from threadpoolctl import ThreadpoolController

    return ThreadpoolController()
