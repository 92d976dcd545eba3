"""HDF5 and NeXus: NXfluo, NXdata with `signal` and `axes`, or any dataset whose last axis is channels."""

from __future__ import annotations

import io
import re
from collections.abc import Iterator, Sequence
from itertools import product
from math import prod
from pathlib import Path
from typing import Any

import h5py
import numpy as np
from numpy.typing import NDArray

from xrfid.errors import InputError, did_you_mean
from xrfid.formats.decode import FEWEST_CHANNELS, MOST_CHANNELS, checked_counts
from xrfid.spectrum import EnergyScale, Spectrum

_BLOCK_VALUES = 2 * 2**20
"""Values held at a time while a stack is summed: 16 MB as float64."""
_MOST_VALUES = 4e10
"""A stack declared larger than this is damaged, or belongs to `xrfid batch`."""
_LARGEST_CHUNK_BYTES = 256 * 2**20
"""HDF5 unpacks whole chunks; a small file can declare chunks of 4 GB."""
_MOST_TIMES = 1e8
_LINEAR_TO_CHANNELS = 0.05
"""An energy axis counts as polynomial if it is met to this share of a channel."""
_KEV = {"kev": 1.0, "ev": 1e-3, "mev": 1e3}
_BUILT_IN_FILTERS = {*range(1, 256), 32000}
_DAMAGED = (OSError, RuntimeError, KeyError, ValueError, TypeError, MemoryError, OverflowError)
"""What the library raises when a file is damaged, depending on where."""
_FACTS = ("voltage_kv", "current_ma", "anode", "fwhm_mn_ka_ev", "start_time", "date", "time")


def read(source: Path | io.BytesIO, dataset: str | None, name: str | None = None) -> tuple[Spectrum, ...]:
    """Read the spectra of an HDF5 file.

    Parameters
    ----------
    source : Path or BytesIO
    dataset : str, optional
        Path (or its last part, or the title) of a dataset; ``/entry/data/counts[3,7]`` picks one point of
        a stack, without an index a stack is summed. If not given, the file's default signal, or all that
        hold spectra.
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
            found = _defaults(file) or _candidates(file)
            if not found:
                nothing = f"holds no dataset of numbers with channels as its last axis{_instead(file)}"
                needed = f"at least {FEWEST_CHANNELS} and at most {MOST_CHANNELS} channels are needed"
                raise InputError(called, nothing, needed)
            several = len(found) > 1
            return tuple(_spectrum(called, file[p], None, p if several else None) for p in found)
    except InputError:
        raise
    except _DAMAGED as error:
        raise InputError(called, f"cannot be read as HDF5 ({error})", "the file is damaged or cut short") from None


# ---------------------------------------------------------------------- which dataset
def _split_index(dataset: str) -> tuple[str, tuple[int, ...] | None]:
    match = re.fullmatch(r"(.*?)\[([\d\s,]+)\]", dataset.strip())
    if match is None:
        return dataset.strip(), None
    return match.group(1), tuple(int(i) for i in match.group(2).split(",") if i.strip())


def _named(called: str, file: h5py.File, path: str) -> h5py.Dataset:
    there = _candidates(file)
    if not path:  # only an index: a point of the one stack there is
        found = _defaults(file) or there
        if len(found) != 1:
            raise InputError(called, f"holds {len(found)} datasets that can be spectra", _hint(path, there))
        path = found[0]
    item = file.get(path)
    if isinstance(item, h5py.Group):
        item = _signal(item)
    if item is None:
        alike = [p for p in there if path in (p.rsplit("/", 1)[-1], _title(file[p]))]
        if len(alike) == 1:
            return file[alike[0]]
        raise InputError(called, f'holds no dataset "{path}"', _hint(path, there))
    if not isinstance(item, h5py.Dataset) or not _holds_spectra(item):
        raise InputError(
            f"{called}, {path}", f"is no spectrum (shape {getattr(item, 'shape', '?')})", _hint(path, there)
        )
    return item


def _hint(path: str, there: list[str]) -> str:
    if not there:
        return f"it holds none of numbers with at least {FEWEST_CHANNELS} channels"
    guess, known = did_you_mean(path, there), "known here: " + ", ".join(there)
    return known if guess == known else f"{guess} {known}"


def _candidates(file: h5py.File) -> list[str]:
    """Paths of all datasets that can be spectra, axes left out."""
    found: list[str] = []

    def look(path: str, item: Any) -> None:
        if isinstance(item, h5py.Dataset) and _holds_spectra(item) and not _is_axis(item):
            found.append(f"/{path}")

    file.visititems(look)
    return found


def _instead(file: h5py.File) -> str:
    """Return words about the largest dataset there is, for a file without any spectrum."""
    found: list[h5py.Dataset] = []
    file.visititems(lambda _, item: found.append(item) if isinstance(item, h5py.Dataset) and item.shape else None)
    if not found:
        return ""
    most = max(found, key=lambda item: float(item.size))
    return f" ({most.name} is {most.dtype} of shape {most.shape})"


def _holds_spectra(item: h5py.Dataset) -> bool:
    shape: tuple[int, ...] = item.shape or ()
    return item.dtype.kind in "iuf" and len(shape) >= 1 and FEWEST_CHANNELS <= shape[-1] <= MOST_CHANNELS


def _is_axis(item: h5py.Dataset) -> bool:
    tail = item.name.rsplit("/", 1)[-1].lower()
    units = _text(item.attrs.get("units")).lower()
    return item.ndim == 1 and (tail.startswith(("energy", "channel", "sigma", "error")) or units in _KEV)


def _defaults(file: h5py.File) -> list[str]:
    """Follow `default` and `signal`: the one dataset the file leads to, or the one of each NXentry."""
    starts = [file] if file.attrs.get("default") is not None else (_of_class(file, "NXentry") or [file])
    found = [_signal(start) for start in starts]
    return [str(item.name) for item in found if item is not None]


def _signal(group: h5py.Group) -> h5py.Dataset | None:
    """Return the dataset that a group's chain of `default` and `signal` ends at."""
    for _ in range(8):  # a damaged chain may lead round in a circle
        signal = _text(group.attrs.get("signal")) or next(
            (k for k, v in group.items() if isinstance(v, h5py.Dataset) and _text(v.attrs.get("signal")) == "1"), ""
        )
        item = group.get(signal) if signal else group.get("data") or group.get("counts")
        if isinstance(item, h5py.Dataset):
            return item if _holds_spectra(item) else None
        step = _text(group.attrs.get("default"))
        data = _of_class(group, "NXdata")
        following = group.get(step) if step else data[0] if len(data) == 1 else None
        if not isinstance(following, h5py.Group):
            return None
        group = following
    return None


def _of_class(group: h5py.Group, nexus: str) -> list[h5py.Group]:
    return [v for v in group.values() if isinstance(v, h5py.Group) and _text(v.attrs.get("NX_class")) == nexus]


# ---------------------------------------------------------------------- counts
def _spectrum(called: str, item: h5py.Dataset, index: tuple[int, ...] | None, dataset: str | None) -> Spectrum:
    where = f"{called}, {item.name}"
    said: list[str] = []
    _check_storage(where, item)
    if index is not None:
        shape = item.shape[:-1]
        if len(index) != len(shape) or any(i >= n for i, n in zip(index, shape, strict=True)):
            raise InputError(where, f"has no point {list(index)} (leading shape {shape})", "counting begins at 0")
        counts = np.asarray(item[index], dtype=float)
    elif item.ndim == 1:
        counts = np.asarray(item[()], dtype=float)
    else:
        counts, said = _summed(where, item)
    counts, more = checked_counts(where, counts)
    scale, why = energy_axis(item)
    live, about_live = _time(item, ("live_time", "count_time"), index)
    real, about_real = _time(item, ("real_time",), index)
    return Spectrum(counts, scale, live, real, _title(item), called, dataset, _metadata(item),
                    (*said, *more, *why, *about_live, *about_real))  # fmt: skip


def _check_storage(where: str, item: h5py.Dataset) -> None:
    """Refuse what would take absurd memory or time, before anything is read; load filters if needed."""
    if not 0 < float(item.size) < _MOST_VALUES:
        raise InputError(where, f"declares {float(item.size):.3g} values", "use xrfid batch for a run of that size")
    width = item.dtype.itemsize
    if item.chunks is not None and prod(item.chunks) * width > _LARGEST_CHUNK_BYTES:
        raise InputError(where, f"is stored in chunks of {prod(item.chunks) * width / 2**20:.0f} MB",
                         f"store it in chunks of at most {_LARGEST_CHUNK_BYTES // 2**20} MB")  # fmt: skip
    plain = item.chunks is None and not item.is_virtual and not item.external
    if plain and item.size > 1e6 and item.id.get_storage_size() < item.size * width:
        raise InputError(where, "declares more values than the file holds", "the file is damaged or cut short")
    plist = item.id.get_create_plist()
    filters = {plist.get_filter(i)[0] for i in range(plist.get_nfilters())}
    if filters - _BUILT_IN_FILTERS:
        import hdf5plugin  # noqa: F401  # registers the common compression filters with the HDF5 library


def _summed(where: str, item: h5py.Dataset) -> tuple[NDArray[np.float64], list[str]]:
    """Sum a stack over all leading axes, a block at a time; unusable points are left out and counted."""
    n = item.shape[-1]
    points, left_out = prod(item.shape[:-1]), 0
    total = np.zeros(n)
    for block in _blocks(item.shape, item.chunks):
        part = np.asarray(item[block], dtype=float).reshape(-1, n)
        usable = np.isfinite(part).all(axis=1) & (part >= 0).all(axis=1)
        left_out += int(np.sum(~usable))
        total += part.sum(axis=0) if usable.all() else part[usable].sum(axis=0)
    if left_out == points:
        raise InputError(where, "has no usable point", "counts must be finite and >= 0")
    example = ",".join("0" * (item.ndim - 1))
    said = [f"{item.name} is a stack of {points} spectra: their sum is taken (one point: {item.name}[{example}])"]
    if left_out:
        said.append(f"{left_out} of {points} points hold counts below 0 or not finite: left out of the sum")
    return total, said


def _blocks(shape: tuple[int, ...], chunks: tuple[int, ...] | None) -> Iterator[tuple[slice, ...]]:
    """Slices over the leading axes, of bounded size and along chunk borders, so that each chunk is unpacked once."""
    step = [min(c, s) for c, s in zip(chunks[:-1], shape[:-1], strict=True)] if chunks else [1] * (len(shape) - 1)
    for axis in reversed(range(len(step))):
        room = _BLOCK_VALUES // (prod(step) // step[axis] * shape[-1])
        # whole chunks where they fit, else part of one
        step[axis] = min(room // step[axis] * step[axis], shape[axis]) if room >= step[axis] else max(room, 1)
    for corner in product(*(range(0, n, s) for n, s in zip(shape[:-1], step, strict=True))):
        yield tuple(slice(i, i + s) for i, s in zip(corner, step, strict=True))


# ---------------------------------------------------------------------- energy
def energy_axis(item: h5py.Dataset) -> tuple[EnergyScale | None, list[str]]:
    """Scale of a dataset's last axis: a calibration beside it, the axis its group names, or a neighbour "energy".

    Returns
    -------
    scale : EnergyScale or None
    said : list of str
        What had to be assumed.
    """
    group, n = item.parent, item.shape[-1]
    scale, said = _calibration(group.get("calibration"))
    if scale is not None:
        return scale, said
    axes = group.attrs.get("axes", item.attrs.get("axes"))
    names = [a for part in np.atleast_1d(axes) for a in re.split(r"[:,]", _text(part))] if axes is not None else []
    for name in [*names[-1:], "energy", "energy_kev"]:
        axis = group.get(name) if name else None
        if isinstance(axis, h5py.Dataset) and axis.shape in ((n,), (n + 1,)) and axis.dtype.kind in "iuf":
            scale, said = _polynomial(np.asarray(axis[()], dtype=float), n, _text(axis.attrs.get("units")), name)
            if scale is not None:
                return scale, said
    return None, said


def _calibration(known: Any) -> tuple[EnergyScale | None, list[str]]:
    """Scale of a dataset of offset, slope and perhaps a quadratic term."""
    if not isinstance(known, h5py.Dataset) or known.dtype.kind not in "iuf" or known.shape not in ((2,), (3,)):
        return None, []
    c = np.asarray(known[()], dtype=float)
    if not (np.all(np.isfinite(c)) and c[1] > 0):
        return None, ["the calibration stored beside the counts is no rising line: left aside"]
    factor, said = _KEV.get(_text(known.attrs.get("units")).lower()), []
    if factor is None:
        factor = 1e-3 if c[1] > 0.5 else 1.0
        said.append(f"the calibration beside the counts states no unit: taken as {'eV' if factor < 1 else 'keV'}")
    return EnergyScale(*(float(v) * factor for v in c)), said


def _polynomial(values: NDArray[np.float64], n: int, units: str, name: str) -> tuple[EnergyScale | None, list[str]]:
    """Describe an energy axis (centres, or edges if one longer) by offset, gain and quadratic term."""
    said: list[str] = []
    kev = _KEV.get(units.lower(), 1.0 if name == "energy_kev" else None)
    if kev is None and "energ" in name.lower() and not units:
        kev = 1e-3 if values.max(initial=0.0) > 1000.0 else 1.0
        said.append(f"the energy axis states no unit: taken as {'eV' if kev < 1 else 'keV'}")
    if kev is None:
        return None, []
    if not np.all(np.isfinite(values)) or not np.all(np.diff(values) > 0):
        return None, [f'the axis "{name}" does not rise throughout: no energy scale is taken from it']
    channel = np.arange(n) if values.size == n else np.arange(n + 1) - 0.5
    for degree in (1, 2):
        c = np.polynomial.Polynomial.fit(channel, values * kev, degree).convert().coef
        c = np.pad(c, (0, 3 - c.size))
        left = np.abs(np.polynomial.polynomial.polyval(channel, c) - values * kev).max()
        if left < _LINEAR_TO_CHANNELS * c[1]:
            return EnergyScale(*map(float, c)), said
    return None, [f'the axis "{name}" is no polynomial of second degree: no energy scale is taken from it']


# ---------------------------------------------------------------------- what else is stated
def _time(item: h5py.Dataset, keys: tuple[str, ...], index: tuple[int, ...] | None) -> tuple[float | None, list[str]]:
    """Live or real time in seconds, of one point or of all together, and what was assumed of it."""
    leading = item.shape[:-1]
    points = 1 if index is not None else prod(leading)
    for key, group in product(keys, (item.parent, item.parent.parent)):
        found = group.get(key)
        if not isinstance(found, h5py.Dataset) or found.dtype.kind not in "iuf" or float(found.size or 0) > _MOST_TIMES:
            continue
        values = np.asarray(found[()], dtype=float)
        if values.shape not in ((), (1,), leading):
            continue
        said = [f'the time is the file\'s "{key}"'] if key == "count_time" else []
        if leading and values.shape == leading:
            value = float(values[index]) if index is not None else float(np.nansum(values))
        else:
            value = float(values.ravel()[0]) * points
            said += [f'the one "{key}" of the file is taken as that of each point'] if leading else []
        if value > 0 and np.isfinite(value):
            return value, said
    return None, []


def _title(item: h5py.Dataset) -> str:
    for group in (item.parent, item.parent.parent):
        found = group.get("title")
        if isinstance(found, h5py.Dataset) and found.shape == () and found.dtype.kind in "OS":
            return _text(found[()])
    return _text(item.attrs.get("long_name")) or _text(item.attrs.get("title"))


def _metadata(item: h5py.Dataset) -> dict[str, Any]:
    found: dict[str, Any] = {}
    for group, key in product((item.parent, item.parent.parent), _FACTS):
        value = group.get(key)
        if isinstance(value, h5py.Dataset) and value.shape == () and value.dtype.kind in "iufOS":
            raw = value[()]
            found.setdefault(key, float(raw) if value.dtype.kind in "iuf" else _text(raw))
    return found


def _text(value: Any) -> str:
    """Turn what HDF5 attributes hold into text."""
    if isinstance(value, np.ndarray) and value.size == 1:
        value = value.reshape(-1)[0]
    if isinstance(value, bytes):
        return value.decode("utf-8", "replace")
    return "" if value is None else str(value)


def write(spectra: Sequence[Spectrum], path: Path) -> None:
    """Write spectra as NeXus entries: counts, energy axis, calibration, times, title and facts of each."""
    with h5py.File(path, "w") as file:
        file.attrs["NX_class"] = "NXroot"
        if len(spectra) == 1:
            file.attrs["default"] = "entry"
        for number, s in enumerate(spectra, start=1):
            entry = file.create_group("entry" if len(spectra) == 1 else f"entry{number}")
            entry.attrs.update({"NX_class": "NXentry", "default": "data"})
            entry["title"] = s.title.replace("\x00", " ")
            data = entry.create_group("data")
            data.attrs.update({"NX_class": "NXdata", "signal": "data"})
            data.create_dataset("data", data=s.counts).attrs["units"] = "counts"
            if s.scale is not None:
                data.attrs["axes"] = ["energy"]
                data.create_dataset("energy", data=s.energy_kev).attrs["units"] = "keV"
                # the axis is for others; the coefficients bring the scale back to the last digit
                coefficients = [s.scale.offset_kev, s.scale.gain_kev, s.scale.quadratic_kev]
                data.create_dataset("calibration", data=coefficients).attrs["units"] = "keV"
            for key, value in (("live_time", s.live_time_s), ("real_time", s.real_time_s)):
                if value is not None:
                    entry.create_dataset(key, data=float(value)).attrs["units"] = "s"
            for key in _FACTS:
                if isinstance(value := s.metadata.get(key), (int, float, str)):
                    entry[key] = value
