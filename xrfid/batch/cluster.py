"""The same blocks fitted by the workers of a Dask cluster (extra `cluster`).

Workers open the input and the unfinished result by their paths, so both must lie where all of them
can read. Only this process writes. A worker that dies costs the blocks it was working on, which the
scheduler hands to another.
"""

from __future__ import annotations

from collections.abc import Callable
from functools import lru_cache
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

from xrfid.batch.engine import BlockResult, one_blas_thread
from xrfid.batch.plan import Plan
from xrfid.batch.stack import Place, Stack
from xrfid.batch.store import Part, read_plan
from xrfid.batch.work import fit_stack_block
from xrfid.errors import InputError, XrfidError

_RETRIES = 3
_CONNECT_S = 20


class Cluster:
    """Workers behind a Dask scheduler.

    Parameters
    ----------
    place : Place
        The run.
    address : str
        Of the scheduler, ``"tcp://host:8786"``.

    Raises
    ------
    InputError
        If `distributed` is not installed or the scheduler does not answer.
    """

    def __init__(self, place: Place, address: str) -> None:
        try:
            from distributed import Client
        except ImportError:
            raise InputError("--scheduler", "needs the package distributed", "pip install 'xrfid[cluster]'") from None
        try:
            connect: Any = Client
            self._client = connect(address, timeout=_CONNECT_S, set_as_default=False)
        except (OSError, ValueError) as error:
            raise InputError(f"scheduler {address}", f"does not answer ({error})", "is it running?") from None
        self._place = place
        self.n = max(sum(w["nthreads"] for w in self._client.scheduler_info(n_workers=-1)["workers"].values()), 1)

    def submit(self, part: Part, block: int, known: NDArray[np.float32]) -> Callable[[], BlockResult]:
        """Have a block fitted by some worker."""
        stamp = part.path.stat().st_ino
        future = self._client.submit(fit_remotely, self._place, str(part.path), stamp, block, known,
                                     pure=False, retries=_RETRIES)  # fmt: skip
        return lambda: _result(future, block)

    def close(self) -> None:
        """Take leave of the scheduler."""
        self._client.close()


def _result(future: Any, block: int) -> BlockResult:
    from distributed import CancelledError, KilledWorker

    try:
        found: BlockResult = future.result()
    except (KilledWorker, CancelledError) as error:
        raise XrfidError(f"block {block} could not be fitted by the cluster ({type(error).__name__}); "
                         "give the same command again to go on") from None  # fmt: skip
    return found


def fit_remotely(place: Place, part: str, stamp: int, block: int, known: NDArray[np.float32]) -> BlockResult:
    """Fit one block on a worker; input and plan stay open for the next one."""
    with one_blas_thread():
        return fit_stack_block(_stack(place), _plan(part, stamp), block, known)


@lru_cache(maxsize=2)
def _stack(place: Place) -> Stack:
    return Stack(place)


@lru_cache(maxsize=2)
def _plan(part: str, stamp: int) -> Plan:
    """Read the plan; `stamp` tells a second pass's file from the first's."""
    return read_plan(Path(part))
