"""Make the sample spectra anew: ``python sample_spectra/make_samples.py [FOLDER]``.

The spectra are computed from the compositions in ``scenario.toml``: excitation, absorption and
enhancement in a thick sample, scattered tube radiation, detector shape, escape and sum peaks, and
Poisson counts from a fixed seed. Nature differs from every table, so line energies, the shares of
line groups and the continuum's level are shifted at random by a few parts in a hundred (energies by
0.8 eV). ``truth.json`` receives what was put in: composition and expected counts of every series.
"""

from __future__ import annotations

import argparse
import json
import tomllib
from pathlib import Path
from typing import Any

import h5py
import numpy as np
from numpy.typing import NDArray

from xrfid.atoms.lines import GROUPS
from xrfid.fit.design import scatter_columns, scattered_continuum
from xrfid.fit.grouping import Grouping
from xrfid.instrument import Instrument
from xrfid.response.detector import DrawnLines, LineShape, draw
from xrfid.response.pileup import pair_spectrum
from xrfid.response.sample import mass_fractions
from xrfid.response.series import Prediction
from xrfid.spectrum import EnergyScale

HERE = Path(__file__).parent
SEED = 20_240_611
SCALES = {"workshop": EnergyScale(-0.012, 0.0201), "museum": EnergyScale(0.004, 0.02497)}
CHANNELS = 2048
GROUP_SPREAD = {"K": 0.03, "L": 0.08, "M": 0.15}
ENERGY_SPREAD_KEV = 0.0008
STRAY_SHARE = 0.004
"""Counts of an instrument's own lines, as a share of all counts."""
ARGON_SHARE = 0.0012
"""The same for the argon of an air path."""


class Maker:
    """One instrument, with nature's deviations from the tables drawn once."""

    def __init__(self, name: str, rng: np.random.Generator) -> None:
        self.instrument = Instrument.load(HERE / f"{name}.toml")
        self.scale = SCALES[name]
        self.prediction = Prediction(self.instrument)
        self.shape = LineShape.of(self.instrument.detector)
        lines = self.prediction
        self.energy_kev = lines.line_energy_kev + rng.normal(0.0, ENERGY_SPREAD_KEV, lines.line_z.size)
        self.strength = self._deviations(rng)
        self.continuum_level = rng.uniform(0.9, 1.1)

    def _deviations(self, rng: np.random.Generator) -> NDArray[np.float64]:
        """One factor for every line group of every series; shape (n_lines,)."""
        lines = self.prediction
        code = lines.line_series * len(GROUPS) + lines.line_group
        kinds, place = np.unique(code, return_inverse=True)
        spread = np.array([GROUP_SPREAD[GROUPS[k % len(GROUPS)].series] for k in kinds])
        return np.exp(rng.normal(0.0, spread))[place]

    def expected(
        self, composition: dict[str, float], channels: int
    ) -> tuple[NDArray[np.float64], dict[str, float]]:
        """Expected counts (relative) of a thick sample, without sum peaks, and the area of each series."""
        fractions = mass_fractions(composition)
        lines = self.prediction
        grouping = Grouping(np.arange(channels + 1), self.scale.edges_kev(channels))
        weight = lines.line_intensities(fractions) * fractions[lines.line_z - 1] * self.strength
        out = self._drawn(weight, grouping)
        for column in scatter_columns(lines, fractions, self.shape, grouping):
            out += column.predicted * column.column
        out += self.continuum_level * scattered_continuum(lines, fractions, self.shape, grouping)
        shares = dict.fromkeys(self.instrument.stray.elements, STRAY_SHARE)
        if self.instrument.path.atmosphere == "air":
            shares["Ar"] = ARGON_SHARE
        for symbol, share in shares.items():
            pure = mass_fractions({symbol: 1.0})
            stray = lines.line_intensities(pure) * pure[lines.line_z - 1]
            out += self._drawn(stray * share * out.sum() / stray.sum(), grouping)
        inside = (self.energy_kev > max(grouping.edges_kev[0], 0.6)) & (
            self.energy_kev < grouping.edges_kev[-1]
        )
        area = np.bincount(lines.line_series, weight * inside, minlength=len(lines.keys))
        return out, {str(k): float(a) for k, a in zip(lines.keys, area, strict=True) if a > 0}

    def _drawn(self, weight: NDArray[np.float64], grouping: Grouping) -> NDArray[np.float64]:
        on = np.flatnonzero(weight > 0)
        drawn = DrawnLines(self.energy_kev[on], weight[on], np.zeros(on.size, dtype=np.intp))
        return draw(drawn.with_escapes(self.instrument.detector.material), self.shape, grouping.edges_kev, 1)[
            0
        ]

    def with_sums(self, expected: NDArray[np.float64], live_s: float) -> NDArray[np.float64]:
        """Let photons that arrive too close together be counted as one."""
        per_pair = (self.instrument.detector.pulse_pair_ns or 300.0) * 1e-9 / live_s
        pairs = per_pair * pair_spectrum(expected, self.scale)
        return expected * (1.0 - 2.0 * pairs.sum() / expected.sum()) + pairs


def make_sample(
    maker: Maker, sample: dict[str, Any], rng: np.random.Generator
) -> tuple[NDArray[np.int64], dict[str, float]]:
    """Counts of one sample and the expected area of each of its series."""
    raw, areas = maker.expected(sample["composition"], CHANNELS)
    threshold = np.clip((maker.scale.energy_kev(np.arange(CHANNELS)) - 0.55) / 0.25, 0.0, 1.0)
    factor = sample["counts"] / (raw * threshold).sum()
    recorded = maker.with_sums(raw * threshold * factor, sample["live_s"])
    return rng.poisson(recorded), {k: a * factor for k, a in areas.items() if a * factor > 1.0}


def make_run(
    maker: Maker, run: dict[str, Any], rng: np.random.Generator
) -> tuple[NDArray[np.uint16], dict[str, Any]]:
    """Counts of a scanning run, shape (rows, columns, channels), and which material lies where."""
    rows, columns = run["shape"]
    names = list(run["materials"])
    pure = np.array([maker.expected(run["materials"][n], run["channels"])[0] for n in names])
    pure *= run["counts"] / pure[0].sum()
    where = np.zeros((rows, columns), dtype=int)
    y, x = np.mgrid[:rows, :columns]
    for region in run["region"]:
        if "disc" in region:
            r, c, radius = region["disc"]
            inside = (y - r) ** 2 + (x - c) ** 2 <= radius**2
        else:
            r0, r1, c0, c1 = region["rectangle"]
            inside = (y >= r0) & (y <= r1) & (x >= c0) & (x <= c1)
        where[inside] = names.index(region["material"])
    counts = rng.poisson(pure[where]).astype(np.uint16)
    points = {n: int((where == i).sum()) for i, n in enumerate(names)}
    return counts, {
        "materials": run["materials"],
        "points": points,
        "map": ["".join(map(str, row)) for row in where],
    }


# ------------------------------------------------------------------------------------------- writing
def write(path: Path, counts: NDArray[np.int64], sample: dict[str, Any], scale: EnergyScale | None) -> None:
    """Write one spectrum; the ending and the presence of a scale choose how."""
    if path.suffix == ".h5":
        return _write_hdf5(path, counts, sample, scale)
    writer = {".msa": _emsa, ".csv": _csv, ".n42": _n42, ".txt": _two_columns if scale else _one_column}[
        path.suffix
    ]
    path.write_text(writer(counts, sample, scale), encoding="utf-8", newline="")
    return None


def _real_time(sample: dict[str, Any]) -> float:
    return round(sample["live_s"] * 1.06, 2)


def _emsa(counts: NDArray[np.int64], sample: dict[str, Any], scale: EnergyScale) -> str:
    head = {
        "FORMAT": "EMSA/MAS Spectral Data File",
        "VERSION": "1.0",
        "TITLE": sample["title"],
        "DATE": "11-JUN-2024",
        "TIME": "10:20",
        "OWNER": "Ostrenmoor",
        "NPOINTS": f"{counts.size}.",
        "NCOLUMNS": "1.",
        "XUNITS": "keV",
        "YUNITS": "counts",
        "DATATYPE": "Y",
        "XPERCHAN": f"{scale.gain_kev}",
        "OFFSET": f"{scale.offset_kev}",
        "SIGNALTYPE": "XRF",
        "LIVETIME  -s": f"{sample['live_s']}",
        "REALTIME  -s": f"{_real_time(sample)}",
    }
    lines = [f"#{k:<12s}: {v}" for k, v in head.items()] + ["#SPECTRUM    :"]
    return "\r\n".join([*lines, *(f"{c}.," for c in counts), "#ENDOFDATA   :", ""])


def _two_columns(counts: NDArray[np.int64], sample: dict[str, Any], scale: EnergyScale) -> str:
    energy = scale.energy_kev(np.arange(counts.size))
    head = [
        f"# {sample['title']}",
        f"# live time (s): {sample['live_s']}",
        f"# real time (s): {_real_time(sample)}",
        "# energy (keV)\tcounts",
    ]
    return "\n".join([*head, *(f"{e:.4f}\t{c}" for e, c in zip(energy, counts, strict=True)), ""])


def _one_column(counts: NDArray[np.int64], sample: dict[str, Any], scale: None) -> str:
    head = [
        f"Sample - {sample['title']}",
        f"Live time - {sample['live_s']}",
        f"Real time - {_real_time(sample)}",
    ]
    return "\n".join([*head, *map(str, counts), ""])


def _csv(counts: NDArray[np.int64], sample: dict[str, Any], scale: EnergyScale) -> str:
    energy = scale.energy_kev(np.arange(counts.size))
    head = [f"title;{sample['title']}", f"live time;{sample['live_s']}", "energy (keV);counts"]
    rows = (f"{e:.4f}".replace(".", ",") + f";{c}" for e, c in zip(energy, counts, strict=True))
    return "\n".join([*head, *rows, ""])


def _n42(counts: NDArray[np.int64], sample: dict[str, Any], scale: EnergyScale) -> str:
    rows = counts.reshape(-1, 16)
    data = "\n".join(" ".join(map(str, row)) for row in rows)
    return f"""<?xml version="1.0" encoding="UTF-8"?>
<RadInstrumentData xmlns="http://physics.nist.gov/N42/2011/N42"
    n42DocUUID="6c1d3a52-0000-4000-8000-0000000000a4">
  <RadInstrumentInformation id="instrument">
    <RadInstrumentManufacturerName>Ostrenmoor workshop</RadInstrumentManufacturerName>
    <RadInstrumentModelName>bench</RadInstrumentModelName>
    <RadInstrumentClassCode>Other</RadInstrumentClassCode>
    <RadInstrumentVersion><RadInstrumentComponentName>Software</RadInstrumentComponentName>
      <RadInstrumentComponentVersion>1</RadInstrumentComponentVersion></RadInstrumentVersion>
  </RadInstrumentInformation>
  <RadDetectorInformation id="detector">
    <RadDetectorCategoryCode>Other</RadDetectorCategoryCode><RadDetectorKindCode>Other</RadDetectorKindCode>
  </RadDetectorInformation>
  <EnergyCalibration id="scale">
    <CoefficientValues>{scale.offset_kev} {scale.gain_kev} 0</CoefficientValues>
  </EnergyCalibration>
  <RadMeasurement id="measurement">
    <Remark>{sample["title"]}</Remark>
    <MeasurementClassCode>Foreground</MeasurementClassCode>
    <StartDateTime>2024-06-11T10:20:00Z</StartDateTime>
    <RealTimeDuration>PT{_real_time(sample)}S</RealTimeDuration>
    <Spectrum id="spectrum" radDetectorInformationReference="detector" energyCalibrationReference="scale">
      <LiveTimeDuration>PT{sample["live_s"]}S</LiveTimeDuration>
      <ChannelData>
{data}
      </ChannelData>
    </Spectrum>
  </RadMeasurement>
</RadInstrumentData>
"""


def _write_hdf5(path: Path, counts: NDArray[Any], sample: dict[str, Any], scale: EnergyScale) -> None:
    """NXdata with counts (any leading shape) and an energy axis in keV."""
    with h5py.File(path, "w", track_order=True) as file:
        file.attrs["default"] = "entry"
        entry = file.create_group("entry")
        entry.attrs.update({"NX_class": "NXentry", "default": "data"})
        entry["title"] = sample["title"]
        data = entry.create_group("data")
        leading = ["row", "column"][: counts.ndim - 1]
        data.attrs.update({"NX_class": "NXdata", "signal": "counts", "axes": [*leading, "energy"]})
        chunk = (1, *counts.shape[1:]) if counts.ndim > 1 else None
        stored = data.create_dataset(
            "counts",
            data=counts,
            chunks=chunk,
            compression="gzip" if chunk else None,
            shuffle=chunk is not None or None,
        )
        stored.attrs["units"] = "counts"
        energy = data.create_dataset("energy", data=scale.energy_kev(np.arange(counts.shape[-1])))
        energy.attrs["units"] = "keV"
        live = entry.create_dataset("live_time", data=float(sample["live_s"]))
        live.attrs["units"] = "s"


def main() -> None:
    """Write all files of the scenario into a folder (this one, if none is given)."""
    parser = argparse.ArgumentParser(description=__doc__.splitlines()[0])
    parser.add_argument("folder", nargs="?", type=Path, default=HERE)
    folder = parser.parse_args().folder
    scenario = tomllib.loads((HERE / "scenario.toml").read_text(encoding="utf-8"))
    makers = {name: Maker(name, np.random.default_rng([SEED, i])) for i, name in enumerate(SCALES)}
    truth: dict[str, Any] = {}
    for number, sample in enumerate(scenario["sample"]):
        maker = makers[sample["instrument"]]
        counts, areas = make_sample(maker, sample, np.random.default_rng([SEED, 100 + number]))
        write(folder / sample["file"], counts, sample, maker.scale if sample.get("scale", True) else None)
        known = {k: sample[k] for k in ("instrument", "title", "composition", "named", "maybe")}
        scale = {"offset_kev": maker.scale.offset_kev, "gain_kev": maker.scale.gain_kev}
        truth[sample["file"]] = {**known, "scale": scale, "areas": {k: round(a, 1) for k, a in areas.items()}}
    run = scenario["run"]
    counts, regions = make_run(makers[run["instrument"]], run, np.random.default_rng([SEED, 999]))
    _write_hdf5(folder / run["file"], counts, run, makers[run["instrument"]].scale)
    truth[run["file"]] = {"instrument": run["instrument"], "title": run["title"], **regions}
    (folder / "truth.json").write_text(
        json.dumps(truth, indent=1, ensure_ascii=False) + "\n", encoding="utf-8"
    )


if __name__ == "__main__":
    main()
