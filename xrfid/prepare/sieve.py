"""A quick sieve over all scales: how much of each peak a series could explain, its other lines allowing.

For every offset and gain of a grid, each series gets the largest area that none of its lines contradicts; a peak
counts as explained as far as some series reaches it. Thousands of scales a tenth of a second, no columns drawn.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from xrfid.atoms.lines import GROUPS
from xrfid.prepare.patterns import Patterns
from xrfid.prepare.peaks import Peak
from xrfid.prepare.reduced import BINS_PER_FWHM, Reduced
from xrfid.spectrum import FWHM_PER_SIGMA, EnergyScale

GAIN_KEV = (0.0015, 0.12)
OFFSET_KEV = 1.05
_LINES_PER_SERIES = 6
_MAJOR = 0.05
_PEAKS = 14
_STEP_FWHM = 0.5
_CHUNK = 4000


@dataclass(frozen=True, eq=False)
class Grid:
    """Offsets and gains to try (keV), and what each costs for being unusual, shape (n_scales,) each."""

    offset_kev: NDArray[np.float64]
    gain_kev: NDArray[np.float64]
    cost: NDArray[np.float64]

    def part(self, which: NDArray[np.intp] | slice) -> Grid:
        """Some of the scales."""
        return Grid(self.offset_kev[which], self.gain_kev[which], self.cost[which])


def grid_of(peaks: list[Peak], widths: tuple[NDArray[np.float64], NDArray[np.float64]], slope_kev: float,
            fwhm_mn_kev: tuple[float, float], usual_kev: float, end_kev: float | None) -> Grid:  # fmt: skip
    """Scales on which the strongest peaks have possible widths and lie below the source's end.

    Parameters
    ----------
    peaks : list of Peak
    widths : tuple of ndarray
        Channels and FWHM there, of the width model.
    slope_kev : float
        Squared FWHM per keV at the Fano limit.
    fwhm_mn_kev : tuple of float
        Least and greatest FWHM at Mn K-alpha.
    usual_kev : float
        Usual FWHM at Mn K-alpha.
    end_kev : float or None
    """
    channel, fwhm = widths
    lever = max(p.channel for p in peaks[:_PEAKS])
    step = _STEP_FWHM * float(fwhm[-1]) / max(lever, 10.0 * float(fwhm[-1]))
    gains = np.exp(np.arange(math.log(GAIN_KEV[0]), math.log(GAIN_KEV[1]), step))
    # the offset's step follows the narrowest width in keV
    found_o, found_g, found_c = [], [], []
    top = sorted(p.channel for p in peaks[:3])[-1]
    for gain in gains:
        offset = np.arange(-OFFSET_KEV, OFFSET_KEV, max(_STEP_FWHM * float(fwhm[0]) * gain, 0.012))
        energy = offset[:, None] + gain * channel
        square = (fwhm * gain) ** 2 - slope_kev * np.maximum(energy, 0.0)
        at_mn = square + slope_kev * 5.895
        # the width model may be off at either end; one place with a possible width is enough
        ok = (at_mn.max(axis=1) > fwhm_mn_kev[0] ** 2) & (at_mn.min(axis=1) < fwhm_mn_kev[1] ** 2)
        ok &= (at_mn.mean(axis=1) > 0.3 * fwhm_mn_kev[0] ** 2) & (at_mn.mean(axis=1) < 1.5 * fwhm_mn_kev[1] ** 2)
        if end_kev is not None:
            ok &= offset + gain * top < 1.03 * end_kev
        found_o.append(offset[ok])
        found_g.append(np.full(int(ok.sum()), gain))
        width = np.log(np.sqrt(np.maximum(at_mn[ok].mean(axis=1), 1e-3)) / usual_kev)
        found_c.append(2.0 * np.log1p((offset[ok] / 0.1) ** 2) + 6.0 * width**2)
    return Grid(np.concatenate(found_o), np.concatenate(found_g), np.concatenate(found_c))


class Sieve:
    """Scores many scales at once."""

    def __init__(self, reduced: Reduced, patterns: Patterns, peaks: list[Peak], escape_kev: float) -> None:
        self._escape_kev = escape_kev
        kernel = np.exp(-0.5 * (np.arange(-4, 5) * FWHM_PER_SIGMA / BINS_PER_FWHM) ** 2)
        kernel /= kernel.sum()
        power = float(np.sum(kernel**2))
        self._area = np.convolve(reduced.net, kernel, mode="same") / power
        self._sd = np.sqrt(np.convolve(reduced.variance, kernel**2, mode="same")) / power
        n = int(reduced.edges[-1] + 1)
        self._bin = np.searchsorted(reduced.edges, np.arange(n)) - 1
        upper = np.maximum(self._area, 0.0) + 2.5 * self._sd
        self._exact = upper
        self._near = np.maximum(upper, np.maximum(np.roll(upper, 1), np.roll(upper, -1)))
        self._n_channels = n
        self._n_bins = reduced.net.size
        self._energy, self._share, self._free, self._rare = _lines_by_series(patterns)
        self._place_peaks(reduced, peaks)

    def _place_peaks(self, reduced: Reduced, peaks: list[Peak]) -> None:
        strong = [p for p in peaks if p.area > 0 and p.channel < self._n_channels - 1][:_PEAKS]
        slot = np.full(self._n_bins, len(strong), dtype=np.intp)
        at = [int(self._bin[int(p.channel + 0.5)]) for p in strong]
        for i in reversed(range(len(strong))):
            near = np.abs(reduced.centres - strong[i].channel) <= max(0.5 * strong[i].fwhm, 1.5)
            slot[near] = i
        size = np.array([max(float(self._area[a]), 1.0) for a in at] + [1.0])
        self._slot, self._size = slot, size
        self._weight = np.array([math.log1p(p.significance**2) for p in strong] + [0.0])
        self._channel = np.array([p.channel for p in strong])
        self._fwhm = np.array([p.fwhm for p in strong])

    def scores(self, grid: Grid) -> NDArray[np.float64]:
        """Score of each scale, larger is better, shape (n_scales,)."""
        out = np.empty(grid.offset_kev.size)
        for low in range(0, out.size, _CHUNK):
            part = slice(low, low + _CHUNK)
            out[part] = self._chunk(grid.offset_kev[part], grid.gain_kev[part])
        out -= grid.cost
        return out

    def aligned(self, grid: Grid) -> tuple[Grid, NDArray[np.float64]]:
        """Move each scale so that the lines fall on the peaks they reach, and score it anew.

        Returns
        -------
        grid : Grid
        scores : ndarray, shape (n_scales,)
            Larger is better; a line off its peak by a tenth of the FWHM counts for less.
        """
        for closeness in (0.3, 0.2, 0.15):
            value, energy = self._reached(grid, closeness)
            grid = self._regressed(grid, value * self._weight[:-1], energy)
        value, _ = self._reached(grid, 0.2)
        value = np.maximum(value, self._secondary(grid.offset_kev, grid.gain_kev, 0.2))
        return grid, value @ self._weight[:-1] - grid.cost

    def one(self, scale: EnergyScale, closeness: float
            ) -> tuple[float, NDArray[np.float64], NDArray[np.float64]]:  # fmt: skip
        """Share of the peaks' weight that a single scale explains; per peak how well, and its line's energy."""
        grid = Grid(np.array([scale.offset_kev]), np.array([scale.gain_kev]), np.zeros(1))
        lines, energy = self._reached(grid, closeness)
        value = np.maximum(lines, self._secondary(grid.offset_kev, grid.gain_kev, closeness))
        return float((value @ self._weight[:-1])[0] / max(float(self._weight.sum()), 1e-9)), lines[0], energy[0]

    def _secondary(self, offset: NDArray[np.float64], gain: NDArray[np.float64], closeness: float
                   ) -> NDArray[np.float64]:  # fmt: skip
        """How well each peak is a sum of two strong ones or an escape of one, shape (n_scales, n_peaks)."""
        strong = np.argsort(-self._size[:-1])[:3]
        out = np.zeros((offset.size, self._channel.size))
        for i in strong:
            other = np.flatnonzero(self._size[:-1] < 0.05 * self._size[i])
            for j in strong:
                at = self._channel[i] + self._channel[j] + offset / gain
                off = (at[:, None] - self._channel[other]) / (closeness * self._fwhm[other])
                out[:, other] = np.maximum(out[:, other], np.exp(-0.5 * off**2))
            at = self._channel[i] - self._escape_kev / gain
            above = offset + gain * self._channel[i] > self._escape_kev + 0.2
            off = (at[:, None] - self._channel[other]) / (closeness * self._fwhm[other])
            out[:, other] = np.maximum(out[:, other], np.where(above[:, None], np.exp(-0.5 * off**2), 0.0))
        return out

    def _regressed(self, grid: Grid, weight: NDArray[np.float64], energy: NDArray[np.float64]) -> Grid:
        """Weighted straight line of energies (n_scales, n_peaks) against the peaks' channels."""
        c = self._channel
        total = np.maximum(weight.sum(axis=1), 1e-9)
        mean_c = (weight @ c) / total
        mean_e = np.sum(weight * energy, axis=1) / total
        spread = weight @ (c * c) - total * mean_c**2
        gain = (np.sum(weight * energy * c, axis=1) - total * mean_c * mean_e) / np.maximum(spread, 1e-9)
        good = (np.count_nonzero(weight > 0, axis=1) > 1) & (np.abs(gain / grid.gain_kev - 1.0) < 0.05)
        gain = np.where(good, gain, grid.gain_kev)
        offset = np.where(good, mean_e - gain * mean_c, grid.offset_kev)
        return Grid(offset, gain, grid.cost)

    def _reached(self, grid: Grid, closeness: float) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
        """Per scale and peak: how well its best line explains it, and that line's energy."""
        upper = self._near if closeness > 0.25 else self._exact
        scale, series, slot, reach = self._hits(grid.offset_kev, grid.gain_kev, upper)
        energy = np.broadcast_to(self._energy[series], slot.shape)
        hit = slot < self._weight.size - 1
        row = np.broadcast_to(scale[:, None], slot.shape)[hit]
        slot, reach, energy = slot[hit], reach[hit], energy[hit]
        off = (energy - grid.offset_kev[row]) / grid.gain_kev[row] - self._channel[slot]
        value = reach * np.exp(-0.5 * (off / (closeness * self._fwhm[slot])) ** 2)
        order = np.argsort(value, kind="stable")  # so that the best line is written last
        shape = (grid.offset_kev.size, self._weight.size - 1)
        best, line = np.zeros(shape), np.zeros(shape)
        best[row[order], slot[order]] = value[order]
        line[row[order], slot[order]] = energy[order]
        return best, line

    def _chunk(self, offset: NDArray[np.float64], gain: NDArray[np.float64]) -> NDArray[np.float64]:
        scale, _, slot, reach = self._hits(offset, gain, self._near)
        none = self._weight.size - 1
        hit = slot < none
        covered = np.zeros((offset.size, none + 1))
        row = np.broadcast_to(scale[:, None], slot.shape)
        np.maximum.at(covered, (row[hit], slot[hit]), reach[hit])
        covered[:, :-1] = np.maximum(covered[:, :-1], self._secondary(offset, gain, 0.4))
        return np.asarray(covered @ self._weight)

    def _hits(self, offset: NDArray[np.float64], gain: NDArray[np.float64], upper: NDArray[np.float64]
              ) -> tuple[NDArray[np.intp], NDArray[np.intp], NDArray[np.intp], NDArray[np.float64]]:  # fmt: skip
        """Series whose main line lies on a peak: scale and series (n,), peak and reach of each line (n, 5)."""
        none = self._weight.size - 1
        main = self._place((self._energy[:, 0] - offset[:, None]) / gain[:, None])
        scale, series = np.nonzero(self._slot[main] < none)
        energy, share = self._energy[series], self._share[series]
        place = self._place((energy - offset[scale, None]) / gain[scale, None])
        inside = (place > 0) & (share > 0)
        allowed = upper[place] / np.maximum(share * (1.0 - self._free[series]), 1e-9)
        amount = np.min(np.where(inside, allowed, np.inf), axis=1)
        slot = np.where(inside, self._slot[place], none)
        reach = np.minimum(amount[:, None] * share / self._size[slot], 1.0) * self._rare[series, None]
        return scale, series, slot, reach

    def _place(self, channel: NDArray[np.float64]) -> NDArray[np.intp]:
        """Bin of each (fractional) channel; 0 for what is out of view."""
        whole = (channel + 0.5).astype(np.int32)
        return self._bin[np.where((whole >= 1) & (whole < self._n_channels - 1), whole, 0)]


def _lines_by_series(patterns: Patterns) -> tuple[NDArray[np.float64], ...]:
    """Energy, share and latitude of the major peaks of each series, shape (n_series, 6), the largest first.

    Lines of one group that a usual silicon detector shows as one peak are taken together.
    """
    order = np.lexsort((patterns.energy_kev, patterns.group, patterns.of))
    of, group, e, s = patterns.of[order], patterns.group[order], patterns.energy_kev[order], patterns.share[order]
    apart = np.diff(e) > 0.6 * np.sqrt(0.09**2 + 0.00233 * e[1:])
    apart |= (np.diff(of) != 0) | (np.diff(group) != 0)
    number = np.concatenate([[0], np.cumsum(apart)])
    first = np.flatnonzero(np.concatenate([[True], apart]))
    total = np.bincount(number, s)
    mean = np.bincount(number, s * e) / np.maximum(total, 1e-12)
    tolerance = np.array([g.tolerance for g in GROUPS])[group[first]]
    owner = of[first]
    rank = np.lexsort((-total, owner))
    start = np.searchsorted(owner[rank], np.arange(len(patterns.names)))
    place = np.arange(rank.size) - start[owner[rank]]
    keep = (place < _LINES_PER_SERIES) & (total[rank] > _MAJOR)
    shape = (len(patterns.names), _LINES_PER_SERIES)
    energy, share, free = np.zeros(shape), np.zeros(shape), np.zeros(shape)
    rows, columns, used = owner[rank][keep], place[keep], rank[keep]
    energy[rows, columns] = mean[used]
    share[rows, columns] = total[used]
    free[rows, columns] = np.where(tolerance[used] > 0, 0.8, 0.0)
    return energy, share, free, np.where(patterns.rare > 0, 0.85, 1.0)
