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
from xrfid.prepare.polish import LINE_ENERGY_EV
from xrfid.response.detector import escape_lines
from xrfid.spectrum import FANO_FACTOR, PAIR_ENERGY_EV, EnergyScale, Resolution, Spectrum

CLEAR_SHIFT_KEV = 0.01
"""A stated scale is called wrong only if a strong line lies farther off than this, and than 4 sigma."""
WORN = 1.3
"""Measured over stated width from which the detector is called worn or noisy."""
BROADENED = 1.7
"""Peaks wider still are no lines but scattered radiation (Doppler width) or blends: the stated width stays."""


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
    seen = look(spectrum.counts, stated.usable, instrument.detector.resolution, patterns, escape.loss_kev, end)
    if not seen.agrees:
        other = instrument.energy_scale
        if origin == "file" and other is not None:
            made = _checked(spectrum, other, "instrument", instrument, end)
            note = f"{stated.whose} does not fit the peaks; that of the instrument file is taken"
            return replace(made, stated=stated.scale, note=_joined(note, made.note))
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
        return _kept(stated, "", instrument, search)
    near = _near(search, stated.usable)
    if near.trial.explained > _WELL and seen.covered > 0.4:
        if _of_a_neighbour(near, stated.usable) < _SAME_ELEMENTS:
            return _corrected(near, search, stated, instrument)
        return _near_by(search, stated, instrument)
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
        note = (
            f"{stated.whose} does not fit the peaks, but this spectrum cannot say what the right one is; used as "
            "stated; calibrate on known elements"
        )
        return _kept(stated, note, instrument, search)
    return _corrected(found.best, search, stated, instrument)


_AROUND_KEV = (-0.45, -0.22, 0.0, 0.22, 0.45)
_SAME_ELEMENTS = 0.36
"""Shift, in distances to the neighbouring element's line, up to which the lines are taken for the stated ones."""
_WELL = 0.9
"""Share of the peaks explained near the stated scale that makes a search for others needless."""


def _shift(candidate: Candidate, new: EnergyScale, old: EnergyScale) -> tuple[float, float]:
    """Largest change of energy at a clear line, keV, and that line's energy."""
    energy = np.array([r[1] for r in candidate.polished.residuals if r[3] < 10.0] or [6.0])
    at = new.channel(energy)
    change = new.energy_kev(at) - old.energy_kev(at)
    worst = int(np.argmax(np.abs(change)))
    return float(change[worst]), float(energy[worst])


def _of_a_neighbour(candidate: Candidate, stated: EnergyScale) -> float:
    """Largest shift of a clear line, as a share of the distance to the same line of the next element.

    Moseley's law: K-alpha lies at 10.2 eV (Z - 1)^2, so the next one is ``2 sqrt(10.2 eV E)`` away; L-alpha about
    0.42 times as far.
    """
    clear = [r for r in candidate.polished.residuals if r[3] < 10.0]
    if not clear:
        return 0.0
    energy = np.array([r[1] for r in clear])
    spacing = 2.0 * np.sqrt(0.0102 * energy) * np.array([1.0 if r[0].split()[1][0] == "K" else 0.42 for r in clear])
    moved = np.abs(energy - stated.energy_kev(candidate.scale.channel(energy)))
    return float(np.max(moved / spacing))


def _near(search: Search, scale: EnergyScale) -> Candidate:
    trial = search.bench.try_out(scale, search.noise(scale))
    return search.polished(search.bench.refined(trial, 3))


def _corrected(candidate: Candidate, search: Search, stated: _Stated, instrument: Instrument, doubtful: bool = False
               ) -> Calibration:  # fmt: skip
    """Keep the stated scale, or replace it and say by how much it was off."""
    assert stated.usable is not None
    scale = _anchored(candidate, stated.usable)
    shift, energy = _shift(candidate, scale, stated.usable)
    if doubtful and candidate.trial.explained < _WELL - 0.1:
        note = f"{stated.whose} could not be confirmed from the peaks; used as stated"
        return _kept(stated, note, instrument, search)
    if abs(shift) <= CLEAR_SHIFT_KEV:
        made = _from_candidate(candidate, stated.note, instrument)
        return replace(made, scale=stated.usable, origin=stated.origin)
    note = (
        f"{stated.whose} does not fit the peaks ({-shift * 1e3:+.0f} eV off at {energy:.2f} keV); corrected from them"
    )
    made = _from_candidate(candidate, _joined(stated.note, note), instrument)
    return replace(made, scale=scale, stated=stated.scale)


def _kept(stated: _Stated, note: str, instrument: Instrument, search: Search) -> Calibration:
    """The stated scale, because nothing better is sure; the fit may move it as far as such scales are off."""
    assert stated.usable is not None
    noise = math.sqrt(max(search.noise(stated.usable), 0.0)) if search.real else None
    resolution, worn = _resolution(noise, instrument)
    said = _joined(_joined(stated.note, note), worn)
    gain_sigma = _DOUBTFUL_GAIN * stated.usable.gain_kev
    return Calibration(stated.usable, resolution, stated.origin, 0.0, said, _DOUBTFUL_KEV, gain_sigma)


_DOUBTFUL_KEV, _DOUBTFUL_GAIN = 0.1, 0.01
"""Standard uncertainty of a stated scale that the peaks do not confirm, offset and relative gain."""


def _anchored(candidate: Candidate, stated: EnergyScale) -> EnergyScale:
    """The scale that clear lines ask for, drawn towards the stated one where they do not reach.

    One element's lines fix the energy there and nothing else; a scale from them alone would turn about that energy.
    Far from the stated scale (a wrong factor, say) there is nothing to be drawn to.
    """
    lines = [r for r in candidate.polished.residuals if r[3] < 10.0]
    exact = [r for r in lines if r[3] < 4.0]
    spread = max((r[1] for r in exact), default=1.0) / min((r[1] for r in exact), default=1.0)
    settled = len({r[0].split()[0] for r in exact}) > 1 and spread > 1.15
    if not lines or settled or abs(candidate.scale.gain_kev / stated.gain_kev - 1.0) > 0.1:
        return candidate.scale
    energy, shift, sigma = (np.array([r[i] for r in lines]) for i in (1, 2, 3))
    channel = candidate.scale.channel(energy - 1e-3 * shift)
    blur = 20.0 * candidate.polished.resolution.fwhm_kev(energy)  # 2 per cent of the width, in eV
    weight = 1.0 / (1e-6 * (sigma**2 + LINE_ENERGY_EV**2 + blur**2))
    design = np.stack([np.ones_like(channel), channel])
    normal = (design * weight) @ design.T
    normal += np.diag([_OFFSET_PRIOR_KEV**-2, (_GAIN_PRIOR * stated.gain_kev) ** -2])
    step = np.linalg.solve(normal, design @ (weight * (energy - stated.energy_kev(channel))))
    return EnergyScale(stated.offset_kev + float(step[0]), stated.gain_kev + float(step[1]))


_OFFSET_PRIOR_KEV, _GAIN_PRIOR = 0.2, 0.02
"""How far a stated scale is off at all, as standard deviations."""


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
    if WORN < fwhm / detector.fwhm_mn_ka_ev < BROADENED:
        return measured, (
            f"the lines are {fwhm:.0f} eV wide at Mn K-alpha, not {detector.fwhm_mn_ka_ev:.0f} as stated: "
            "worn or noisy detector, or a high count rate"
        )
    return stated, ""


def _joined(first: str, second: str) -> str:
    return "; ".join(part for part in (first, second) if part)
