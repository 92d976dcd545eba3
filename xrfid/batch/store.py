"""The unfinished result: a file that a kill at any moment leaves readable and resumable.

The HDF5 file is laid out whole, with room for every number, before the first block is fitted; after
that its structure never changes. Blocks are written as plain bytes at the offsets that HDF5 states,
in the order of the blocks. Now and then everything written is forced to the disk, and only then a
small record of how many blocks that was, with the running sum and maximum and a checksum, goes into
one of two slots, turn and turn about. Whatever dies, one slot is whole, and what it vouches for is
on the disk.
"""

from __future__ import annotations

import errno
import fcntl
import json
import os
import zlib
from collections.abc import Iterable
from dataclasses import dataclass, fields
from pathlib import Path
from typing import Any

import h5py
import numpy as np
from numpy.typing import NDArray

from xrfid.batch.engine import BlockResult
from xrfid.batch.plan import Plan
from xrfid.errors import OutputError

DRIFT_FIELDS = ("offset_kev", "gain", "offset_sigma_kev", "gain_sigma")


@dataclass(eq=False)
class Sums:
    """Sum, maximum and who holds it (index among all points) over the points of the first `count` blocks."""

    count: int
    summed: NDArray[np.float64]
    highest: NDArray[np.float32]
    holder: NDArray[np.int64]

    @classmethod
    def nothing(cls, n_channels: int) -> Sums:
        """Start from no block."""
        return cls(0, np.zeros(n_channels), np.full(n_channels, -1.0, np.float32), np.full(n_channels, -1, np.int64))

    def add(self, result: BlockResult, points: NDArray[np.int64]) -> None:
        """Add the next block, whose points have the indices `points`."""
        self.count += 1
        self.summed += result.summed
        higher = (result.highest > self.highest) & (result.holder >= 0)
        self.highest[higher] = result.highest[higher]
        self.holder[higher] = points[result.holder[higher]]

    def packed(self) -> bytes:
        """Return a slot's bytes: checksum, count, arrays."""
        body = self.count.to_bytes(8, "little") + self.summed.tobytes() + self.highest.tobytes() + self.holder.tobytes()
        return zlib.crc32(body).to_bytes(8, "little") + body

    @classmethod
    def unpacked(cls, slot: bytes, n_channels: int) -> Sums | None:
        """Read a slot; None if it is not whole."""
        body = slot[8:]
        if zlib.crc32(body) != int.from_bytes(slot[:8], "little"):
            return None
        split = 8 + 8 * n_channels
        return cls(int.from_bytes(body[:8], "little"), np.frombuffer(body[8:split], float).copy(),
                   np.frombuffer(body[split : split + 4 * n_channels], np.float32).copy(),
                   np.frombuffer(body[split + 4 * n_channels :], np.int64).copy())  # fmt: skip


def _slot_size(n_channels: int) -> int:
    return 16 + 20 * n_channels


class Part:
    """An unfinished result, open for writing by this process alone.

    Attributes
    ----------
    header : dict
        What the run was begun with: fingerprint, stage, names.
    plan : Plan
    sums : Sums
        Over the blocks done; `sums.count` of them.
    """

    def __init__(self, path: Path) -> None:
        self.path = path
        self._handle = os.open(path, os.O_RDWR)
        try:
            fcntl.flock(self._handle, fcntl.LOCK_EX | fcntl.LOCK_NB)
            self._read()
        except BlockingIOError:
            self.close()
            raise OutputError(str(path), "another run is writing it", "wait, or choose another name") from None
        except (KeyError, ValueError, OSError) as error:
            self.close()
            raise OutputError(str(path), f"is no unfinished result ({error})", "remove or rename it") from None

    def _read(self) -> None:
        """Take up what is there: header, plan, where the arrays lie, and how far the work had come."""
        with h5py.File(self.path, "r", locking=False) as file:
            self.header: dict[str, Any] = json.loads(file.attrs["header"])
            self.plan = _read_plan(file)
            self._offsets = {name: file[name].id.get_offset() for name in _arrays(file)}
        self._flags, self._slots = self._offsets["entry/fit/done"], self._offsets["state"]
        n = self.plan.n_channels
        size = _slot_size(n)
        stored = [Sums.unpacked(os.pread(self._handle, size, self._slots + i * size), n) for i in (0, 1)]
        whole = [s for s in stored if s is not None]
        self.sums = max(whole, key=lambda s: s.count, default=Sums.nothing(n))
        self._turn = stored.index(self.sums) ^ 1 if self.sums in stored else 0

    def close(self) -> None:
        """Let go of the file."""
        if self._handle >= 0:
            os.close(self._handle)
            self._handle = -1

    def write(
        self,
        result: BlockResult,
        block: int,
        pieces: Iterable[tuple[int, int, int]],
        points: NDArray[np.int64],
    ) -> None:
        """Write the next block's numbers and count it in; it is vouched for at the next `checkpoint`."""
        per_point: dict[str, NDArray[Any]] = {
            "entry/fit/reduced_chi2": result.chi2,
            "entry/fit/largest_residual": result.residual,
            "entry/fit/largest_residual_energy": result.residual_kev,
            "entry/fit/status": result.status,
        }
        for name, area, sigma in zip(self.plan.names, result.area, result.sigma, strict=True):
            group = f"entry/series/{name.replace(' ', '_')}"
            per_point[f"{group}/area"], per_point[f"{group}/sigma"] = area, sigma
        for first, target, length in pieces:
            for name, values in per_point.items():
                self._put(values[first : first + length], self._offsets[name] + target * values.itemsize)
        drift = np.array([getattr(result.drift, f) for f in DRIFT_FIELDS])
        self._put(drift, self._offsets["entry/fit/drift"] + block * drift.nbytes)
        self.sums.add(result, points)

    def checkpoint(self) -> None:
        """Force to the disk what was written, then vouch for it."""
        self._sync()
        slot = np.frombuffer(self.sums.packed(), np.uint8)
        self._put(slot, self._slots + self._turn * slot.size)
        self._turn ^= 1
        self._sync()
        self._put(np.ones(self.sums.count, np.uint8), self._flags)

    def _sync(self) -> None:
        try:
            os.fdatasync(self._handle)
        except OSError as error:
            raise _cannot_write(self.path, error) from None

    def _put(self, values: NDArray[Any], offset: int) -> None:
        view = memoryview(np.ascontiguousarray(values).view(np.uint8).reshape(-1).data)
        try:
            while view:
                done = os.pwrite(self._handle, view, offset)
                view, offset = view[done:], offset + done
        except OSError as error:
            raise _cannot_write(self.path, error) from None


def create_part(path: Path, header: dict[str, Any], plan: Plan, shape: tuple[int, ...], n_blocks: int) -> Part:
    """Lay out an unfinished result; it appears whole, replacing one that is there."""
    new = path.with_name(path.name + ".new")
    try:
        with h5py.File(new, "w", locking=False) as file:
            file.attrs["header"] = json.dumps(header)
            _write_plan(file, plan)
            for name in plan.names:
                for kind in ("area", "sigma"):
                    _room(file, f"entry/series/{name.replace(' ', '_')}/{kind}", shape, np.float32)
            for name in ("reduced_chi2", "largest_residual", "largest_residual_energy"):
                _room(file, f"entry/fit/{name}", shape, np.float32)
            _room(file, "entry/fit/status", shape, np.uint8)
            _room(file, "entry/fit/done", (n_blocks,), np.uint8)
            _room(file, "entry/fit/drift", (n_blocks, len(DRIFT_FIELDS)), np.float64)
            _room(file, "state", (2 * _slot_size(plan.n_channels),), np.uint8)
        with new.open("rb+") as whole:
            os.fsync(whole.fileno())
        os.replace(new, path)
    except OSError as error:
        new.unlink(missing_ok=True)
        raise _cannot_write(path, error) from None
    return Part(path)


def read_plan(path: Path) -> Plan:
    """Read the plan of an unfinished result, say on another machine."""
    with h5py.File(path, "r", locking=False) as file:
        return _read_plan(file)


def _room(file: h5py.File, name: str, shape: tuple[int, ...], dtype: Any) -> None:
    """Make room in one piece for an array, without writing it."""
    layout = h5py.h5p.create(h5py.h5p.DATASET_CREATE)
    layout.set_layout(h5py.h5d.CONTIGUOUS)
    layout.set_alloc_time(h5py.h5d.ALLOC_TIME_EARLY)
    layout.set_fill_time(h5py.h5d.FILL_TIME_NEVER)
    group, _, last = name.rpartition("/")
    where = file.require_group(group) if group else file
    h5py.h5d.create(where.id, last.encode(), h5py.h5t.py_create(np.dtype(dtype)), h5py.h5s.create_simple(shape), layout)


def _arrays(file: h5py.File) -> list[str]:
    found: list[str] = []
    file.visititems(lambda name, item: found.append(name) if isinstance(item, h5py.Dataset) else None)
    return found


def _write_plan(file: h5py.File, plan: Plan) -> None:
    for field in fields(plan):
        value = getattr(plan, field.name)
        file[f"plan/{field.name}"] = list(value) if isinstance(value, tuple) else value


def _read_plan(file: h5py.File) -> Plan:
    stored = {name: item[()] for name, item in file["plan"].items()}
    stored["names"] = tuple(name.decode() for name in stored["names"])
    whole = {name: int(stored[name]) for name in ("n_continuum", "n_channels", "band")}
    return Plan(**stored | whole)


def _cannot_write(path: Path, error: OSError) -> OutputError:
    if error.errno in (errno.ENOSPC, errno.EDQUOT):
        return OutputError(
            str(path), "the disk is full", "make room and give the same command again: it goes on from here"
        )
    return OutputError(str(path), f"cannot be written ({error.strerror or error})", "choose another place")
