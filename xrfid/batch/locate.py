"""Finding the run in an HDF5 file: which dataset holds the spectra, and what its channels mean."""

from __future__ import annotations

import io
import os
from pathlib import Path
from typing import Any

import h5py
import hdf5plugin  # noqa: F401  # registers the common compression filters with the HDF5 library
import numpy as np

from xrfid.errors import InputError, did_you_mean
from xrfid.formats.hdf5 import energy_axis
from xrfid.spectrum import EnergyScale

_FEWEST_CHANNELS = 32


class PaddedFile(io.RawIOBase):
    """A file that was cut off, read as if zeros followed, so that what is left of it can be opened."""

    def __init__(self, path: Path) -> None:
        super().__init__()
        self._file = path.open("rb")
        self._at = 0

    def seek(self, offset: int, whence: int = os.SEEK_SET) -> int:
        """Move; the end lies far beyond what any file holds."""
        base = {os.SEEK_SET: 0, os.SEEK_CUR: self._at, os.SEEK_END: 1 << 50}[whence]
        self._at = base + offset
        return self._at

    def tell(self) -> int:
        """Position from the start."""
        return self._at

    def readinto(self, buffer: Any) -> int:
        """Fill the whole buffer, with zeros where the file has ended."""
        view = memoryview(buffer).cast("B")
        self._file.seek(self._at)
        got = self._file.readinto(view)
        view[got:] = bytes(len(view) - got)
        self._at += len(view)
        return len(view)

    def readable(self) -> bool:
        """Yes."""
        return True

    def seekable(self) -> bool:
        """Yes."""
        return True

    def close(self) -> None:
        """Close the file below."""
        self._file.close()
        super().close()


def open_input(path: Path) -> tuple[h5py.File, bool]:
    """Open a run for reading; also one that was cut off.

    Returns
    -------
    file : h5py.File
    truncated : bool

    Raises
    ------
    InputError
        If it cannot be read or is no HDF5 file.
    """
    try:
        return h5py.File(path, "r", locking="best-effort"), False
    except FileNotFoundError:
        raise InputError(str(path), "does not exist", "give an HDF5 file with a stack of spectra") from None
    except OSError as error:
        if "truncated file" not in str(error):
            raise InputError(str(path), f"cannot be read as HDF5 ({error})", "give an HDF5 file") from None
    try:
        return h5py.File(PaddedFile(path), "r"), True
    except OSError as error:
        raise InputError(str(path), f"was cut off, and what is left cannot be opened ({error})",
                         "copy the file again") from None  # fmt: skip


def find_datasets(file: h5py.File, path: Path, name: str | None) -> tuple[str, ...]:
    """Return the names of the datasets to be summed; several are given as ``"a,b"``.

    Without a name the default signal of the file is taken, or the one largest stack of numbers.

    Raises
    ------
    InputError
        If a name leads nowhere, or nothing or several things could be meant.
    """
    stacks = _stacks(file)
    if name is not None:
        return tuple(_named(file, path, part.strip(), stacks) for part in name.split(","))
    if not stacks:
        raise InputError(str(path), "holds no stack of spectra (numbers, at least two axes, channels last)",
                         "give --dataset")  # fmt: skip
    signals = [s for s in stacks if _is_signal(file[s])]
    pool = signals or stacks
    largest = max(file[s].size for s in pool)
    best = [s for s in pool if file[s].size == largest]
    if len(best) > 1:
        remedy = f"give --dataset {best[0]}, or --dataset {best[0]},{best[1]} to sum them"
        raise InputError(str(path), f"{len(best)} datasets could be the run: {', '.join(best[:6])}", remedy)
    return (best[0],)


def _stacks(file: h5py.File) -> list[str]:
    found: list[str] = []

    def look(name: str, item: Any) -> None:
        if isinstance(item, h5py.Dataset) and _is_stack(item):
            found.append(f"/{name}")

    file.visititems(look)
    return found


def _is_stack(item: h5py.Dataset) -> bool:
    return item.dtype.kind in "iuf" and item.ndim >= 2 and item.shape[-1] >= _FEWEST_CHANNELS and item.size > 0


def _is_signal(item: h5py.Dataset) -> bool:
    return _text(item.parent.attrs.get("signal")) == item.name.rsplit("/", 1)[-1] or "signal" in item.attrs


def _named(file: h5py.File, path: Path, name: str, stacks: list[str]) -> str:
    item = file.get(name)
    if item is None:
        raise InputError(str(path), f'has no dataset "{name}"', did_you_mean(f"/{name.lstrip('/')}", stacks))
    if not isinstance(item, h5py.Dataset) or not _is_stack(item):
        shape = getattr(item, "shape", "a group")
        raise InputError(f"{path}:{name}", f"is no stack of spectra ({shape})", did_you_mean(name, stacks))
    return str(item.name)


def run_scale(dataset: h5py.Dataset) -> EnergyScale | None:
    """Return the scale of a dataset's last axis, as the reader of single spectra finds it."""
    return energy_axis(dataset)[0]


def _text(value: Any) -> str:
    """Turn what HDF5 attributes hold into text."""
    if isinstance(value, np.ndarray) and value.size == 1:
        value = value.reshape(-1)[0]
    return value.decode("utf-8", "replace") if isinstance(value, bytes) else str(value if value is not None else "")
