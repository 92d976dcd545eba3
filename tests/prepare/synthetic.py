"""Spectra with known scale for the tests and the benchmark, drawn with the package's own response.

So they test the search for the scale, not the physics: that has its own tests against outside sources.
"""

from __future__ import annotations

import numpy as np

from xrfid.instrument import Instrument
from xrfid.response.detector import DrawnLines, LineShape, draw
from xrfid.response.sample import mass_fractions
from xrfid.response.series import Prediction
from xrfid.spectrum import EnergyScale, Resolution, Spectrum


def made(
    composition: dict[str, float],
    scale: EnergyScale,
    n_channels: int = 2048,
    total: float = 3e5,
    fwhm_ev: float = 145.0,
    anode: str = "Rh",
    voltage: float = 40.0,
    scatter: float = 1.0,
    pile_up: float = 1e-3,
    seed: int = 1,
) -> Spectrum:
    """Counts of a thick sample in a usual instrument: lines, escapes, scatter, continuum and sum events."""
    instrument = Instrument.from_table({"tube": {"anode": anode, "voltage_kv": voltage}})
    prediction = Prediction(instrument)
    fractions = mass_fractions(composition)
    made_lines = prediction.line_intensities(fractions) * fractions[prediction.line_z - 1]
    scattered = prediction.scattered(fractions)
    energy = np.concatenate([prediction.line_energy_kev, scattered.coherent_kev, scattered.incoherent_kev])
    weight = np.concatenate([made_lines, scatter * scattered.coherent, scatter * scattered.incoherent])
    keep = (weight > 1e-7 * weight.max()) & (energy > 0.3)
    lines = DrawnLines(energy[keep], weight[keep], np.zeros(int(keep.sum()), dtype=np.intp))
    shape = LineShape.of(instrument.detector).with_resolution(Resolution.from_mn_ka(fwhm_ev))
    edges = scale.edges_kev(n_channels)
    mean = draw(lines.with_escapes("Si"), shape, edges, 1)[0]
    mean = np.where(scale.energy_kev(np.arange(n_channels)) > 0.2, mean, 0.0)
    folded = np.convolve(mean, mean)
    at = np.arange(n_channels) - scale.offset_kev / scale.gain_kev
    pile = np.interp(at, np.arange(folded.size), folded, left=0.0, right=0.0)
    mean = mean / mean.sum() + pile_up * pile / max(pile.sum(), 1e-30)
    counts = np.random.default_rng(seed).poisson(total * mean / mean.sum())
    return Spectrum(counts.astype(float))


def tube(anode: str = "Rh", voltage: float = 40.0) -> Instrument:
    """An instrument of which only anode and voltage are known."""
    return Instrument.from_table({"tube": {"anode": anode, "voltage_kv": voltage}})
