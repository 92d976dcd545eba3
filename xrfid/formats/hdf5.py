"""HDF5 and NeXus: NXfluo, NXdata with `signal` and `axes`, or any dataset whose last axis is channels."""

from __future__ import annotations

import io
import re
from collections.abc import Iterator, Sequence
from pathlib import Path
from typing import Any

import h5py
import numpy as np
from numpy.typing import NDArray

from xrfid.errors import InputError, did_you_mean
from xrfid.formats.decode import FEWEST_CHANNELS, MOST_CHANNELS, checked_counts
from xrfid.spectrum import EnergyScale, Spectrum

_BLOCK_BYTES = 32 * 2**20
_MOST_VALUES = 4e10
"""A stack declared larger than this is damaged, or belongs to `xrfid batch`."""
_LINEAR_TO_CHANNELS = 0.05
"""An energy axis counts as polynomial if it is met to this share of a channel."""
_KEV = {"kev": 1.0, "ev": 1e-3, "mev": 1e3}


def read(source: Path | io.BytesIO, dataset: str | None, name: str | None = None) -> tuple[Spectrum, ...]:
    """Read the spectra of an HDF5 file.

    Parameters
    ----------
    source : Path or BytesIO
    dataset : str, optional
        Path of a dataset; ``/entry/data/counts[3,7]`` picks one point of a stack, without an index a
        stack is summed. If not given, the file's default signal, or all that hold spectra.
    name : str, optional
        What to call the file in messages.

    Raises
    ------
    InputError
        If nothing in it is a spectrum, `dataset` leads nowhere, or what is stored is damaged.
    """
    called = name or str(source)
    try:
        with h5py.File(source, "r", **({} if isinstance(source, io.BytesIO) else {"locking": False})) as file:
            if dataset is not None:
                path, index = _split_index(dataset)
                return (_spectrum(called, _named(called, file, path), index, dataset),)
            found = _default(file) or _candidates(file)
            if not found:
                raise InputError(called, "holds no dataset of numbers with channels as its last axis",
                                 f"at least {FEWEST_CHANNELS} channels are needed")  # fmt: skip
            several = len(found) > 1
            return tuple(_spectrum(called, file[p], None, p if several else None) for p in found)
    except (OSError, RuntimeError, KeyError) as error:
        if isinstance(error, InputError):
            raise
        raise InputError(called, f"cannot be read as HDF5 ({error})", "the file is damaged or cut short") from None


def _split_index(dataset: str) -> tuple[str, tuple[int, ...] | None]:
    match = re.fullmatch(r"(.*?)\[([\d\s,]+)\]", dataset.strip())
    if match is None:
        return dataset.strip(), None
    return match.group(1), tuple(int(i) for i in match.group(2).split(",") if i.strip())


def _named(called: str, file: h5py.File, path: str) -> h5py.Dataset:
    there = _candidates(file)
    item = file.get(path)
    if isinstance(item, h5py.Group):
        signal = _text(item.attrs.get("signal")) or "data"
        item = item.get(signal)
    if item is None:
        tails = [p for p in there if p.rsplit("/", 1)[-1] == path]
        if len(tails) == 1:
            return file[tails[0]]
        raise InputError(called, f'holds no dataset "{path}"', did_you_mean(path, there) if there else "it holds none")
    if not isinstance(item, h5py.Dataset) or not _holds_spectra(item):
        raise InputError(f"{called}, {path}", f"is no spectrum (shape {getattr(item, 'shape', '?')})",
                         did_you_mean(path, there) if there else "numbers with channels as the last axis are needed")  # fmt: skip
    return item


def _candidates(file: h5py.File) -> list[str]:
    """Paths of all datasets that can be spectra, axes left out."""
    found: list[str] = []

    def look(path: str, item: Any) -> None:
        if isinstance(item, h5py.Dataset) and _holds_spectra(item) and not _is_axis(item):
            found.append(f"/{path}")

    file.visititems(look)
    return found


def _holds_spectra(item: h5py.Dataset) -> bool:
    return item.dtype.kind in "iuf" and item.ndim >= 1 and FEWEST_CHANNELS <= item.shape[-1] <= MOST_CHANNELS


def _is_axis(item: h5py.Dataset) -> bool:
    tail = item.name.rsplit("/", 1)[-1].lower()
    return item.ndim == 1 and (tail.startswith(("energy", "channel", "sigma", "error")) or _text(
        item.attrs.get("units")
    ).lower() in _KEV)  # fmt: skip


def _default(file: h5py.File) -> list[str]:
    """The dataset that the file's chain of `default` and `signal` attributes leads to."""
    group: Any = file
    for _ in range(8):
        signal = _text(group.attrs.get("signal"))
        item = group.get(signal) if signal else None
        if isinstance(item, h5py.Dataset) and _holds_spectra(item):
            return [] if len(_entries(file)) > 1 and group.name.count("/") < 3 and file.attrs.get("default") is None \
                else [str(item.name)]  # fmt: skip
        step = _text(group.attrs.get("default"))
        nxt = group.get(step) if step else None
        if not isinstance(nxt, h5py.Group):
            return []
        group = nxt
    return []


def _entries(file: h5py.File) -> list[str]:
    return [k for k, v in file.items() if isinstance(v, h5py.Group) and _text(v.attrs.get("NX_class")) == "NXentry"]


def _spectrum(called: str, item: h5py.Dataset, index: tuple[int, ...] | None, dataset: str | None) -> Spectrum:
    where = f"{called}, {item.name}"
    said: list[str] = []
    if index is not None:
        if len(index) != item.ndim - 1 or any(i >= n for i, n in zip(index, item.shape[:-1], strict=False)):
            raise InputError(where, f"has no point {list(index)} (leading shape {item.shape[:-1]})", "counting begins at 0")
        counts = np.asarray(item[index], dtype=float)
    elif item.ndim == 1:
        counts = np.asarray(item[()], dtype=float)
    else:
        counts = _summed(where, item)
        points = int(np.prod(item.shape[:-1]))
        said.append(f"{item.name} is a stack of {points} spectra: their sum is taken (one point: {item.name}[i,j])")
    counts, more = checked_counts(where, counts)
    scale, why = energy_axis(item)
    live, real = _time(item, "live_time", index, "count_time"), _time(item, "real_time", index)
    title = _title(item)
    return Spectrum(counts, scale, live, real, title, called, dataset, _metadata(item), (*said, *more, *why))


def _summed(where: str, item: h5py.Dataset) -> NDArray[np.float64]:
    """Sum a stack over all leading axes, a block at a time; unusable points are left out."""
    n = item.shape[-1]
    if not 0 < float(item.size) < _MOST_VALUES:
        raise InputError(where, f"declares {float(item.size):.3g} values", "use xrfid batch for a run of that size")
    stored = item.id.get_storage_size()
    if item.chunks is None and item.compression is None and item.size > 1e6 and stored < 0.5 * item.size * item.dtype.itemsize:
        raise InputError(where, "declares more values than the file holds", "the file is damaged or cut short")
    total = np.zeros(n)
    for block in _blocks(item):
        part = np.asarray(block, dtype=float).reshape(-1, n)
        total += part[np.all(np.isfinite(part) & (part >= 0), axis=1)].sum(axis=0)
    return total


def _blocks(item: h5py.Dataset) -> Iterator[NDArray[Any]]:
    """Slabs along the first axis (and the second, if one row alone is too large) of bounded size."""
    row = max(int(np.prod(item.shape[1:])) * item.dtype.itemsize, 1)
    step = max(_BLOCK_BYTES // row, 1)
    if row <= 4 * _BLOCK_BYTES or item.ndim == 2:
        for start in range(0, item.shape[0], step):
            yield item[start : start + step]
        return
    inner = max(_BLOCK_BYTES // max(row // item.shape[1], 1), 1)
    for i in range(item.shape[0]):
        for start in range(0, item.shape[1], inner):
            yield item[i, start : start + inner]


def energy_axis(item: h5py.Dataset) -> tuple[EnergyScale | None, list[str]]:
    """Scale of a dataset's last axis: from the axis its group names, a neighbour "energy", or a calibration.

    Returns
    -------
    scale : EnergyScale or None
    said : list of str
        What had to be assumed.
    """
    group, n = item.parent, item.shape[-1]
    axes = group.attrs.get("axes")
    names = [_text(a) for a in np.atleast_1d(axes)] if axes is not None else []
    for name in [*names[-1:], "energy", "energy_kev"]:
        axis = group.get(name)
        if isinstance(axis, h5py.Dataset) and axis.shape in ((n,), (n + 1,)) and axis.dtype.kind in "iuf":
            scale, said = _polynomial(np.asarray(axis[()], dtype=float), n, _text(axis.attrs.get("units")), name)
            if scale is not None:
                return scale, said
    known = group.get("calibration")
    if isinstance(known, h5py.Dataset) and known.size in (2, 3):
        c = np.asarray(known[()], dtype=float).ravel()
        if c[1] > 0 and np.all(np.isfinite(c)):
            return EnergyScale(*map(float, c)), ["energy scale from the calibration stored beside the counts"]
    return None, []


def _polynomial(values: NDArray[np.float64], n: int, units: str, name: str) -> tuple[EnergyScale | None, list[str]]:
    """Describe an energy axis (centres, or edges if one longer) by offset, gain and quadratic term."""
    said: list[str] = []
    kev = _KEV.get(units.lower(), 1.0 if name == "energy_kev" else None)
    if kev is None and "energ" in name.lower() and not units:
        kev = 1e-3 if values.max(initial=0.0) > 1000.0 else 1.0
        said.append(f"the energy axis states no unit: taken as {'eV' if kev < 1 else 'keV'}")
    if kev is None or not np.all(np.isfinite(values)) or not np.all(np.diff(values) > 0):
        return None, []
    channel = np.arange(n) if values.size == n else np.arange(n + 1) - 0.5
    for degree in (1, 2):
        c = np.polynomial.Polynomial.fit(channel, values * kev, degree).convert().coef
        left = np.abs(np.polynomial.polynomial.polyval(channel, c) - values * kev).max()
        if left < _LINEAR_TO_CHANNELS * c[1] and c[1] > 0:
            return EnergyScale(float(c[0]), float(c[1]), float(c[2]) if degree == 2 else 0.0), said
    return None, []


def _time(item: h5py.Dataset, name: str, index: tuple[int, ...] | None, other: str = "") -> float | None:
    """Live or real time in seconds, of one point or of all together."""
    for group in (item.parent, item.parent.parent):
        for key in (name, other):
            found = group.get(key) if key else None
            if not isinstance(found, h5py.Dataset) or found.dtype.kind not in "iuf" or found.size > 1e8:
                continue
            values = np.asarray(found[()], dtype=float)
            if values.ndim == 0:
                points = 1 if index is not None or item.ndim == 1 else int(np.prod(item.shape[:-1]))
                value = float(values) * points
            elif index is not None and values.shape == item.shape[:-1]:
                value = float(values[index])
            else:
                value = float(np.nansum(values))
            return value if value > 0 and np.isfinite(value) else None
    return None


def _title(item: h5py.Dataset) -> str:
    for group in (item.parent, item.parent.parent):
        found = group.get("title")
        if isinstance(found, h5py.Dataset) and found.shape == () and found.dtype.kind in "OS":
            return _text(found[()])
    return _text(item.attrs.get("long_name")) or _text(item.attrs.get("title"))


def _metadata(item: h5py.Dataset) -> dict[str, Any]:
    found: dict[str, Any] = {}
    for group in (item.parent, item.parent.parent):
        for key in ("voltage_kv", "current_ma", "start_time"):
            value = group.get(key)
            if isinstance(value, h5py.Dataset) and value.shape == ():
                raw = value[()]
                found.setdefault(key, float(raw) if np.isscalar(raw) and not isinstance(raw, (bytes, str)) else _text(raw))
    return found


def _text(value: Any) -> str:
    """Turn what HDF5 attributes hold into text."""
    if isinstance(value, np.ndarray) and value.size == 1:
        value = value.reshape(-1)[0]
    if isinstance(value, bytes):
        return value.decode("utf-8", "replace")
    return "" if value is None else str(value)


def write(spectra: Sequence[Spectrum], path: Path) -> None:
    """Write spectra as NeXus entries: counts, energy axis, times and title of each."""
    with h5py.File(path, "w") as file:
        file.attrs["NX_class"] = "NXroot"
        if len(spectra) == 1:
            file.attrs["default"] = "entry"
        for number, s in enumerate(spectra, start=1):
            entry = file.create_group("entry" if len(spectra) == 1 else f"entry{number}")
            entry.attrs.update({"NX_class": "NXentry", "default": "data"})
            entry["title"] = s.title
            data = entry.create_group("data")
            data.attrs.update({"NX_class": "NXdata", "signal": "data"})
            data.create_dataset("data", data=s.counts).attrs["units"] = "counts"
            if s.scale is not None:
                data.attrs["axes"] = ["energy"]
                data.create_dataset("energy", data=s.energy_kev).attrs["units"] = "keV"
            for key, value in (("live_time", s.live_time_s), ("real_time", s.real_time_s),
                               ("voltage_kv", s.metadata.get("voltage_kv"))):  # fmt: skip
                if value is not None:
                    entry[key] = float(value)
