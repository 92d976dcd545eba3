"""The last step to an exact scale: lines with their full shape, each line group free within its latitude.

Gauss-Newton on offset, gain and squared noise; areas, line-group shares, sum peaks and a smooth correction of the
continuum are solved for at the same time, so that none of them pulls the scale.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from xrfid.atoms.lines import GROUPS
from xrfid.prepare.patterns import Patterns
from xrfid.prepare.reduced import Reduced, hats
from xrfid.prepare.snip import smoothed, snip
from xrfid.prepare.trial import damped
from xrfid.response.detector import DrawnLines, LineShape, draw, joined
from xrfid.response.series import SeriesKey
from xrfid.spectrum import FWHM_PER_SIGMA, EnergyScale, Resolution

SYSTEMATIC = 0.012
"""Relative misfit left when line shapes are typical ones, not this detector's."""
LINE_ENERGY_EV = 1.5
"""What published line energies, and unresolved satellites, are good for (`xrfid.atoms.lines.GROUPS`)."""
_BEND = 12.0
_ROUNDS = 8
_CLIP_BINS = 12
_HAT_BINS = 10.0
_CLEAR = 12.0
"""Significance of a line group whose own position is worth a residual."""


@dataclass(frozen=True, eq=False)
class Polished:
    """An exact scale: offset and gain with standard uncertainties, width, and what each line group says."""

    scale: EnergyScale
    resolution: Resolution
    offset_sigma_kev: float
    gain_sigma_kev: float
    residuals: tuple[tuple[str, float, float, float], ...]
    """Per line group: name, energy (keV), residual (eV), its standard uncertainty (eV)."""
    chi2: float
    """Mean squared misfit of a bin, capped at `_BEND`."""

    @property
    def rms_ev(self) -> float:
        """Root mean square residual, eV, weighted by what the line groups can say."""
        if not self.residuals:
            return 0.0
        value = np.array([r[2] for r in self.residuals])
        weight = np.array([1.0 / (r[3] ** 2 + 1.0) for r in self.residuals])
        return float(np.sqrt(np.average(value**2, weights=weight)))


def polish(reduced: Reduced, patterns: Patterns, chosen: tuple[int, ...], shape: LineShape, scale: EnergyScale,
           material: str, most_noise_kev: float, moving: bool = True) -> Polished:  # fmt: skip
    """Fit offset, gain and width to a spectrum that the `chosen` candidates explain.

    Parameters
    ----------
    reduced : Reduced
    patterns : Patterns
    chosen : tuple of int
        Candidates that explain the spectrum.
    shape : LineShape
        Starting widths; tail and shelf as they are.
    scale : EnergyScale
        Starting scale.
    material : str
        Detector material, for the escape peaks.
    most_noise_kev : float
        Largest electronic width (FWHM).
    moving : bool
        False to leave offset and gain as they are: widths and residuals only.
    """
    work = LineWork(reduced, patterns, _with_companions(patterns, chosen), material)
    resolution = shape.resolution
    for _ in range(_ROUNDS):
        solved = work.solve(scale, shape.with_resolution(resolution))
        step = damped(solved.step, solved.channels, 0.4 * float(resolution.fwhm_kev(6.0)), scale.gain_kev)
        if moving:
            scale = EnergyScale(scale.offset_kev + float(step[0]), scale.gain_kev + float(step[1]))
        noise = float(np.clip((resolution.noise_ev * 1e-3) ** 2 + step[2], 0.015**2, most_noise_kev**2))
        resolution = Resolution(1e3 * math.sqrt(noise), resolution.fano, resolution.pair_energy_ev)
        if np.max(np.abs(step[0] + step[1] * solved.channels)) < 2e-4:
            break
    solved = work.solve(scale, shape.with_resolution(resolution))
    sigma = _uncertainty(solved, scale, reduced)
    return Polished(scale, resolution, sigma[0], sigma[1], solved.residuals, solved.chi2)


def _uncertainty(solved: _Solved, scale: EnergyScale, reduced: Reduced) -> tuple[float, float]:
    """Standard uncertainties of offset and gain, keV: counting, and what line energies are good for."""
    counting = np.diag(solved.covariance)[:2] * max(solved.chi2, 1.0)
    if len(solved.residuals) < 2:
        return float(np.sqrt(counting[0])), float(np.sqrt(counting[1]))
    channel = scale.channel(np.array([r[1] for r in solved.residuals]))
    weight = 1.0 / (np.array([r[3] for r in solved.residuals]) ** 2 + LINE_ENERGY_EV**2)
    design = np.stack([np.ones_like(channel), channel])
    both = np.diag(np.linalg.pinv((design * weight) @ design.T, hermitian=True)) * 1e-6
    return float(np.sqrt(max(counting[0], both[0]))), float(np.sqrt(max(counting[1], both[1])))


def _with_companions(patterns: Patterns, chosen: tuple[int, ...]) -> tuple[int, ...]:
    """Add the softer series that a chosen one brings along, lest another element's lines stand in for them.

    The M lines of lead under the K lines of sulphur would shift the scale by 40 eV there.
    """
    place = {k: i for i, k in enumerate(patterns.keys) if k is not None}
    out = list(chosen)
    for i in chosen:
        key = patterns.keys[i]
        if key is None:
            continue
        softer = {"K": "L", "L": "M", "M": "L"}[key.series]
        heavy = key.z >= (45 if key.series == "K" else 72)
        other = place.get(SeriesKey(key.z, softer))
        if heavy and other is not None and other not in out:
            out.append(other)
    return tuple(out)


@dataclass(frozen=True, eq=False)
class _Solved:
    step: NDArray[np.float64]
    channels: NDArray[np.float64]
    """Where the candidates have their greatest counts."""
    covariance: NDArray[np.float64]
    residuals: tuple[tuple[str, float, float, float], ...]
    chi2: float


class LineWork:
    """The chosen candidates' line groups on one spectrum, ready to be solved for on any scale."""

    def __init__(self, reduced: Reduced, patterns: Patterns, chosen: tuple[int, ...], material: str) -> None:
        self.reduced, self.material = reduced, material
        width = np.diff(reduced.edges)
        # clipped widely, or the continuum follows the valley between close peaks and narrows both
        self.net = reduced.counts - snip(smoothed(reduced.counts / width, 3.0), np.full(width.size, _CLIP_BINS)) * width
        self.hats = hats(width.size, _HAT_BINS)
        self.names: list[str] = []
        self.latitude: list[float] = []
        self.share: list[float] = []
        self.owner: list[int] = []
        self.energy: list[float] = []
        rows, column = [], []
        self._wide: list[bool] = []
        for k, i in enumerate(chosen):
            on = np.flatnonzero(patterns.of == i)
            for g in np.unique(patterns.group[on]):
                these = on[patterns.group[on] == g]
                share = patterns.share[these]
                rows.append(these)
                column.append(np.full(these.size, len(self.names)))
                element = patterns.names[i].split()[0]
                wide = patterns.keys[i] is None and "incoherent" in patterns.names[i]
                self.names.append(patterns.names[i] if wide else f"{element} {GROUPS[int(g)].name}")
                self._wide.append(wide)
                self.latitude.append(float(patterns.free[these[0]]))
                self.share.append(float(share.sum()))
                self.owner.append(k)
                self.energy.append(float(np.average(patterns.energy_kev[these], weights=share)))
        index = np.concatenate(rows)
        wide = np.array(self._wide)[np.concatenate(column)]
        lines = DrawnLines(patterns.energy_kev[index], patterns.share[index], np.concatenate(column))
        self._sharp = DrawnLines(lines.energy_kev[~wide], lines.weight[~wide], lines.column[~wide])
        self._broad = DrawnLines(lines.energy_kev[wide], lines.weight[wide], lines.column[wide])
        self._n = len(chosen)
        self._escapes: dict[int, DrawnLines] = {}

    def columns(self, scale: EnergyScale, shape: LineShape) -> NDArray[np.float64]:
        """One column a line group, carrying its share of its candidate, shape (n_groups, n)."""
        edges = scale.offset_kev + scale.gain_kev * self.reduced.edges
        n = len(self.names)
        out = draw(joined(self._sharp, self._sharp.escapes(self.material)), shape, edges, n)
        if self._broad.energy_kev.size:
            r = shape.resolution
            doppler = 0.026 * float(self._broad.energy_kev.mean()) * 1e3
            wide = Resolution(math.hypot(r.noise_ev, doppler), r.fano, r.pair_energy_ev)
            out += draw(self._broad, shape.with_resolution(wide), edges, n)
        return out

    def solve(self, scale: EnergyScale, shape: LineShape) -> _Solved:
        """One Gauss-Newton step, with two rounds for areas that the latitudes depend on."""
        r = self.reduced
        groups = self.columns(scale, shape)
        owner = np.array(self.owner)
        series = np.zeros((self._n, groups.shape[1]))
        np.add.at(series, owner, groups)
        loose = np.flatnonzero(np.array(self.latitude) > 0)
        pile = r.pile_column(scale.offset_kev / scale.gain_kev)
        variance = np.maximum(r.counts, 1.0) + (SYSTEMATIC * np.maximum(self.net, 0.0)) ** 2
        area = np.maximum(series @ (self.net / variance), 0.0) / np.maximum(np.sum(series**2 / variance, axis=1), 1e-30)
        rest = np.zeros_like(self.net)
        for _ in range(3):
            model_groups = groups * area[owner][:, None]
            moves = self._moves(model_groups.sum(axis=0), scale)
            blocks = [moves, series, groups[loose], pile[None], self.hats]
            weight = 1.0 / np.sqrt(variance * (1.0 + rest**2 / variance / _BEND))
            prior = np.array(self.latitude)[loose] * np.maximum(area[owner[loose]], 1e-6)
            solution, inverse = _ridge(np.vstack(blocks) * weight, self.net * weight, 3 + self._n, prior)
            fitted = solution[3 : 3 + self._n]
            area = np.maximum(fitted, 1e-9)
            extra = solution[3 + self._n : 3 + self._n + loose.size]
            model = solution @ np.vstack(blocks)
            rest = self.net - model
        amount = area[owner]
        amount[loose] += extra
        residuals = self._residuals(groups, np.maximum(amount, 0.0), rest + solution[:3] @ moves, variance, scale)
        chi2 = float(np.mean(np.minimum(rest**2 / variance, _BEND)))
        channels = r.centres[np.argmax(series, axis=1)]
        return _Solved(solution[:3], channels, inverse[:3, :3], residuals, chi2)

    def misfit(self, scale: EnergyScale, shape: LineShape, robust: NDArray[np.float64] | None
               ) -> tuple[NDArray[np.float64], NDArray[np.float64]]:  # fmt: skip
        """Weighted misfit of a scale with the best areas, and the weights to pass in as `robust` next time.

        The areas are solved for inside, so that a search over scale and width sees these few alone. The last entries
        are what the line-group shares have moved, in units of their latitude.
        """
        r = self.reduced
        groups = self.columns(scale, shape)
        owner = np.array(self.owner)
        series = np.zeros((self._n, groups.shape[1]))
        np.add.at(series, owner, groups)
        loose = np.flatnonzero(np.array(self.latitude) > 0)
        variance = np.maximum(r.counts, 1.0) + (SYSTEMATIC * np.maximum(self.net, 0.0)) ** 2
        weight = 1.0 / np.sqrt(variance) if robust is None else robust
        area = np.maximum(series @ (self.net / variance), 0.0) / np.maximum(np.sum(series**2 / variance, axis=1), 1e-30)
        prior = np.array(self.latitude)[loose] * np.maximum(area[owner[loose]], 1e-6)
        design = np.vstack([series, groups[loose], r.pile_column(scale.offset_kev / scale.gain_kev)[None], self.hats])
        solution, _ = _ridge(design * weight, self.net * weight, self._n, prior)
        rest = self.net - solution @ design
        pulls = solution[self._n : self._n + loose.size] / prior
        return np.concatenate([rest * weight, pulls]), 1.0 / np.sqrt(variance * (1.0 + rest**2 / variance / _BEND))

    def _moves(self, model: NDArray[np.float64], scale: EnergyScale) -> NDArray[np.float64]:
        """Derivatives of the model by offset, gain and squared noise, shape (3, n)."""
        r = self.reduced
        width = np.diff(r.edges)
        slope = np.gradient(model / width, r.centres)
        bend = np.gradient(slope, r.centres) * width
        slope = slope * width
        gain = scale.gain_kev
        return np.stack([slope / gain, slope * r.centres / gain, 0.5 * bend / (gain * FWHM_PER_SIGMA) ** 2])

    def _residuals(self, groups: NDArray[np.float64], amount: NDArray[np.float64], rest: NDArray[np.float64],
                   variance: NDArray[np.float64], scale: EnergyScale
                   ) -> tuple[tuple[str, float, float, float], ...]:  # fmt: skip
        """How far each clear line group lies from where the scale puts it, eV."""
        out = []
        width = np.diff(self.reduced.edges)
        for i, name in enumerate(self.names):
            own = groups[i] * amount[i]
            if self._wide[i] or float(np.sqrt(np.sum(own**2 / variance))) < _CLEAR:
                continue
            slope = np.gradient(own / width, self.reduced.centres) * width / scale.gain_kev
            power = float(np.sum(slope**2 / variance))
            shift = float(np.sum(slope * rest / variance)) / power
            out.append((name, self.energy[i], 1e3 * shift, 1e3 / math.sqrt(power)))
        return tuple(out)


def _ridge(design: NDArray[np.float64], y: NDArray[np.float64], first: int, prior: NDArray[np.float64]
           ) -> tuple[NDArray[np.float64], NDArray[np.float64]]:  # fmt: skip
    """Least squares with standard deviations `prior` around 0 for the coefficients from `first` on."""
    length = np.sqrt(np.einsum("ij,ij->i", design, design)) + 1e-12
    unit = design / length[:, None]
    normal = unit @ unit.T
    penalty = np.full(design.shape[0], 1e-9)
    penalty[first : first + prior.size] += 1.0 / (prior * length[first : first + prior.size]) ** 2
    normal[np.diag_indices_from(normal)] += penalty
    inverse = np.linalg.inv(normal)
    return inverse @ (unit @ y) / length, inverse / np.outer(length, length)
