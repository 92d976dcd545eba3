"""A run as a lazy stack of spectra: any ``(..., channels)`` dataset, cut into blocks of points."""

from __future__ import annotations

import hashlib
import math
import os
from collections.abc import Iterator
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import h5py
import numpy as np
from numpy.typing import NDArray

from xrfid.batch.layer import Box, Layer
from xrfid.batch.locate import find_datasets, open_input, run_scale
from xrfid.errors import InputError
from xrfid.spectrum import EnergyScale

BLOCK_BYTES = 8 << 20
"""A block holds about so much, as 32-bit numbers; part of what a result must have in common to be resumed."""
_MOST_BYTES = 64 << 20
_SAMPLES, _SAMPLE_BYTES = 64, 1 << 16


@dataclass(frozen=True, slots=True)
class Place:
    """Where a run is: enough to open it again, here or on another machine that sees the same file.

    `detectors` lists indices on the first axis that are summed (empty: the first axis counts points).
    """

    path: str
    dataset: str | None = None
    detectors: tuple[int, ...] | str = ()


class Stack:
    """A run opened for reading.

    Parameters
    ----------
    place : Place

    Attributes
    ----------
    names : tuple of str
        Datasets in use.
    shape : tuple of int
        Shape of the points, channels left out.
    n_channels : int
    scale : EnergyScale or None
        What the file says of its channels.
    truncated : bool
        The file ends before its contents do.

    Raises
    ------
    InputError
        If the file or the dataset cannot be read or makes no sense.
    """

    def __init__(self, place: Place) -> None:
        self.place, path = place, Path(place.path)
        self._file, self.truncated = open_input(path)
        self._handle = os.open(path, os.O_RDONLY)
        self._ends_at = os.fstat(self._handle).st_size if self.truncated else None
        try:
            self._open(path)
        except BaseException:
            self.close()
            raise

    def _open(self, path: Path) -> None:
        """Find the datasets and decide how the points are cut into blocks."""
        try:
            self.names = find_datasets(self._file, path, self.place.dataset)
        except (RuntimeError, OSError) as error:
            raise InputError(str(path), f"is damaged ({error})", "copy the file again") from None
        datasets = [self._file[name] for name in self.names]
        shapes = {d.shape for d in datasets}
        if len(shapes) > 1:
            found = ", ".join(map(str, sorted(shapes)))
            raise InputError(str(path), f"the datasets to sum differ in shape: {found}", "choose equal ones")
        self._layers = [layer for d in datasets for layer in self._split(d)]
        first = self._layers[0]
        self.shape, self.n_channels = first.shape[:-1], first.shape[-1]
        self.scale: EnergyScale | None = run_scale(datasets[0])
        self.signed = any(layer.dtype.kind != "u" for layer in self._layers)
        self.dtype = first.dtype
        self._extent = _extent(self.shape, first.chunks, self.n_channels, first.dtype.itemsize)
        self._grid = tuple(-(-n // e) for n, e in zip(self.shape, self._extent, strict=True))

    def _split(self, dataset: h5py.Dataset) -> list[Layer]:
        """Return a dataset as one layer, or as one for each detector asked for."""
        wanted = self.place.detectors
        if not wanted:
            return [Layer(dataset, self._handle, None, self._ends_at)]
        source = f"{self.place.path}:{dataset.name}"
        if dataset.ndim < 3:
            raise InputError(source, f"has no axis of detectors (shape {dataset.shape})", "leave the detectors out")
        chosen = tuple(range(dataset.shape[0])) if isinstance(wanted, str) else wanted
        beyond = [i for i in chosen if not 0 <= i < dataset.shape[0]]
        if beyond:
            raise InputError(source, f"has no detector {beyond[0]}", f"choose from 0 to {dataset.shape[0] - 1}")
        return [Layer(dataset, self._handle, i, self._ends_at) for i in chosen]

    def __enter__(self) -> Stack:
        return self

    def __exit__(self, *_: object) -> None:
        self.close()

    def close(self) -> None:
        """Close the file."""
        self._file.close()
        os.close(self._handle)

    @property
    def n_points(self) -> int:
        """Number of spectra."""
        return math.prod(self.shape)

    @property
    def n_blocks(self) -> int:
        """Number of blocks that the points are cut into, the same for every run over this file."""
        return math.prod(self._grid)

    @property
    def points_per_block(self) -> int:
        """Points in a full block."""
        return math.prod(self._extent)

    def box(self, block: int) -> Box:
        """Return the points of a block as one slice per axis."""
        place = np.unravel_index(block, self._grid)
        return tuple(
            slice(int(p) * e, min((int(p) + 1) * e, n)) for p, e, n in zip(place, self._extent, self.shape, strict=True)
        )

    def runs(self, block: int) -> Iterator[tuple[int, int, int]]:
        """Pieces of a block that lie together among all points: (first in block, first of all, length)."""
        yield from runs(self.box(block), self.shape)

    def flat(self, block: int) -> NDArray[np.int64]:
        """Return the indices among all points of a block's points, shape (n,)."""
        grid = np.ix_(*[np.arange(s.start, s.stop) for s in self.box(block)])
        return np.asarray(np.ravel_multi_index(grid, self.shape)).reshape(-1)

    def read(self, block: int) -> tuple[list[NDArray[Any]], NDArray[np.bool_]]:
        """Read a block.

        Returns
        -------
        layers : list of ndarray, each of shape (n, n_channels)
            To be added up; in the file's own number type.
        lost : ndarray of bool, shape (n,)
            Points that could not be read.
        """
        found = [layer.read(self.box(block)) for layer in self._layers]
        lost = np.any([flags.reshape(-1) for _, flags in found], axis=0)
        return [counts.reshape(-1, self.n_channels) for counts, _ in found], lost

    def spectra(self, points: NDArray[np.integer[Any]]) -> NDArray[np.float64]:
        """Read single points, given by index among all; shape (n, n_channels)."""
        out = np.zeros((len(points), self.n_channels))
        for row, point in zip(out, points, strict=True):
            index = tuple(int(i) for i in np.unravel_index(int(point), self.shape))
            for layer in self._layers:
                row += layer.spectrum(index)
        return out

    def fingerprint(self) -> dict[str, Any]:
        """Return what tells this run from another: names, shapes, size, age and a sample of its bytes."""
        status = os.fstat(self._handle)
        digest = hashlib.sha256()
        last = max(status.st_size - _SAMPLE_BYTES, 0)
        for k in range(_SAMPLES):
            digest.update(os.pread(self._handle, _SAMPLE_BYTES, k * last // (_SAMPLES - 1)))
        return {
            "datasets": list(self.names),
            "shape": [*self.shape, self.n_channels],
            "dtype": str(self.dtype),
            "detectors": list(self.place.detectors),
            "bytes": status.st_size,
            "changed_ns": status.st_mtime_ns,
            "sample_sha256": digest.hexdigest(),
        }


def runs(box: Box, shape: tuple[int, ...]) -> Iterator[tuple[int, int, int]]:
    """Pieces of a box that are consecutive in C order: (first in box, first of all, length)."""
    extent = [s.stop - s.start for s in box]
    cut = max((a for a in range(len(shape)) if extent[a] != shape[a]), default=0)
    length = math.prod(extent[cut:])
    for piece, lead in enumerate(np.ndindex(*extent[:cut])):
        corner = [box[a].start + lead[a] for a in range(cut)] + [box[a].start for a in range(cut, len(shape))]
        yield piece * length, int(np.ravel_multi_index(corner, shape)), length


def _extent(shape: tuple[int, ...], chunks: tuple[int, ...] | None, n_channels: int, itemsize: int) -> tuple[int, ...]:
    """Points per block along each axis: whole chunks, about `BLOCK_BYTES`, last axes filled first."""
    step = [min(c, n) for c, n in zip(chunks or (1,) * (len(shape) + 1), shape, strict=False)]
    most = max(_MOST_BYTES // (n_channels * max(itemsize, 4)), 1)
    while math.prod(step) > most:  # chunks too large to hold: they will be unpacked more than once
        widest = step.index(max(step))
        step[widest] = -(-step[widest] // 2)
    target = max(BLOCK_BYTES // (n_channels * 4), 1)
    extent = list(step)
    for axis in range(len(shape) - 1, -1, -1):
        times = max(target // math.prod(extent), 1)
        extent[axis] = min(step[axis] * times, shape[axis])
        if extent[axis] < shape[axis]:
            break
    return tuple(extent)
