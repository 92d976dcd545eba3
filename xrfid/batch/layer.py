"""Reading boxes of one dataset quickly and from several threads at once.

The HDF5 library does one thing at a time. Where a dataset's bytes lie plainly in the file, or in
chunks packed with deflate only, they are read and unpacked here, outside its lock; everything else
goes through the library.
"""

from __future__ import annotations

import itertools
import os
import zlib
from collections.abc import Callable, Iterator
from typing import Any, cast

import h5py
import numpy as np
from numpy.typing import NDArray

Box = tuple[slice, ...]
Unpack = Callable[[bytes, int], bytes]


def _inflater() -> tuple[Unpack, type[Exception]]:
    """Return the quickest deflate decoder installed, and its error; the extra `speed` brings one twice as quick."""
    try:
        from isal import igzip_lib, isal_zlib
    except ImportError:
        return lambda packed, size: zlib.decompress(packed, bufsize=size), zlib.error
    error = cast("type[Exception]", igzip_lib.IsalError)
    return lambda packed, size: isal_zlib.decompress(packed, bufsize=size), error


_DEFLATE, _SHUFFLE = h5py.h5z.FILTER_DEFLATE, h5py.h5z.FILTER_SHUFFLE


class Layer:
    """One dataset, or one detector of a dataset whose first axis counts detectors.

    Parameters
    ----------
    dataset : h5py.Dataset
    handle : int
        File descriptor of the same file, for reading past the library; -1 if that cannot be done.
    detector : int, optional
        Index on the first axis.
    ends_at : int, optional
        Bytes that the file really has, if it was cut off.
    """

    def __init__(
        self, dataset: h5py.Dataset, handle: int, detector: int | None = None, ends_at: int | None = None
    ) -> None:
        self._dataset, self._handle, self._ends_at = dataset, handle, ends_at
        self._prefix: Box = () if detector is None else (slice(detector, detector + 1),)
        own = len(self._prefix)
        self.shape: tuple[int, ...] = dataset.shape[own:]
        self.dtype = np.dtype(dataset.dtype)
        self.chunks: tuple[int, ...] | None = None if dataset.chunks is None else dataset.chunks[own:]
        self._inflate, self._inflate_error = _inflater()
        plain = handle >= 0 and not dataset.is_virtual and not dataset.external and dataset.file.userblock_size == 0
        self._offset = dataset.id.get_offset() if plain and dataset.chunks is None else None
        self._filters = _filters(dataset) if plain and dataset.chunks is not None else None

    def read(self, box: Box) -> tuple[NDArray[Any], NDArray[np.bool_]]:
        """Read a box of spectra.

        Parameters
        ----------
        box : tuple of slice
            One for each leading axis, with start and stop.

        Returns
        -------
        counts : ndarray, shape (..., n_channels)
            In the file's own number type; 0 where it could not be read.
        lost : ndarray of bool, shape (...)
            Spectra that could not be read.
        """
        whole = (*self._prefix, *box, slice(0, self.shape[-1]))
        extent = tuple(s.stop - s.start for s in whole)
        lost = np.zeros(extent[:-1], dtype=bool)
        if self._offset is not None:
            counts = self._plain(whole, extent, lost)
        elif self._filters is not None:
            counts = np.empty(extent, self.dtype)
            self._chunked(whole, counts, lost)
        else:
            counts = self._through_library(whole, extent, lost)
        own = len(self._prefix)
        inner = extent[own:]
        return counts.reshape(inner), lost.reshape(inner[:-1])

    def spectrum(self, index: tuple[int, ...]) -> NDArray[np.float64]:
        """Read one spectrum, shape (n_channels,)."""
        counts, _ = self.read(tuple(slice(i, i + 1) for i in index))
        return np.asarray(counts.reshape(-1), dtype=float)

    def _plain(self, whole: Box, extent: tuple[int, ...], lost: NDArray[np.bool_]) -> NDArray[Any]:
        """Read bytes that lie in the file as they are."""
        assert self._offset is not None
        counts = np.zeros(extent, self.dtype)
        full = self._dataset.shape
        # axes from the last that is cut on lie in one piece
        cut = max((a for a in range(len(full)) if extent[a] != full[a]), default=0)
        strides = np.cumprod([1, *full[:0:-1]])[::-1]
        rows = counts.reshape(-1, full[-1])
        flags = lost.reshape(-1)
        per_piece = int(np.prod(extent[cut:-1], dtype=np.int64))
        for piece, lead in enumerate(np.ndindex(*extent[:cut])):
            at = [whole[a].start + lead[a] for a in range(cut)] + [whole[a].start for a in range(cut, len(full))]
            offset = self._offset + int(np.dot(at, strides)) * self.dtype.itemsize
            target = rows[piece * per_piece : (piece + 1) * per_piece]
            got = _read_into(self._handle, target, offset)
            complete = got // (full[-1] * self.dtype.itemsize)
            target[complete:] = 0
            flags[piece * per_piece + complete : (piece + 1) * per_piece] = True
        return counts

    def _chunked(self, whole: Box, counts: NDArray[Any], lost: NDArray[np.bool_]) -> None:
        """Read and unpack chunk by chunk, outside the library's lock."""
        for corner, inside, target in _overlaps(whole, self._dataset.chunks, self._dataset.shape):
            try:
                chunk = self._chunk(corner)
            except (OSError, RuntimeError, self._inflate_error, ValueError, EOFError):
                counts[target], lost[target[:-1]] = 0, True
                continue
            counts[target] = self._dataset.fillvalue if chunk is None else chunk[inside]

    def _chunk(self, corner: tuple[int, ...]) -> NDArray[Any] | None:
        """Unpack one chunk; None if it was never written."""
        info = self._dataset.id.get_chunk_info_by_coord(corner)
        if info.byte_offset is None:
            return None
        packed = os.pread(self._handle, info.size, info.byte_offset)
        if len(packed) != info.size:
            raise EOFError("the file ends inside a chunk")
        assert self._filters is not None
        shape, size = self._dataset.chunks, int(np.prod(self._dataset.chunks)) * self.dtype.itemsize
        for position in range(len(self._filters) - 1, -1, -1):
            if info.filter_mask & (1 << position):
                continue
            packed = (
                self._inflate(packed, size) if self._filters[position] == _DEFLATE else _unshuffled(packed, self.dtype)
            )
        return np.frombuffer(packed, self.dtype).reshape(shape)

    def _through_library(self, whole: Box, extent: tuple[int, ...], lost: NDArray[np.bool_]) -> NDArray[Any]:
        """Let the HDF5 library read; where it fails, chunk by chunk, so that only bad chunks are lost."""
        counts = np.zeros(extent, self.dtype)
        try:
            if self._ends_at is None:
                self._dataset.read_direct(counts, whole)
                return counts
        except OSError:
            counts[...] = 0
        pieces = self._dataset.chunks or (1,) * (len(extent) - 1) + extent[-1:]
        for corner, _, target in _overlaps(whole, pieces, self._dataset.shape):
            where = tuple(slice(w.start + t.start, w.start + t.stop) for w, t in zip(whole, target, strict=True))
            try:
                if self._is_cut_off(corner):
                    raise EOFError("the file ends before or inside this chunk")
                counts[target] = self._dataset[where]
            except (OSError, RuntimeError, EOFError):
                lost[target[:-1]] = True
        return counts

    def _is_cut_off(self, corner: tuple[int, ...]) -> bool:
        """Whether a chunk lies beyond the end of a truncated file, where zeros would be read."""
        if self._ends_at is None or self._dataset.chunks is None:
            return False
        info = self._dataset.id.get_chunk_info_by_coord(corner)
        return info.byte_offset is not None and info.byte_offset + info.size > self._ends_at


def _filters(dataset: h5py.Dataset) -> tuple[int, ...] | None:
    """Return the filters in the order of packing, if they are shuffle and deflate only."""
    plist = dataset.id.get_create_plist()
    codes = tuple(plist.get_filter(i)[0] for i in range(plist.get_nfilters()))
    return codes if set(codes) <= {_DEFLATE, _SHUFFLE} else None


def _unshuffled(packed: bytes, dtype: np.dtype[Any]) -> bytes:
    """Undo the byte shuffle: all first bytes, then all second bytes, ... back to numbers."""
    return bytes(np.frombuffer(packed, np.uint8).reshape(dtype.itemsize, -1).T.tobytes())


def _read_into(handle: int, target: NDArray[Any], offset: int) -> int:
    """Read until the target is full or the file ends; return the bytes read."""
    view = target.view(np.uint8).reshape(-1).data
    got = 0
    while got < len(view):
        n = os.preadv(handle, [view[got:]], offset + got)
        if n == 0:
            break
        got += n
    return got


def _overlaps(whole: Box, chunks: tuple[int, ...], shape: tuple[int, ...]
              ) -> Iterator[tuple[tuple[int, ...], Box, Box]]:  # fmt: skip
    """Each chunk that a box touches: its corner, the part of it that is wanted, and where that part goes."""
    axes = [range(s.start // c, -(-s.stop // c)) for s, c in zip(whole, chunks, strict=True)]
    for place in itertools.product(*axes):
        corner = tuple(p * c for p, c in zip(place, chunks, strict=True))
        low = [max(k, s.start) for k, s in zip(corner, whole, strict=True)]
        high = [min(k + c, s.stop, n) for k, c, s, n in zip(corner, chunks, whole, shape, strict=True)]
        inside = tuple(slice(a - k, b - k) for a, b, k in zip(low, high, corner, strict=True))
        target = tuple(slice(a - s.start, b - s.start) for a, b, s in zip(low, high, whole, strict=True))
        yield corner, inside, target
