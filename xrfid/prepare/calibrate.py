"""Scale and width of an instrument from reference measurements of known elements.

All lines of all measurements share one offset, gain, noise and Fano factor; areas, line-group shares and continuum
are solved for inside. Each measurement's own shift tells the drift between them.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from xrfid.atoms.elements import ATOMIC_NUMBER
from xrfid.errors import InputError, Untrustworthy, did_you_mean
from xrfid.instrument import Instrument, Scale
from xrfid.prepare.find_scale import Search
from xrfid.prepare.polish import LINE_ENERGY_EV, LineWork
from xrfid.prepare.trial import Trial
from xrfid.response.detector import LineShape
from xrfid.spectrum import EnergyScale, Resolution, Spectrum

LEAST_SPAN = 0.15
"""Distance of the lowest and highest line used, as a share of the highest."""
LEAST_LEAD = 40.0
CLEAR_DRIFT_EV = 3.0
"""Shifts between measurements below this are not called drift."""
FANO_FREE_SPAN = 2.5
"""Highest over lowest line energy from which noise and Fano factor are fitted separately."""
_SCALES_EACH = 8
_POLISHED = 6


@dataclass(frozen=True, eq=False)
class Reference:
    """A measurement and the elements known to be in it."""

    spectrum: Spectrum
    elements: tuple[str, ...]
    name: str


@dataclass(frozen=True, slots=True)
class UsedLine:
    """A line group used: measurement, name, energy (keV), residual and its standard uncertainty (eV)."""

    measurement: str
    name: str
    energy_kev: float
    residual_ev: float
    sigma_ev: float


@dataclass(frozen=True, slots=True)
class Drift:
    """Mean shift of one measurement's lines against the common scale, eV, and its standard uncertainty."""

    measurement: str
    shift_ev: float
    sigma_ev: float

    @property
    def clear(self) -> bool:
        """Whether it is more than chance and line energies explain."""
        return abs(self.shift_ev) > max(CLEAR_DRIFT_EV, 3.0 * self.sigma_ev)


@dataclass(frozen=True, eq=False)
class Calibrated:
    """What the reference measurements say about the instrument."""

    scale: EnergyScale
    offset_sigma_kev: float
    gain_sigma_kev: float
    resolution: Resolution
    fwhm_sigma_ev: float
    lines: tuple[UsedLine, ...]
    drifts: tuple[Drift, ...]
    reduced_chi2: float

    @property
    def rms_ev(self) -> float:
        """Root mean square residual of the lines, eV, weighted by their uncertainties."""
        value = np.array([line.residual_ev for line in self.lines])
        weight = np.array([1.0 / (line.sigma_ev**2 + LINE_ENERGY_EV**2) for line in self.lines])
        return float(np.sqrt(np.average(value**2, weights=weight)))

    def applied_to(self, instrument: Instrument) -> Instrument:
        """Return the instrument with this scale and width, everything else as it was."""
        scale = Scale(offset_kev=_rounded(self.scale.offset_kev, 7), gain_kev=_rounded(self.scale.gain_kev, 9))
        width = {"fwhm_mn_ka_ev": _rounded(self.resolution.fwhm_mn_ka_ev, 1)}
        detector = instrument.detector.model_copy(update=width)
        return instrument.model_copy(update={"scale": scale, "detector": detector})


def calibrate(references: Sequence[Reference], instrument: Instrument) -> Calibrated:
    """Fit one scale and width to reference measurements.

    Parameters
    ----------
    references : sequence of Reference
    instrument : Instrument

    Returns
    -------
    Calibrated

    Raises
    ------
    InputError
        If an element's name is unknown.
    Untrustworthy
        If the named elements do not explain a measurement, two scales do equally well, or the lines lie too close
        together to fix offset and gain.
    """
    for reference in references:
        for element in reference.elements:
            if element not in ATOMIC_NUMBER:
                hint = did_you_mean(element, ATOMIC_NUMBER)
                raise InputError(reference.name, f'"{element}" is no element symbol', hint)
    searches = [_search(r, instrument) for r in references]
    trials = _common_start(references, searches, instrument)
    works = [
        LineWork(s.reduced, s.patterns, t.chosen, instrument.detector.material)
        for s, t in zip(searches, trials, strict=True)
    ]
    start = trials[0]
    shape = LineShape.of(instrument.detector)
    resolution = start.resolution(searches[0].fano, searches[0].pair_ev)
    _enough(_used(references, works, start.scale, shape.with_resolution(resolution)))
    result = _fit(works, start.scale, resolution, shape, searches[0].bounds[1])
    return _summary(result, references, works, shape)


def _search(reference: Reference, instrument: Instrument) -> Search:
    """Peaks and patterns of the known elements, and of what the instrument itself may add."""
    own = set(reference.elements) | set(instrument.stray.elements)
    if instrument.tube is not None:
        own.add(instrument.tube.anode)
    if instrument.path.atmosphere == "air":
        own.add("Ar")
    voltage = reference.spectrum.metadata.get("voltage_kv")
    end = instrument.voltage_kv or (float(voltage) if isinstance(voltage, (int, float)) and voltage > 2 else None)
    search = Search(reference.spectrum.counts, instrument, end, frozenset(own))
    if not search.real:
        raise Untrustworthy(f"{reference.name}: no peak stands out; measure longer")
    return search


def _common_start(references: Sequence[Reference], searches: list[Search], instrument: Instrument) -> list[Trial]:
    """The scale that explains all measurements best, as one trial per measurement."""
    scales: list[EnergyScale] = []
    for reference, search in zip(references, searches, strict=True):
        stated = [s for s in (reference.spectrum.scale, instrument.energy_scale) if s is not None]
        found = search.hypotheses()[:_SCALES_EACH] if len(search.real) > 1 else []
        scales += [s for s in (*stated, *found) if 5e-4 < s.gain_kev < 0.5]
    ranked = sorted((_total(searches, scale) for scale in scales), key=lambda x: x[0])[:_POLISHED]
    if not ranked:
        raise Untrustworthy("no energy scale fits the named elements; check the names")
    exact = sorted((_total(searches, _exact(searches, scale)) for _, scale in ranked), key=lambda x: x[0])
    score, scale = exact[0]
    trials = [s.bench.try_out(scale, s.noise(scale)) for s in searches]
    rival = next(((t, s) for t, s in exact[1:] if _elsewhere(s, scale, searches, trials)), None)
    if rival is not None and rival[0] - score < LEAST_LEAD:
        raise Untrustworthy(
            f"two energy scales fit the named elements equally well ({scale.gain_kev * 1e3:.4g} and "
            f"{rival[1].gain_kev * 1e3:.4g} eV a channel); add a measurement of an element with other energies"
        )
    for reference, search, trial in zip(references, searches, trials, strict=True):
        _all_seen(reference, search, trial)
    return trials


def _total(searches: list[Search], scale: EnergyScale) -> tuple[float, EnergyScale]:
    """Score of a scale over all measurements, after it has moved to where the richest measurement wants it."""
    moved = [s.bench.refined(s.bench.try_out(scale, s.noise(scale)), 3) for s in searches]
    best = max(moved, key=lambda t: len(t.chosen)).scale
    return sum(s.bench.try_out(best, s.noise(best)).score for s in searches), best


def _exact(searches: list[Search], scale: EnergyScale) -> EnergyScale:
    """A scale polished on the measurement that shows most series."""
    trials = [(s, s.bench.try_out(scale, s.noise(scale))) for s in searches]
    search, trial = max(trials, key=lambda x: len(x[1].chosen))
    return search.polished(trial).scale


def _elsewhere(a: EnergyScale, b: EnergyScale, searches: list[Search], trials: list[Trial]) -> bool:
    """Whether two scales put an explained peak more than half its width apart: other lines, not the same refined."""
    for search, trial in zip(searches, trials, strict=True):
        at = trial.tops(search.reduced)
        apart = np.abs(a.energy_kev(at) - b.energy_kev(at))
        if np.any(apart > 0.5 * search.widths.fwhm(at) * b.gain_kev):
            return True
    return False


def _all_seen(reference: Reference, search: Search, trial: Trial) -> None:
    """Refuse if a named element shows no lines."""
    seen = {k.element for k in (search.patterns.keys[i] for i in trial.chosen) if k is not None}
    missing = [e for e in reference.elements if e not in seen]
    if missing:
        raise Untrustworthy(
            f"{reference.name}: no lines of {', '.join(missing)} fit its peaks on the scale that the other lines give; "
            "check the names or measure longer"
        )


def _used(references: Sequence[Reference], works: list[LineWork], scale: EnergyScale, shape: LineShape
          ) -> list[UsedLine]:  # fmt: skip
    """Clear lines of the known elements with their residuals."""
    out = []
    for reference, work in zip(references, works, strict=True):
        for name, energy, residual, sigma in work.solve(scale, shape).residuals:
            if name.split()[0] in reference.elements:
                out.append(UsedLine(reference.name, name, energy, residual, sigma))
    return out


def _enough(lines: list[UsedLine]) -> None:
    energies = sorted(line.energy_kev for line in lines)
    if len(energies) < 2 or energies[-1] - energies[0] < LEAST_SPAN * energies[-1]:
        shown = ", ".join(f"{line.name} {line.energy_kev:.2f} keV" for line in lines[:4]) or "none"
        raise Untrustworthy(
            f"too few lines for offset and gain ({shown}); add a reference element whose lines lie further away"
        )


def _fit(works: list[LineWork], scale: EnergyScale, resolution: Resolution, shape: LineShape, most_kev: float) -> Any:
    """Least squares over offset, gain, noise and Fano factor (lmfit)."""
    import lmfit

    energies = np.concatenate([np.array(w.energy) for w in works])
    parameters = lmfit.Parameters()
    pivot = float(np.mean(energies))
    channel = float(scale.channel(pivot))
    # the energy at a middle channel and the gain are nearly uncorrelated; offset follows
    parameters.add("middle", value=pivot, min=pivot - 0.5, max=pivot + 0.5)
    parameters.add("gain", value=scale.gain_kev, min=0.9 * scale.gain_kev, max=1.1 * scale.gain_kev)
    parameters.add("noise", value=resolution.noise_ev, min=10.0, max=most_kev * 1e3)
    free = energies.max() > FANO_FREE_SPAN * energies.min()
    parameters.add("fano", value=resolution.fano, min=0.6 * resolution.fano, max=1.4 * resolution.fano, vary=free)
    parameters.add("offset", expr=f"middle - gain * {channel!r}")
    robust: list[NDArray[np.float64] | None] = [None] * len(works)

    def misfit(values: Any) -> NDArray[np.float64]:
        at = EnergyScale(float(values["offset"]), float(values["gain"]))
        noise, fano = float(values["noise"]), float(values["fano"])
        drawn = shape.with_resolution(Resolution(noise, fano, resolution.pair_energy_ev))
        return np.concatenate([w.misfit(at, drawn, r)[0] for w, r in zip(works, robust, strict=True)])

    result: Any = None
    for _ in range(2):
        result = lmfit.minimize(misfit, parameters, method="leastsq", epsfcn=1e-8)
        parameters = result.params
        at, drawn = _at(result, shape)
        robust = [w.misfit(at, drawn, None)[1] for w in works]
    return result


def _at(result: Any, shape: LineShape) -> tuple[EnergyScale, LineShape]:
    """Scale and line shape of a fit's parameters."""
    p = result.params
    pair = shape.resolution.pair_energy_ev
    scale = EnergyScale(float(p["offset"]), float(p["gain"]))
    return scale, shape.with_resolution(Resolution(float(p["noise"]), float(p["fano"]), pair))


def _summary(result: Any, references: Sequence[Reference], works: list[LineWork], shape: LineShape) -> Calibrated:
    scale, drawn = _at(result, shape)
    lines = _used(references, works, scale, drawn)
    sigma = {name: float(result.params[name].stderr or 0.0) for name in ("offset", "gain", "noise", "fano")}
    energies = np.array([line.energy_kev for line in lines])
    # line energies are known to a little over 1 eV, whatever the counts
    tilt = 1.4e-3 * LINE_ENERGY_EV / float(np.ptp(energies))
    gain_sigma = math.hypot(sigma["gain"], tilt * scale.gain_kev)
    offset_sigma = math.hypot(sigma["offset"], tilt * float(energies.max()))
    resolution = drawn.resolution
    fwhm = resolution.fwhm_mn_ka_ev
    statistical = fwhm**2 - resolution.noise_ev**2
    by_fano = 0.5 * statistical * sigma["fano"] / resolution.fano
    fwhm_sigma = math.hypot(resolution.noise_ev * sigma["noise"], by_fano) / fwhm
    return Calibrated(scale, offset_sigma, gain_sigma, resolution, fwhm_sigma, tuple(lines), _drifts(lines),
                      float(result.redchi))  # fmt: skip


def _drifts(lines: list[UsedLine]) -> tuple[Drift, ...]:
    """Weighted mean shift of each measurement."""
    out = []
    for measurement in dict.fromkeys(line.measurement for line in lines):
        own = [line for line in lines if line.measurement == measurement]
        weight = np.array([1.0 / (line.sigma_ev**2 + LINE_ENERGY_EV**2) for line in own])
        mean = float(np.average([line.residual_ev for line in own], weights=weight))
        out.append(Drift(measurement, mean, float(1.0 / math.sqrt(weight.sum()))))
    return tuple(out)


def _rounded(value: float, digits: int) -> float:
    return round(float(value), digits)

