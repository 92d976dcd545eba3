"""The finished result: one NeXus-readable HDF5 file, written beside its place and moved there whole."""

from __future__ import annotations

import json
import math
from collections.abc import Callable, Iterator
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import h5py
import numpy as np
from numpy.typing import NDArray

from xrfid.batch.discover import Hidden
from xrfid.batch.engine import GOOD, STATUS
from xrfid.batch.refit import Refits
from xrfid.batch.store import DRIFT_FIELDS, Sums
from xrfid.output import atomic_output
from xrfid.spectrum import EnergyScale

_SLAB_BYTES = 32 << 20
Edit = Callable[[NDArray[Any], int], None]
_PER_POINT = {
    "reduced_chi2": ("", "squared residuals over bands of channels, over their expectation"),
    "largest_residual": ("", "largest excess of counts over the model, standard deviations"),
    "largest_residual_energy": ("keV", "where that excess is"),
    "status": ("", "; ".join(f"{code}: {text}" for code, text in STATUS.items())),
}


@dataclass(frozen=True, eq=False)
class Finished:
    """What goes into the result beside the maps."""

    shape: tuple[int, ...]
    names: tuple[str, ...]
    sums: Sums
    scale: EnergyScale
    document: str
    refits: Refits
    hidden: tuple[Hidden, ...]
    provenance: dict[str, Any]


@dataclass(frozen=True, slots=True)
class Strongest:
    """Where a series is strongest: its point, area and uncertainty there."""

    series: str
    index: tuple[int, ...]
    area: float
    sigma: float


def write_result(
    part: Path, out: Path, finished: Finished, *, compress: bool, overwrite: bool
) -> tuple[Strongest, ...]:
    """Write the result from the complete unfinished one.

    Returns
    -------
    tuple of Strongest
        One for each series, strongest first by area over uncertainty.
    """
    options = {"compression": "gzip", "compression_opts": 4, "shuffle": True} if compress else {}
    with (
        atomic_output(out, overwrite=overwrite) as beside,
        h5py.File(part, "r", locking=False) as source,
        h5py.File(beside, "w", locking=False) as file,
    ):
        entry = _group(file, "entry", "NXentry", default="sum_spectrum")
        file.attrs["NX_class"], file.attrs["default"] = "NXroot", "entry"
        entry["title"] = f"areas of {len(finished.names)} series at {math.prod(finished.shape)} points"
        strongest = _series(source["entry/series"], entry, finished, options)
        _fit(source["entry/fit"], entry, finished, options)
        _sum(entry, finished)
        entry.create_dataset("identification", data=finished.document, dtype=h5py.string_dtype())
        _tables(entry, finished, strongest)
        _provenance(entry, finished.provenance)
    return strongest


def _group(parent: h5py.Group, name: str, kind: str, **attributes: Any) -> h5py.Group:
    group = parent.create_group(name)
    group.attrs["NX_class"] = kind
    for key, value in attributes.items():
        group.attrs[key] = value
    return group


def _series(
    source: h5py.Group, entry: h5py.Group, finished: Finished, options: dict[str, Any]
) -> tuple[Strongest, ...]:
    """Copy areas and uncertainties, single fits put in, and note where each series is strongest."""
    series = _group(entry, "series", "NXcollection")
    found = []
    for k, name in enumerate(finished.names):
        own = name.replace(" ", "_")
        group = _group(series, own, "NXdata", signal="area", auxiliary_signals=["sigma"], long_name=name)
        for kind, values in (("area", finished.refits.area[k]), ("sigma", finished.refits.sigma[k])):
            made = _copy(source[own][kind], group, kind, options, _replacing(finished.refits.points, values))
            made.attrs["units"] = "counts"
        found.append(_strongest(name, group["area"], group["sigma"]))
    return tuple(sorted((s for s in found if s), key=lambda s: -s.area / s.sigma))


def _replacing(points: NDArray[np.int64], values: NDArray[np.float32]) -> Edit:
    """Return what puts values at flat indices into a slab that begins at some flat index."""

    def edit(slab: NDArray[Any], first: int) -> None:
        inside = (points >= first) & (points < first + slab.size)
        flat, at = slab.reshape(-1), points[inside] - first
        flat[at] = np.where(np.isnan(values[inside]), flat[at], values[inside])

    return edit


def _slabs(shape: tuple[int, ...], itemsize: int) -> Iterator[tuple[slice, int]]:
    """Ranges on the first axis of bounded size, with the flat index each begins at."""
    per_row = math.prod(shape[1:])
    step = max(_SLAB_BYTES // max(per_row * itemsize, 1), 1)
    for start in range(0, shape[0], step):
        yield slice(start, min(start + step, shape[0])), start * per_row


def _copy(
    source: h5py.Dataset, group: h5py.Group, name: str, options: dict[str, Any], edit: Edit | None = None
) -> h5py.Dataset:
    made = group.create_dataset(name, shape=source.shape, dtype=source.dtype, **options)
    for rows, first in _slabs(source.shape, source.dtype.itemsize):
        slab = source[rows]
        if edit is not None:
            edit(slab, first)
        made[rows] = slab
    return made


def _strongest(name: str, area: h5py.Dataset, sigma: h5py.Dataset) -> Strongest | None:
    best: Strongest | None = None
    for rows, first in _slabs(area.shape, area.dtype.itemsize):
        slab = area[rows].reshape(-1)
        if np.all(np.isnan(slab)):
            continue
        at = int(np.nanargmax(slab))
        if best is None or slab[at] > best.area:
            index = tuple(int(i) for i in np.unravel_index(first + at, area.shape))
            best = Strongest(name, index, float(slab[at]), float(sigma[index]))
    return best


def _fit(source: h5py.Group, entry: h5py.Group, finished: Finished, options: dict[str, Any]) -> None:
    group = _group(entry, "fit", "NXcollection")
    for name, (units, meaning) in _PER_POINT.items():
        made = _copy(source[name], group, name, options)
        made.attrs["long_name"] = meaning
        if units:
            made.attrs["units"] = units
    group["done"] = source["done"][()]
    group["done"].attrs["long_name"] = "1 for each block of points that is fitted"
    group["drift"] = source["drift"][()]
    group["drift"].attrs["columns"] = list(DRIFT_FIELDS)
    group["drift"].attrs["long_name"] = "shift of each block's lines at 6 keV and per keV of distance from there"
    refits = _group(group, "refitted", "NXcollection", badly_fitted_points=finished.refits.listed)
    refits["index"] = np.stack(np.unravel_index(finished.refits.points, finished.shape), axis=-1)
    refits["reduced_chi2_before"] = finished.refits.before
    refits["reduced_deviance"] = finished.refits.after


def _sum(entry: h5py.Group, finished: Finished) -> None:
    group = _group(entry, "sum_spectrum", "NXdata", signal="counts", axes="energy", auxiliary_signals=["maximum"])
    group["counts"], group["maximum"] = finished.sums.summed, np.maximum(finished.sums.highest, 0.0)
    group["energy"] = finished.scale.energy_kev(np.arange(finished.sums.summed.size))
    for name, units in (("counts", "counts"), ("maximum", "counts"), ("energy", "keV")):
        group[name].attrs["units"] = units
    group["maximum"].attrs["long_name"] = "maximum over all points, channel by channel"


def _tables(entry: h5py.Group, finished: Finished, strongest: tuple[Strongest, ...]) -> None:
    """Where each series is strongest; which elements only a few points show."""
    text = h5py.string_dtype()
    table = _group(entry, "strongest", "NXcollection")
    table.create_dataset("series", data=[s.series for s in strongest], dtype=text)
    table["index"] = np.array([s.index for s in strongest], np.int64).reshape(len(strongest), len(finished.shape))
    table["area"], table["sigma"] = [s.area for s in strongest], [s.sigma for s in strongest]
    hidden = _group(entry, "hidden", "NXcollection", long_name="elements that the sum does not show")
    hidden.create_dataset(
        "element", data=[h.element for h in finished.hidden], dtype=text, shape=(len(finished.hidden),)
    )
    hidden.create_dataset(
        "found_in", data=[h.where for h in finished.hidden], dtype=text, shape=(len(finished.hidden),)
    )


def _provenance(entry: h5py.Group, provenance: dict[str, Any]) -> None:
    group = _group(entry, "provenance", "NXcollection")
    for key, value in provenance.items():
        group[key] = value if isinstance(value, (str, int, float)) else json.dumps(value, sort_keys=True)


def point_status_counts(status: NDArray[np.uint8]) -> dict[str, int]:
    """Count the points that are not good, by what is the matter."""
    counts = np.bincount(status.reshape(-1), minlength=max(STATUS) + 1)
    return {text: int(counts[code]) for code, text in STATUS.items() if code != GOOD and counts[code]}
