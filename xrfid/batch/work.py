"""Having every block fitted, by threads of this process or by the workers of a cluster, in order."""

from __future__ import annotations

import os
import time
from collections import deque
from collections.abc import Callable, Iterator
from concurrent.futures import Future, ThreadPoolExecutor
from typing import Protocol

import numpy as np
from numpy.typing import NDArray

from xrfid.batch.engine import BlockResult, fit_block
from xrfid.batch.plan import Plan
from xrfid.batch.stack import Stack
from xrfid.batch.store import Part

Progress = Callable[[str, int, int], None]
"""Told what is being done, how many points are done, and of how many."""

_CHECKPOINT_S = 2.0
_AHEAD = 4
"""Blocks that may wait, per worker, so that nobody stands idle while one is written."""


class Workers(Protocol):
    """Somebody who fits blocks."""

    n: int

    def submit(self, part: Part, block: int, known: NDArray[np.float32]) -> Callable[[], BlockResult]:
        """Have a block fitted; the callable returned waits for its result."""


class Threads:
    """Threads of this process; reading, unpacking and matrix products let go of the interpreter's lock."""

    def __init__(self, stack: Stack, n: int | None = None) -> None:
        self.n = n or len(os.sched_getaffinity(0))
        self._stack = stack
        self._pool = ThreadPoolExecutor(self.n)

    def submit(self, part: Part, block: int, known: NDArray[np.float32]) -> Callable[[], BlockResult]:
        """Have a block fitted."""
        future: Future[BlockResult] = self._pool.submit(fit_stack_block, self._stack, part.plan, block, known)
        return future.result

    def close(self) -> None:
        """Drop what has not been begun."""
        self._pool.shutdown(wait=True, cancel_futures=True)


def fit_stack_block(stack: Stack, plan: Plan, block: int, known: NDArray[np.float32]) -> BlockResult:
    """Read and fit one block."""
    layers, lost = stack.read(block)
    return fit_block(plan, layers, lost, known, stack.signed)


def fit_blocks(stack: Stack, part: Part, workers: Workers, progress: Progress) -> None:
    """Fit all blocks that are not done yet and write them in order."""
    done = _points_before(stack, part.sums.count)
    last = time.monotonic()
    progress("fitting", done, stack.n_points)
    for block, result in _results(stack, part, workers):
        points = stack.flat(block)
        part.write(result, block, stack.runs(block), points)
        done += points.size
        if time.monotonic() - last > _CHECKPOINT_S:
            part.checkpoint()
            last = time.monotonic()
        progress("fitting", done, stack.n_points)
    part.checkpoint()


def _results(stack: Stack, part: Part, workers: Workers) -> Iterator[tuple[int, BlockResult]]:
    """Block after block with its result, several being worked on ahead."""
    waiting: deque[tuple[int, Callable[[], BlockResult]]] = deque()
    blocks = iter(range(part.sums.count, stack.n_blocks))
    while True:
        while len(waiting) < _AHEAD * workers.n:
            block = next(blocks, None)
            if block is None:
                break
            waiting.append((block, workers.submit(part, block, part.sums.highest.copy())))
        if not waiting:
            return
        block, wait = waiting.popleft()
        yield block, wait()


def _points_before(stack: Stack, block: int) -> int:
    """Points in the blocks before `block`."""
    return sum(length for b in range(block) for _, _, length in stack.runs(b))
