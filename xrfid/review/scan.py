"""A batch result under review: its maps, and the summed spectrum of any part of the run."""

from __future__ import annotations

import tomllib
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

from xrfid.errors import InputError
from xrfid.instrument import Instrument
from xrfid.spectrum import EnergyScale, Spectrum

MOST_PIXELS = 1000
"""Larger maps are averaged down for the screen; regions are still those of the run."""
_FEW = 256
"""So many points are read one by one, more by whole blocks."""
_AGAIN = "run xrfid batch again"


@dataclass(frozen=True, slots=True)
class Region:
    """Rows and columns of a map, first and last included."""

    first_row: int
    last_row: int
    first_column: int
    last_column: int

    @classmethod
    def around(cls, rows: tuple[float, float], columns: tuple[float, float], shape: tuple[int, int]) -> Region:
        """Return the points that a rectangle in map coordinates touches, kept inside the map."""
        low = [int(np.clip(np.floor(min(span)), 0, n - 1)) for span, n in zip((rows, columns), shape, strict=True)]
        high = [int(np.clip(np.floor(max(span)), 0, n - 1)) for span, n in zip((rows, columns), shape, strict=True)]
        return cls(low[0], high[0], low[1], high[1])

    def __str__(self) -> str:
        if (self.first_row, self.first_column) == (self.last_row, self.last_column):
            return f"row {self.first_row}, column {self.first_column}"
        return f"rows {self.first_row}-{self.last_row}, columns {self.first_column}-{self.last_column}"


def is_batch_result(path: Path) -> bool:
    """Whether a file is the result of a batch."""
    import h5py

    try:
        with h5py.File(path, "r") as file:
            return "entry/series" in file and "entry/provenance" in file and "entry/sum_spectrum" in file
    except OSError:
        return False


class Scan:
    """A finished batch result.

    Attributes
    ----------
    series : tuple of str
        Series with maps, strongest first.
    shape : tuple of int
        Rows and columns of the maps.
    instrument : Instrument
        As the batch had it.

    Raises
    ------
    InputError
        If the file is no whole batch result.
    """

    def __init__(self, path: Path) -> None:
        import h5py

        self.path = path
        try:
            with h5py.File(path, "r") as file:
                entry = file["entry"]
                ranked = [s.decode() for s in entry["strongest/series"][()]]
                others = [str(g.attrs["long_name"]) for g in entry["series"].values()]
                self.series = tuple(dict.fromkeys([*ranked, *others]))
                self._shape = tuple(entry[f"series/{self.series[0].replace(' ', '_')}/area"].shape)
                energy = entry["sum_spectrum/energy"][()]
                self._sum = np.asarray(entry["sum_spectrum/counts"][()], dtype=float)
                self._provenance = {k: v[()] for k, v in entry["provenance"].items()}
                self.instrument = Instrument.from_table(tomllib.loads(self._said("instrument")), str(path))
        except (OSError, KeyError, IndexError, RuntimeError, tomllib.TOMLDecodeError) as error:
            raise InputError(str(path), f"is no whole batch result ({error})", _AGAIN) from None
        self.scale = _scale_through(energy)
        self.shape = (1, self._shape[0]) if len(self._shape) == 1 else (self._shape[-2], self._shape[-1])

    def _said(self, key: str) -> str:
        value = self._provenance[key]
        return value.decode("utf-8") if isinstance(value, bytes) else str(value)

    def map(self, series: str) -> NDArray[np.float32]:
        """Return a series' areas as a picture of at most `MOST_PIXELS` by `MOST_PIXELS`."""
        from xrfid.batch.maps import read_maps

        if series not in self.series:
            raise InputError(str(self.path), f'has no map of "{series}"', "choose one from the list")
        return averaged_down(read_maps(self.path, [series])[series], MOST_PIXELS)

    def whole(self) -> Spectrum:
        """Return the summed spectrum of the whole run."""
        return self._spectrum(self._sum, "whole run", int(np.prod(self._shape)))

    def region(self, region: Region) -> Spectrum:
        """Return the summed spectrum of a region, read from the run itself.

        Raises
        ------
        InputError
            If the run is not where it was, or has changed since the batch.
        """
        from xrfid.batch.stack import Place, Stack

        stated = self._input()
        with Stack(Place(str(self._run_path()), ",".join(stated["datasets"]), _detectors(stated))) as stack:
            found = stack.fingerprint()
            if any(found[k] != stated[k] for k in ("shape", "bytes", "sample_sha256")):
                raise InputError(stack.place.path, "is not the run that this result was made of", _AGAIN)
            mask = self._mask(region)
            return self._spectrum(_summed(stack, mask), str(region), int(mask.sum()))

    def _mask(self, region: Region) -> NDArray[np.bool_]:
        """Return which of all points are meant, shape (n_points,); leading axes are taken whole."""
        mask = np.zeros(self._shape if len(self._shape) > 1 else (1, *self._shape), dtype=bool)
        mask[..., region.first_row : region.last_row + 1, region.first_column : region.last_column + 1] = True
        if not mask.any():
            raise InputError(str(self.path), f"{region} holds no point", "choose a region on the map")
        return mask.reshape(-1)

    def _input(self) -> dict[str, Any]:
        import json

        try:
            said: dict[str, Any] = json.loads(self._said("input"))
            return {k: said[k] for k in ("datasets", "detectors", "shape", "bytes", "sample_sha256")}
        except (ValueError, KeyError, TypeError) as error:
            raise InputError(str(self.path), f"does not say what run it is of ({error})", _AGAIN) from None

    def _run_path(self) -> Path:
        """Return where the run lies: where it was, or beside its result."""
        stated = Path(self._said("input_path"))
        for place in (stated, self.path.parent / stated.name):
            if place.is_file():
                return place
        raise InputError(str(stated), "the run itself is not there any more", "put it beside its result")

    def _spectrum(self, counts: NDArray[np.float64], what: str, points: int) -> Spectrum:
        said = f"sum of {points:,} points" if points > 1 else "one point"
        return Spectrum(np.maximum(counts, 0.0), self.scale, title=said, path=str(self.path), dataset=what)


def averaged_down(values: NDArray[Any], most: int) -> NDArray[np.float32]:
    """Return a picture of at most `most` pixels a side, each the mean of the finite ones it stands for."""
    steps = [-(-n // most) for n in values.shape]
    if steps == [1, 1]:
        return np.asarray(values, dtype=np.float32)
    padding = [(0, -n % s) for n, s in zip(values.shape, steps, strict=True)]
    padded = np.pad(np.asarray(values, dtype=np.float64), padding, constant_values=np.nan)
    tiles = padded.reshape(padded.shape[0] // steps[0], steps[0], padded.shape[1] // steps[1], steps[1])
    good = np.isfinite(tiles)
    number = good.sum(axis=(1, 3))
    total = np.where(good, tiles, 0.0).sum(axis=(1, 3))
    return np.where(number > 0, total / np.maximum(number, 1), np.nan).astype(np.float32)


def _scale_through(energy_kev: NDArray[np.float64]) -> EnergyScale:
    """Return the scale whose channel energies these are."""
    bend = float(energy_kev[2] - 2.0 * energy_kev[1] + energy_kev[0]) / 2.0
    last = energy_kev.size - 1
    bend = 0.0 if abs(bend) < 1e-12 else bend
    gain = float(energy_kev[last] - energy_kev[0]) / last - bend * last
    return EnergyScale(float(energy_kev[0]), gain, bend)


def _detectors(stated: dict[str, Any]) -> tuple[int, ...] | str:
    """Return the detectors to sum; "all" was stored letter by letter."""
    listed = stated["detectors"]
    return "all" if listed == list("all") else tuple(int(i) for i in listed)


def _summed(stack: Any, mask: NDArray[np.bool_]) -> NDArray[np.float64]:
    """Sum the spectra of the points asked for; bounded in memory, whatever their number."""
    total = np.zeros(stack.n_channels)
    if mask.sum() <= _FEW:
        return np.asarray(stack.spectra(np.flatnonzero(mask)).sum(axis=0))
    for block in range(stack.n_blocks):
        wanted = mask[stack.flat(block)]
        if wanted.any():
            layers, lost = stack.read(block)
            for layer in layers:
                total += layer[wanted & ~lost].sum(axis=0, dtype=np.float64)
    return total
