"""Energy scale and resolution in force: from the file, from the instrument file, or found.

A stated scale is looked at first; what disagrees with the peaks is corrected if the evidence is clear, and said.
"""

from __future__ import annotations

import math
from dataclasses import dataclass, replace

import numpy as np

from xrfid.errors import Untrustworthy
from xrfid.instrument import Instrument
from xrfid.prepare.calibration import Calibration
from xrfid.prepare.check import PLAUSIBLE_GAIN_KEV, Look, look
from xrfid.prepare.end_point import end_point
from xrfid.prepare.find_scale import (
    FWHM_MN_KEV,
    LEAST_LEAD,
    Candidate,
    Search,
    decide,
    search_trials,
)
from xrfid.prepare.patterns import patterns_of
from xrfid.response.detector import escape_lines
from xrfid.spectrum import FANO_FACTOR, PAIR_ENERGY_EV, EnergyScale, Resolution, Spectrum

CLEAR_SHIFT_KEV = 0.01
"""A stated scale is called wrong only if a strong line lies farther off than this, and than 4 sigma."""
WORN = 1.15
"""Measured over stated width from which the detector is called worn or noisy."""


def establish(spectrum: Spectrum, instrument: Instrument) -> tuple[Calibration, float | None]:
    """Return the calibration to start from, and the source's end point if nobody stated one, keV.

    Parameters
    ----------
    spectrum : Spectrum
    instrument : Instrument

    Returns
    -------
    calibration : Calibration
    end_kev : float or None
        The voltage stated by the instrument or the file, else the estimate from the spectrum's end.

    Raises
    ------
    Untrustworthy
        If no scale is stated and none can be found beyond doubt.
    """
    end = instrument.voltage_kv or _stated_voltage(spectrum)
    if spectrum.scale is not None:
        calibration = _checked(spectrum, spectrum.scale, "file", instrument, end)
    elif instrument.energy_scale is not None:
        calibration = _checked(spectrum, instrument.energy_scale, "instrument", instrument, end)
    else:
        calibration = _found(spectrum, instrument, end)
    return calibration, end or end_point(spectrum.counts, calibration.scale)


def _stated_voltage(spectrum: Spectrum) -> float | None:
    voltage = spectrum.metadata.get("voltage_kv")
    return float(voltage) if isinstance(voltage, (int, float)) and voltage > 2 else None


def _found(spectrum: Spectrum, instrument: Instrument, end: float | None) -> Calibration:
    """The scale from the counts alone."""
    search = Search(spectrum.counts, instrument, end)
    found = decide(search, search_trials(search))
    s = found.best.scale
    ahead = "no other scale comes near" if math.isinf(found.lead) else f"{found.lead:.0f} in deviance ahead of the next"
    note = (
        f"no energy scale is stated; found from the peaks: {s.gain_kev * 1e3:.4g} eV a channel from "
        f"{s.offset_kev:+.3f} keV, {ahead}"
    )
    made = _from_candidate(found.best, note, instrument)
    lead = None if math.isinf(found.lead) else found.lead
    return replace(made, runner_up=None if found.rival is None else found.rival.scale, lead=lead)


def _from_candidate(candidate: Candidate, note: str, instrument: Instrument) -> Calibration:
    polished = candidate.polished
    resolution, worn = _resolution(polished.resolution.noise_ev * 1e-3, instrument)
    return Calibration(
        polished.scale, resolution, "found", polished.rms_ev, _joined(note, worn), polished.offset_sigma_kev,
        polished.gain_sigma_kev, polished.residuals,
    )  # fmt: skip


@dataclass(frozen=True, slots=True)
class _Stated:
    """A stated scale, the same in keV if its unit was mistaken, and where it comes from."""

    scale: EnergyScale
    usable: EnergyScale | None
    origin: str
    note: str

    @property
    def whose(self) -> str:
        return "the file's energy scale" if self.origin == "file" else "the instrument file's energy scale"


def _checked(spectrum: Spectrum, scale: EnergyScale, origin: str, instrument: Instrument, end: float | None
             ) -> Calibration:  # fmt: skip
    """A stated scale, compared with the peaks."""
    stated = _in_kev(scale, origin, spectrum.n_channels)
    if stated.usable is None:
        return _replaced(spectrum, stated, instrument, end)
    known = instrument.tube is not None and "anode" in instrument.tube.model_fields_set
    patterns = patterns_of(instrument, end, known)
    escape = max(escape_lines(instrument.detector.material), key=lambda line: line.share * line.yield_)
    seen = look(spectrum.counts, stated.usable, instrument.detector.resolution, patterns, escape.loss_kev)
    if not seen.agrees:
        return _looked_into(spectrum, stated, seen, instrument, end)
    resolution, worn = _resolution(seen.noise_kev, instrument)
    made = Calibration(stated.usable, resolution, origin, abs(seen.shift_kev) * 1e3, _joined(stated.note, worn))
    return replace(made, stated=stated.scale) if stated.note else made


def _in_kev(scale: EnergyScale, origin: str, n_channels: int) -> _Stated:
    """Notice a scale in eV (or MeV) that passes for keV, and one that is no energy scale at all."""
    low, high = PLAUSIBLE_GAIN_KEV
    if scale.gain_kev == 1.0 and abs(scale.offset_kev) <= 1.0:  # channel numbers in place of energies
        return _Stated(scale, None, origin, "")
    for factor, unit in ((1.0, ""), (1e-3, "eV"), (1e3, "MeV")):
        gain = scale.gain_kev * factor
        if low <= gain <= high and 2.0 < gain * n_channels < 400.0 and abs(scale.offset_kev * factor) < 20.0:
            usable = EnergyScale(scale.offset_kev * factor, gain, scale.quadratic_kev * factor)
            note = f"the stated energy scale is in {unit}, not keV; read so" if unit else ""
            return _Stated(scale, usable, origin, note)
    return _Stated(scale, None, origin, "")


def _looked_into(spectrum: Spectrum, stated: _Stated, seen: Look, instrument: Instrument, end: float | None
                 ) -> Calibration:  # fmt: skip
    """The quick look was not content: fit the scale near the stated one, and search for others if that fails."""
    assert stated.usable is not None
    search = Search(spectrum.counts, instrument, end)
    if len(search.real) < 2:
        resolution, worn = _resolution(None, instrument)
        return Calibration(stated.usable, resolution, stated.origin, 0.0, _joined(stated.note, worn))
    near = _near(search, stated.usable)
    moved = _shift(search, near.scale, stated.usable)[0]
    if abs(moved) > _ANOTHER_ELEMENT_KEV:
        return _near_by(search, stated, instrument)
    if near.trial.explained > _WELL and seen.covered > 0.4:
        return _corrected(near, search, stated, instrument)
    try:
        found = decide(search, search_trials(search, (stated.usable,)))
    except Untrustworthy:
        return _corrected(near, search, stated, instrument, doubtful=True)
    if found.best.score > near.score - LEAST_LEAD:
        return _corrected(near, search, stated, instrument)
    return _corrected(found.best, search, stated, instrument)


def _near_by(search: Search, stated: _Stated, instrument: Instrument) -> Calibration:
    """The lines may belong to the neighbouring elements: all scales around the stated one are tried.

    If two of them do as well, which element stands for which peak cannot be told, and the stated scale stays.
    """
    assert stated.usable is not None
    channels = np.array(sorted(p.channel for p in search.real[:6]))
    low, high = float(channels[0]), float(channels[-1])
    around = []
    for at_low in _AROUND_KEV:
        for at_high in _AROUND_KEV:
            first, last = (float(stated.usable.energy_kev(c)) + d for c, d in ((low, at_low), (high, at_high)))
            gain = (last - first) / (high - low)
            around.append(EnergyScale(first - gain * low, gain))
    try:
        found = decide(search, search.best([*around, *search.hypotheses()]))
    except Untrustworthy:
        resolution, worn = _resolution(None, instrument)
        note = (
            f"{stated.whose} does not fit the peaks, but this spectrum cannot say what the right one is; used as "
            "stated; calibrate on known elements"
        )
        return Calibration(stated.usable, resolution, stated.origin, 0.0, _joined(_joined(stated.note, note), worn))
    return _corrected(found.best, search, stated, instrument)


_AROUND_KEV = (-0.45, -0.22, 0.0, 0.22, 0.45)
_ANOTHER_ELEMENT_KEV = 0.1
"""From such a shift on the neighbouring element's lines may be meant."""
_WELL = 0.9
"""Share of the peaks explained near the stated scale that makes a search for others needless."""


def _shift(search: Search, new: EnergyScale, old: EnergyScale) -> tuple[float, float]:
    """Largest change of energy at a strong peak, keV, and that peak's channel."""
    at = np.array([p.channel for p in search.real[:6]])
    change = new.energy_kev(at) - old.energy_kev(at)
    worst = int(np.argmax(np.abs(change)))
    return float(change[worst]), float(at[worst])


def _near(search: Search, scale: EnergyScale) -> Candidate:
    trial = search.bench.try_out(scale, search.noise(scale))
    return search.polished(search.bench.refined(trial, 3))


def _corrected(candidate: Candidate, search: Search, stated: _Stated, instrument: Instrument, doubtful: bool = False
               ) -> Calibration:  # fmt: skip
    """Keep the stated scale, or replace it and say by how much it was off."""
    assert stated.usable is not None
    shift, channel = _shift(search, candidate.scale, stated.usable)
    sigma = candidate.polished.offset_sigma_kev + candidate.polished.gain_sigma_kev * channel
    wrong = abs(shift) > max(CLEAR_SHIFT_KEV, 4.0 * min(sigma, 0.05))
    if doubtful and (not wrong or candidate.trial.explained < _WELL - 0.1):
        resolution, worn = _resolution(None, instrument)
        note = f"{stated.whose} could not be confirmed from the peaks; used as stated"
        return Calibration(stated.usable, resolution, stated.origin, 0.0, _joined(_joined(stated.note, note), worn))
    if not wrong:
        made = _from_candidate(candidate, stated.note, instrument)
        return replace(made, scale=stated.usable, origin=stated.origin)
    note = (
        f"{stated.whose} does not fit the peaks ({-shift * 1e3:+.0f} eV off at "
        f"{float(candidate.scale.energy_kev(channel)):.2f} keV); corrected from them"
    )
    made = _from_candidate(candidate, _joined(stated.note, note), instrument)
    return replace(made, stated=stated.scale)


def _replaced(spectrum: Spectrum, stated: _Stated, instrument: Instrument, end: float | None) -> Calibration:
    """A stated scale that no instrument can have: the scale is found as if none were stated."""
    s = stated.scale
    said = f"{stated.whose} ({s.gain_kev:g} keV a channel from {s.offset_kev:g} keV) is impossible"
    try:
        made = _found(spectrum, instrument, end)
    except Untrustworthy as error:
        raise Untrustworthy(f"{said}; {error}") from None
    return replace(made, stated=s, note=_joined(f"{said} and was left aside", made.note))


def _resolution(noise_kev: float | None, instrument: Instrument) -> tuple[Resolution, str]:
    """The resolution in force, within what a detector can have, and a word if it is worse than stated."""
    detector = instrument.detector
    stated = detector.resolution
    if noise_kev is None:
        return stated, ""
    material = detector.material
    low, high = FWHM_MN_KEV[material]
    measured = Resolution(max(noise_kev, 0.015) * 1e3, FANO_FACTOR[material], PAIR_ENERGY_EV[material])
    fwhm = measured.fwhm_mn_ka_ev
    if not low * 1e3 <= fwhm <= high * 1e3:
        return stated, ""
    if detector.fwhm_mn_ka_ev is None:
        return measured, ""
    if fwhm > WORN * detector.fwhm_mn_ka_ev:
        return measured, (
            f"the lines are {fwhm:.0f} eV wide at Mn K-alpha, not {detector.fwhm_mn_ka_ev:.0f} as stated: "
            "worn or noisy detector, or a high count rate"
        )
    return stated, ""


def _joined(first: str, second: str) -> str:
    return "; ".join(part for part in (first, second) if part)
