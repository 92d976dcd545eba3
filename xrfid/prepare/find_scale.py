"""The energy scale from counts alone: no header, no known element, at best the anode and the voltage.

Peaks are found without a scale; a sieve over all offsets and gains leaves a few dozen on which whole series reach
the peaks; each of these is tried against the spectrum, moved to where its lines fit best, and compared. The best
scale is returned only if it is well ahead of every different one.
"""

from __future__ import annotations

from collections.abc import Iterable
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from xrfid.errors import Untrustworthy
from xrfid.instrument import Instrument
from xrfid.prepare.end_point import end_cost, stop_channel
from xrfid.prepare.patterns import Patterns, only, patterns_of
from xrfid.prepare.peaks import find_peaks
from xrfid.prepare.polish import Polished, polish
from xrfid.prepare.reduced import Reduced, reduce
from xrfid.prepare.sieve import Grid, Sieve, grid_of
from xrfid.prepare.trial import Bench, Trial
from xrfid.response.detector import LineShape, escape_lines
from xrfid.spectrum import FANO_FACTOR, MN_KA_KEV, PAIR_ENERGY_EV, EnergyScale

FWHM_MN_KEV = {"Si": (0.105, 0.75), "Ge": (0.095, 0.75), "CdTe": (0.13, 0.95)}
"""Width at Mn K-alpha that a working detector can have (common practice, no source)."""
LEAST_LEAD = 60.0
"""Deviance by which the best scale must beat every different one."""
LEAST_LEAD_SHARE = 0.05
"""The same as a share of what the best scale explains, for spectra with so many counts that every model misfits."""
WIDE_EV = 300.0
"""From this width at Mn K-alpha on neighbouring elements look alike, and the lead must be twice as large."""
LEAST_EXPLAINED = 0.8
_ALIGNED = 700
_SIEVED, _MOVED, _POLISHED = 28, 9, 5


@dataclass(frozen=True, eq=False)
class Candidate:
    """A scale with the candidates that explain the spectrum on it, polished, and its score (smaller is better)."""

    trial: Trial
    polished: Polished
    score: float

    @property
    def scale(self) -> EnergyScale:
        """The polished scale."""
        return self.polished.scale


@dataclass(frozen=True, eq=False)
class Found:
    """A scale found, the best different one, and how far in deviance that is behind."""

    best: Candidate
    rival: Candidate | None
    lead: float
    names: tuple[str, ...]
    """What explains the spectrum on this scale, strongest first; a by-product, no identification."""


class Search:
    """Peaks, bins and patterns of one spectrum, ready for scales to be tried on."""

    def __init__(self, counts: NDArray[np.float64], instrument: Instrument, end_kev: float | None,
                 elements: frozenset[str] | None = None) -> None:  # fmt: skip
        self.peaks, self.widths = find_peaks(counts)
        self.real = [p for p in self.peaks if p.area > 0]
        self.detector = instrument.detector
        material = instrument.detector.material
        self.fano, self.pair_ev = FANO_FACTOR[material], PAIR_ENERGY_EV[material]
        self.escape_kev = max(escape_lines(material), key=lambda line: line.share * line.yield_).loss_kev
        stated = instrument.detector.fwhm_mn_ka_ev
        self.bounds = FWHM_MN_KEV[material] if stated is None else (0.7e-3 * stated, 1.8e-3 * stated)
        self.usual = instrument.detector.resolution.fwhm_mn_ka_ev * 1e-3
        self.reduced: Reduced = reduce(counts, self.widths)
        known = instrument.tube is not None and "anode" in instrument.tube.model_fields_set
        self.patterns: Patterns = patterns_of(instrument, end_kev, known)
        if elements is not None:
            self.patterns = only(self.patterns, elements)
        self.end_kev = end_kev
        self._stop, self._stops = stop_channel(counts)
        self.bench = Bench(self.reduced, self.patterns, material, self.fano, self.pair_ev, self.usual)

    def noise(self, scale: EnergyScale) -> float:
        """Squared electronic FWHM, keV squared, that the strong peaks mean on a scale, within the detector's bounds."""
        at = np.array([p.channel for p in self.real[:5]])
        square = np.array([self.bench.noise_of(scale, c, f) for c, f in zip(at, self.widths.fwhm(at), strict=True)])
        fano = self.bench.slope * MN_KA_KEV
        return float(np.clip(np.median(square), self.bounds[0] ** 2 - fano, self.bounds[1] ** 2 - fano))

    def end_cost(self, offset_kev: NDArray[np.float64], gain_kev: NDArray[np.float64]) -> NDArray[np.float64]:
        """What scales cost because of where the spectrum stops, in deviance."""
        return end_cost(offset_kev + gain_kev * self._stop, self._stops, self.end_kev)

    def _tried(self, scale: EnergyScale) -> tuple[float, Trial]:
        """A first trial, and its score with the cost of the spectrum's end."""
        cost = float(self.end_cost(np.array(scale.offset_kev), np.array(scale.gain_kev)))
        trial = self.bench.try_out(scale, self.noise(scale), 6, 1)
        return trial.score + cost, trial

    def hypotheses(self) -> list[EnergyScale]:
        """The scales that the sieve leaves, best first, no two alike."""
        at = np.array(sorted(p.channel for p in self.real[:5]))
        grid = grid_of(self.real, (at, self.widths.fwhm(at)), self.bench.slope, self.bounds, self.usual, self.end_kev)
        grid = Grid(grid.offset_kev, grid.gain_kev, grid.cost + 0.25 * self.end_cost(grid.offset_kev, grid.gain_kev))
        sieve = Sieve(self.reduced, self.patterns, self.real, self.escape_kev)
        best = np.argsort(-sieve.scores(grid))[:_ALIGNED]
        grid, scores = sieve.aligned(grid.part(best))
        order = np.argsort(-scores)
        low, high = at[0], max(p.channel for p in self.real[:8])
        kept: list[EnergyScale] = []
        for i in order:
            scale = EnergyScale(float(grid.offset_kev[i]), float(grid.gain_kev[i]))
            if all(_apart(scale, k, (low, high)) > 0.4 * self._fwhm(k, (low, high)) for k in kept):
                kept.append(scale)
            if len(kept) == _SIEVED:
                break
        return kept

    def _fwhm(self, scale: EnergyScale, at: tuple[float, float]) -> float:
        return float(np.min(self.widths.fwhm(np.array(at)))) * scale.gain_kev

    def best(self, scales: Iterable[EnergyScale]) -> list[Trial]:
        """Trials of the most promising of some scales, moved to where their lines fit, best first, no two alike."""
        first = sorted((self._tried(s) for s in scales), key=lambda t: t[0])[:_MOVED]
        moved = sorted((self._moved(t, 2, 7) for _, t in first), key=lambda t: t.score)
        kept: list[Trial] = []
        for trial in moved:
            if all(different(trial.scale, p.scale) for p in kept):
                kept.append(self._moved(self.bench.try_out(trial.scale, trial.noise), 3, 14))
            if len(kept) == _POLISHED:
                break
        return sorted(kept, key=lambda t: t.score)

    def _moved(self, trial: Trial, rounds: int, most: int) -> Trial:
        """A trial refined, its score with the cost of the spectrum's end."""
        moved = self.bench.refined(trial, rounds, most)
        cost = float(self.end_cost(np.array(moved.scale.offset_kev), np.array(moved.scale.gain_kev)))
        return replace(moved, score=moved.score + cost)

    def polished(self, trial: Trial) -> Candidate:
        """A trial with its exact scale, width and score."""
        if not trial.chosen:
            resolution = trial.resolution(self.fano, self.pair_ev)
            return Candidate(trial, Polished(trial.scale, resolution, np.inf, np.inf, (), np.inf), np.inf)
        shape = LineShape.of(self.detector).with_resolution(trial.resolution(self.fano, self.pair_ev))
        most = self.bounds[1]
        made = polish(self.reduced, self.patterns, trial.chosen, shape, trial.scale, self.detector.material, most)
        noise = (made.resolution.noise_ev * 1e-3) ** 2
        score = made.chi2 * self.reduced.net.size + self.bench.cost(list(trial.chosen), made.scale, noise)
        score += float(self.end_cost(np.array(made.scale.offset_kev), np.array(made.scale.gain_kev)))
        return Candidate(trial, made, score)


def _apart(a: EnergyScale, b: EnergyScale, channels: tuple[float, float]) -> float:
    at = np.array(channels)
    return float(np.max(np.abs(a.energy_kev(at) - b.energy_kev(at))))


def different(a: EnergyScale, b: EnergyScale) -> bool:
    """Whether two scales are two answers: gains 1 % or offsets 100 eV apart."""
    return abs(a.gain_kev / b.gain_kev - 1.0) > 0.01 or abs(a.offset_kev - b.offset_kev) > 0.1


def find_scale(counts: NDArray[np.float64], instrument: Instrument, end_kev: float | None = None) -> Found:
    """Find the energy scale of bare counts.

    Parameters
    ----------
    counts : ndarray, shape (n_channels,)
    instrument : Instrument
        Its source and detector are used as far as they are stated.
    end_kev : float, optional
        The source's end point (tube voltage), keV; the instrument's own if not given.

    Returns
    -------
    Found

    Raises
    ------
    Untrustworthy
        If there are too few peaks, nothing explains them, or two scales explain them equally well.
    """
    search = Search(counts, instrument, end_kev or instrument.voltage_kv)
    return decide(search, search_trials(search))


def search_trials(search: Search, extra: tuple[EnergyScale, ...] = ()) -> list[Trial]:
    """Try scales; refuse when there is nothing to try them on."""
    if len(search.real) < 2:
        few = "no peak stands" if not search.real else "only one peak stands"
        raise Untrustworthy(f"no energy scale: {few} out, which is too little to find it; give the scale")
    scales = [*search.hypotheses(), *extra]
    if not scales:
        raise Untrustworthy(
            "no energy scale: none puts the peaks at possible widths below the source's end; give the scale"
        )
    return search.best(scales)


def decide(search: Search, trials: list[Trial]) -> Found:
    """Polish the best trials, and accept the best if it is well ahead of every different one."""
    candidates = sorted((search.polished(t) for t in trials), key=lambda c: c.score)
    best = candidates[0]
    rival = next((c for c in candidates[1:] if different(c.scale, best.scale)), None)
    if best.trial.explained < LEAST_EXPLAINED or not best.trial.chosen:
        raise Untrustworthy(
            "no energy scale: no set of element lines explains the peaks; give the scale or one known element"
        )
    lead = np.inf if rival is None else rival.score - best.score
    needed = LEAST_LEAD + LEAST_LEAD_SHARE * abs(best.score)
    if best.polished.resolution.fwhm_mn_ka_ev > WIDE_EV:
        needed *= 2.0
    if rival is not None and lead < needed:
        raise Untrustworthy(
            f"no energy scale: two explain the peaks equally well: {_words(search, best)}, or {_words(search, rival)}; "
            "give the scale or one known element"
        )
    again = search.polished(search.bench.try_out(best.scale, (best.polished.resolution.noise_ev * 1e-3) ** 2))
    if again.score < best.score and not different(again.scale, best.scale):
        best = again
    return Found(best, rival, float(lead), tuple(names_of(search, best.trial)))


def names_of(search: Search, trial: Trial, most: int = 5) -> list[str]:
    """Names of what explains the most counts."""
    order = np.argsort(-trial.areas[:-1])[:most]
    return [search.patterns.names[trial.chosen[i]] for i in order]


def _words(search: Search, candidate: Candidate) -> str:
    s = candidate.scale
    names = ", ".join(names_of(search, candidate.trial, 3))
    return f"{s.gain_kev * 1e3:.4g} eV a channel from {s.offset_kev:+.3f} keV ({names})"
