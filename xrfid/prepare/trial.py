"""How well whole series explain a spectrum if its scale were this one.

Greedy selection of non-negative patterns, one at a time, then a likelihood with the latitude of each line
group folded into the variance and a loss that grows only as a logarithm where nothing explains a peak.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy.optimize import nnls

from xrfid.prepare.patterns import Patterns
from xrfid.prepare.reduced import Reduced
from xrfid.response.detector import DrawnLines, draw_core, joined
from xrfid.spectrum import FWHM_PER_SIGMA, MN_KA_KEV, EnergyScale, Resolution

ENTER = 25.0
"""Gain in squared misfit asked of a candidate; twice that of a rare element."""
COST = 14.0
"""What a candidate costs in the score: choosing it among 170 and its area."""
OFFSET_COST = 8.0
"""A large offset is unusual: 6 at 0.1 keV, 37 at 1 keV (common practice, no source)."""
WIDTH_COST = 25.0
"""So is an unusual width: 25 for a factor of e."""
_BEND = 16.0
"""Squared misfit of a bin from which it counts as a logarithm."""
_DOPPLER_FANO = 0.0132
"""keV of squared FWHM per keV of energy that Doppler broadening adds around 20 keV."""


@dataclass(frozen=True, eq=False)
class Trial:
    """A scale tried: its score (smaller is better) and what explains the spectrum then."""

    scale: EnergyScale
    noise: float
    """Squared electronic FWHM, keV squared; negative if the peaks are narrower than the Fano limit."""
    score: float
    chosen: tuple[int, ...]
    areas: NDArray[np.float64]
    explained: float
    columns: NDArray[np.float64]
    pile: float
    variance: NDArray[np.float64]

    def tops(self, reduced: Reduced) -> NDArray[np.float64]:
        """Channels where the chosen candidates have their greatest counts."""
        return np.asarray(reduced.centres[np.argmax(self.columns, axis=1)]) if self.chosen else np.zeros(1)

    def resolution(self, fano: float, pair_ev: float) -> Resolution:
        """The width as a resolution; noise below 20 eV is taken as 20 eV."""
        return Resolution(max(math.sqrt(max(self.noise, 0.0)) * 1e3, 20.0), fano, pair_ev)


class Bench:
    """Where scales are tried on one spectrum."""

    def __init__(self, reduced: Reduced, patterns: Patterns, material: str, fano: float, pair_ev: float,
                 usual_fwhm_kev: float) -> None:  # fmt: skip
        self.reduced, self.patterns = reduced, patterns
        self.slope = FWHM_PER_SIGMA**2 * fano * pair_ev * 1e-3
        """Squared FWHM per keV that the Fano limit adds, keV."""
        self._usual = usual_fwhm_kev
        p = patterns
        sharp = np.array([k is not None or n == "source coherent" for k, n in zip(p.keys, p.names, strict=True)])
        on = sharp[p.of]
        lines = DrawnLines(p.energy_kev[on], p.share[on], p.of[on])
        self._sharp = joined(lines, lines.escapes(material))
        self._wide = DrawnLines(p.energy_kev[~on], p.share[~on], p.of[~on])
        loose = on & (p.free > 0)
        self._loose = DrawnLines(p.energy_kev[loose], p.share[loose] * p.free[loose], p.of[loose])
        self._asked = ENTER * (1.0 + p.rare)

    def noise_of(self, scale: EnergyScale, channel: float, fwhm: float) -> float:
        """Squared electronic FWHM, keV squared, that a peak's width means on a scale."""
        return float((fwhm * scale.gain_kev) ** 2 - self.slope * float(scale.energy_kev(channel)))

    def try_out(self, scale: EnergyScale, noise: float, most: int = 14, passes: int = 2) -> Trial:
        """Explain the spectrum on a scale with at most `most` candidates."""
        r = self.reduced
        edges = scale.offset_kev + scale.gain_kev * r.edges
        columns = self._drawn(self._sharp, noise, edges)
        if self._wide.energy_kev.size:
            columns += self._drawn(self._wide, noise, edges, wide=True)
        pile = r.pile_column(scale.offset_kev / scale.gain_kev)
        variance = r.variance
        for _ in range(passes):
            chosen, areas = self._select(columns, pile, variance, most)
            variance = r.variance + self._latitude(chosen, areas, noise, edges)
        picked = columns[chosen]
        model = areas[: len(chosen)] @ picked + areas[-1] * pile
        rest = self._without_hats(r.net - model, variance)
        squared = rest * rest / variance
        score = float(np.sum(_BEND * np.log1p(squared / _BEND) + np.log(variance / r.variance)))
        score += self.cost(chosen, scale, noise)
        plain = self._without_hats(r.net, r.variance) ** 2 / r.variance
        explained = 1.0 - float(np.minimum(squared, plain).sum() / max(plain.sum(), 1e-9))
        return Trial(scale, noise, score, tuple(chosen), areas, explained, picked, float(areas[-1]), variance)

    def cost(self, chosen: list[int], scale: EnergyScale, noise: float) -> float:
        """What candidates, an unusual offset and an unusual width add to a score."""
        fwhm = math.sqrt(max(noise + self.slope * MN_KA_KEV, 1e-4))
        unusual = OFFSET_COST * math.log1p((scale.offset_kev / 0.1) ** 2)
        unusual += WIDTH_COST * math.log(fwhm / self._usual) ** 2
        return unusual + COST * len(chosen) + ENTER * float(self.patterns.rare[chosen].sum())

    def _drawn(self, lines: DrawnLines, noise: float, edges: NDArray[np.float64], wide: bool = False
               ) -> NDArray[np.float64]:  # fmt: skip
        slope = self.slope + (_DOPPLER_FANO if wide else 0.0)
        return draw_core(lines, _width(noise, slope), edges, len(self.patterns.names))

    def _select(self, columns: NDArray[np.float64], pile: NDArray[np.float64], variance: NDArray[np.float64],
                most: int) -> tuple[list[int], NDArray[np.float64]]:  # fmt: skip
        """Greedy selection; the areas end with that of the sum peaks."""
        weight = 1.0 / np.sqrt(variance)
        basis = np.linalg.qr((self.reduced.hats * weight).T)[0]
        y = self.reduced.net * weight
        y = y - basis @ (basis.T @ y)
        scaled = np.vstack([columns, pile]) * weight
        whole = np.einsum("ij,ij->i", scaled, scaled)
        scaled -= (scaled @ basis) @ basis.T
        norm = np.einsum("ij,ij->i", scaled, scaled)
        dead = norm <= 0.02 * whole  # outside the channels, or as smooth as the continuum
        length = np.sqrt(np.where(dead, 1.0, norm))  # unit columns, or the solver drops the small ones
        scaled = np.where(dead[:, None], 0.0, scaled / length[:, None])
        last = columns.shape[0]
        chosen, rest = [last], y
        areas = np.zeros(1)
        asked = np.append(self._asked, np.inf)
        for _ in range(most):
            gain = np.maximum(scaled @ rest, 0.0) ** 2 - (asked - ENTER)
            gain[chosen] = 0.0
            best = int(np.argmax(gain))
            if gain[best] < ENTER:
                break
            chosen.append(best)
            areas = nnls(scaled[chosen].T, y)[0]
            rest = y - areas @ scaled[chosen]
        areas = areas / length[chosen]
        kept = [(c, a) for c, a in zip(chosen[1:], areas[1:], strict=True) if a > 0]
        return [c for c, _ in kept], np.array([a for _, a in kept] + [areas[0]])

    def _latitude(self, chosen: list[int], areas: NDArray[np.float64], noise: float, edges: NDArray[np.float64]
                  ) -> NDArray[np.float64]:  # fmt: skip
        """Variance from what a matrix may do to the shares of line groups."""
        area = np.zeros(len(self.patterns.names))
        area[chosen] = areas[:-1]
        on = area[self._loose.column] > 0
        lines = DrawnLines(self._loose.energy_kev[on], self._loose.weight[on] * area[self._loose.column[on]],
                           np.zeros(int(on.sum()), dtype=np.intp))  # fmt: skip
        return np.asarray(draw_core(lines, _width(noise, self.slope), edges, 1)[0] ** 2)

    def _without_hats(self, values: NDArray[np.float64], variance: NDArray[np.float64]) -> NDArray[np.float64]:
        """Take the best smooth correction of the continuum off, strong misfits given little weight."""
        weight = 1.0 / np.sqrt(variance + values**2 / _BEND)
        basis = np.linalg.qr((self.reduced.hats * weight).T)[0]
        scaled = values * weight
        return np.asarray((scaled - basis @ (basis.T @ scaled)) / weight)

    def refined(self, trial: Trial, rounds: int = 3, most: int = 14) -> Trial:
        """Move offset, gain and width to where the explained peaks want them (Gauss-Newton)."""
        best = trial
        limit = 0.5 * float(_width(trial.noise, self.slope).fwhm_kev(6.0))
        for _ in range(rounds):
            step = damped(self.step(best)[0], best.tops(self.reduced), limit, best.scale.gain_kev)
            noise = float(np.clip(best.noise + step[2], -0.35 * self.slope * 5.9, 1.0))
            scale = EnergyScale(best.scale.offset_kev + float(step[0]), best.scale.gain_kev + float(step[1]))
            new = self.try_out(scale, noise, most)
            if new.score > best.score - 0.5:
                return new if new.score < best.score else best
            best = new
        return best

    def step(self, trial: Trial) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
        """Gauss-Newton step in (offset, gain, squared noise) and its covariance, shapes (3,) and (3, 3)."""
        r = self.reduced
        if not trial.chosen:
            return np.zeros(3), np.diag(np.full(3, np.inf))
        gain = trial.scale.gain_kev
        model = trial.areas[:-1] @ trial.columns
        width = np.diff(r.edges)
        density = model / width
        slope = np.gradient(density, r.centres) * width
        bend = np.gradient(np.gradient(density, r.centres), r.centres) * width
        moves = np.stack([slope / gain, slope * r.centres / gain, 0.5 * bend / (gain * FWHM_PER_SIGMA) ** 2])
        pile = r.pile_column(trial.scale.offset_kev / gain)
        rest = r.net - model - trial.pile * pile
        weight = 1.0 / np.sqrt(trial.variance * (1.0 + rest**2 / trial.variance / _BEND))
        design = np.vstack([moves, trial.columns, pile, r.hats]) * weight
        scale = np.sqrt(np.einsum("ij,ij->i", design, design)) + 1e-12
        design = design / scale[:, None]
        normal = design @ design.T + 1e-6 * np.eye(design.shape[0])
        inverse = np.linalg.inv(normal)
        solved = inverse @ (design @ (rest * weight)) / scale
        covariance = inverse[:3, :3] / np.outer(scale[:3], scale[:3])
        return solved[:3], covariance


def damped(step: NDArray[np.float64], channels: NDArray[np.float64], limit_kev: float, gain_kev: float
           ) -> NDArray[np.float64]:  # fmt: skip
    """Shorten a step in (offset, gain, ...): no line at `channels` by more than `limit_kev`, the gain by 10 %."""
    move = float(np.max(np.abs(step[0] + step[1] * channels), initial=0.0))
    by = min(1.0, limit_kev / max(move, 1e-12), 0.1 * gain_kev / max(abs(float(step[1])), 1e-15))
    return np.asarray(step * by)


def _width(noise: float, slope: float) -> Resolution:
    """A resolution with this squared noise (keV squared) and Fano slope (keV).

    Peaks narrower than the Fano limit take their width at 6 keV from a smaller slope.
    """
    if noise < 0:
        slope, noise = max(slope + noise / 6.0, 0.3 * slope), 0.0
    return Resolution(math.sqrt(noise) * 1e3, slope / FWHM_PER_SIGMA**2, 1e3)
