"""A scanning run with known content: Poisson counts drawn from predicted columns, composition varying over the map."""

from __future__ import annotations

from dataclasses import dataclass
from pathlib import Path

import h5py
import numpy as np
from numpy.typing import NDArray

from xrfid.batch.plan import Plan
from xrfid.fit.design import SeriesColumns, scatter_columns, scattered_continuum
from xrfid.fit.grouping import Grouping
from xrfid.instrument import Instrument
from xrfid.response.detector import LineShape
from xrfid.response.series import Prediction, SeriesKey
from xrfid.spectrum import EnergyScale

INSTRUMENT = Instrument.from_table(
    {
        "tube": {"anode": "Rh", "voltage_kv": 30, "window": {"material": "Be", "thickness_um": 125}, "filters": []},
        "geometry": {"incidence_deg": 45, "takeoff_deg": 45, "scatter_deg": 90},
        "path": {"atmosphere": "air", "length_mm": 10},
        "detector": {"material": "Si", "thickness_um": 500, "fwhm_mn_ka_ev": 140},
    }
)
PHASES = {
    "glaze": {20: 0.10, 22: 0.02, 26: 0.04, 29: 0.01, 82: 0.05},
    "body": {19: 0.02, 20: 0.05, 22: 0.01, 26: 0.08, 38: 0.001},
    "rim": {26: 0.05, 25: 0.02, 27: 0.01, 28: 0.005, 30: 0.01},
}
"""Mass fractions of the visible elements; the rest is light matrix."""


@dataclass(frozen=True, eq=False)
class Model:
    """Expected spectra: unit columns of every series, and each phase's areas and background per count."""

    scale: EnergyScale
    keys: tuple[SeriesKey, ...]
    columns: NDArray[np.float64]
    areas: NDArray[np.float64]
    background: NDArray[np.float64]

    def series(self, name: str) -> int:
        """Row of a series, say ``"Fe K"``."""
        return [str(k) for k in self.keys].index(name)

    def expected(self, mix: NDArray[np.float64], counts: float) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
        """Mean spectra (m, n_channels) and true areas (m, n_keys) for phase shares (m, n_phases)."""
        areas = mix @ self.areas * counts
        return areas @ self.columns + mix @ self.background * counts, areas


def model(n_channels: int = 1024, shift_kev: float = 0.0, instrument: Instrument = INSTRUMENT) -> Model:
    """Build the expected spectra; `shift_kev` moves everything against the instrument's stated scale."""
    stated = EnergyScale(0.0, 20.48 / n_channels)
    actual = EnergyScale(-shift_kev, stated.gain_kev)
    prediction = Prediction(instrument)
    shape = LineShape.of(instrument.detector)
    grouping = Grouping(np.arange(n_channels + 1), actual.edges_kev(n_channels))
    keys: tuple[SeriesKey, ...] = ()
    columns = np.empty((0, 0))
    areas, background = [], []
    for visible in PHASES.values():
        fractions = prediction.light_matrix_only() * (1.0 - sum(visible.values()))
        for z, share in visible.items():
            fractions[z - 1] += share
        drawn = SeriesColumns(prediction, fractions, shape, grouping)
        if not keys:
            keys, columns = drawn.keys, drawn.unit
        made = np.zeros(len(keys))
        for i, key in enumerate(drawn.keys):
            if key.z in visible and key in keys:
                made[keys.index(key)] = visible[key.z] * drawn.intensity[i]
        scattered = scattered_continuum(prediction, fractions, shape, grouping)
        for column in scatter_columns(prediction, fractions, shape, grouping):
            scattered = scattered + column.predicted * column.column
        scattered = np.where(grouping.centres_kev > 0.8, scattered, 0.0)
        total = made.sum() + scattered.sum()
        areas.append(made / total)
        background.append(scattered / total)
    used = np.flatnonzero(np.array(areas).max(axis=0) > 1e-6)
    return Model(stated, tuple(keys[i] for i in used), columns[used], np.array(areas)[:, used], np.array(background))


def mixtures(rows: int, columns: int, rng: np.random.Generator) -> NDArray[np.float64]:
    """Phase shares (rows * columns, n_phases) that change smoothly over a map, with sharp grains on top."""
    y, x = (
        np.mgrid[0 : 1 : rows * 1j, 0 : 1 : columns * 1j] if rows > 1 and columns > 1 else np.zeros((2, rows, columns))
    )
    waves = [np.sin(3 + 5 * x + 2 * y) + 1.2, np.cos(4 * y - 3 * x) + 1.2, np.sin(9 * x * y + 1) + 1.2]
    mix = np.stack(waves, axis=-1).reshape(rows * columns, 3)
    grains = rng.random(rows * columns) < 0.1
    mix[grains] = np.eye(3)[rng.integers(0, 3, int(grains.sum()))]
    return mix / mix.sum(axis=1, keepdims=True)


def create_run(file: h5py.File, shape: tuple[int, ...], dtype: object, **options: object) -> h5py.Dataset:
    """Lay out a scanning run with its energy axis (20.48 keV over all channels)."""
    entry = file.create_group("entry")
    entry.attrs["NX_class"] = "NXentry"
    data = entry.create_group("data")
    data.attrs["NX_class"], data.attrs["signal"] = "NXdata", "counts"
    data.attrs["axes"] = ["."] * (len(shape) - 1) + ["energy"]
    data["energy"] = np.arange(shape[-1]) * (20.48 / shape[-1])
    data["energy"].attrs["units"] = "keV"
    return data.create_dataset("counts", shape, dtype, **options)


def write_run(path: Path, counts: NDArray[np.generic], **options: object) -> Path:
    """Write a stack as a scanning run."""
    with h5py.File(path, "w") as file:
        create_run(file, counts.shape, counts.dtype, **options)[...] = counts
    return path


def true_plan(made: Model, mix: NDArray[np.float64], counts: float, band: int = 8) -> Plan:
    """Plan with the true columns, as a perfect search of the sum would leave it."""
    n = made.columns.shape[1]
    first = n // 24
    grouping = Grouping(np.arange(first, n + 1), made.scale.edges_kev(n)[first:])
    mean = made.expected(mix.mean(axis=0, keepdims=True), counts)[0][0]
    columns = np.concatenate([made.columns, made.background * counts])[:, first:]
    return Plan(
        tuple(map(str, made.keys)), columns, len(made.background), np.maximum(mean[first:], 1e-6),
        np.zeros(len(made.keys)), grouping.starts, grouping.edges_kev, n, band,
    )  # fmt: skip


def series_column(element: str, series: str, n_channels: int) -> NDArray[np.float64]:
    """Unit column of one series, shape (n_channels,)."""
    prediction = Prediction(INSTRUMENT)
    scale = EnergyScale(0.0, 20.48 / n_channels)
    grouping = Grouping(np.arange(n_channels + 1), scale.edges_kev(n_channels))
    drawn = SeriesColumns(prediction, prediction.light_matrix_only(), LineShape.of(INSTRUMENT.detector), grouping)
    return drawn.unit[[str(k) for k in drawn.keys].index(f"{element} {series}")]
