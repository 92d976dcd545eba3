"""What to fit: found in a sample of the points, in the whole sum, and in what the sum hides.

An element in twenty of a million points leaves nothing in the sum, but each of those points deviates
from its fit. Points whose excess no noise explains are gathered by the energy of the excess, their
spectra added up and identified; so are the points that hold the maximum in some channel.
"""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray
from scipy.stats import norm

from xrfid.batch.engine import GOOD, add_up
from xrfid.batch.stack import Stack
from xrfid.batch.work import Progress
from xrfid.errors import Untrustworthy
from xrfid.identify.assemble import assemble
from xrfid.identify.pipeline import search
from xrfid.identify.settings import Settings
from xrfid.identify.work import Work
from xrfid.instrument import Instrument
from xrfid.response.series import SeriesKey
from xrfid.spectrum import Spectrum

SAMPLE_POINTS = 20_000
_CHANCE = 0.01
"""Points that noise alone may push over the mark in a whole run, on average."""
_MOST_CLUSTERS = 5
_MOST_IN_CLUSTER = 400
_REACH_FWHM = 1.0


@dataclass(frozen=True, slots=True)
class Hidden:
    """An element that the sum does not show: its series, and the points (of all) it was found in."""

    element: str
    series: tuple[SeriesKey, ...]
    where: str
    points: tuple[int, ...]


def sampled_blocks(stack: Stack) -> NDArray[np.int64]:
    """Return blocks spread over the run that hold at least `SAMPLE_POINTS` points; all of a small run."""
    wanted = -(-SAMPLE_POINTS // stack.points_per_block)
    if 2 * wanted >= stack.n_blocks:
        return np.arange(stack.n_blocks)
    return np.unique(np.linspace(0, stack.n_blocks - 1, wanted).round().astype(np.int64))


def sample_sum(stack: Stack, blocks: NDArray[np.int64], progress: Progress) -> tuple[NDArray[np.float64], int]:
    """Add up the good spectra of some blocks; return the sum, shape (n_channels,), and how many they are."""
    summed, n = np.zeros(stack.n_channels), 0
    for i, block in enumerate(blocks):
        layers, lost = stack.read(int(block))
        part, good = add_up(layers, lost, stack.signed)
        summed, n = summed + part, n + good
        progress("looking at a sample", i + 1, len(blocks))
    return summed, n


def sum_spectrum(stack: Stack, summed: NDArray[np.float64], title: str) -> Spectrum:
    """Turn a sum of points into a spectrum of this run."""
    return Spectrum(counts=summed, scale=stack.scale, title=title, path=stack.place.path, dataset=",".join(stack.names))


def restricted(settings: Settings, elements: tuple[str, ...]) -> Settings:
    """Return settings under which exactly these elements are fitted (and the argon of the air)."""
    from xrfid.atoms.elements import ATOMIC_NUMBER

    if not elements:
        return settings
    Settings(present=elements)  # says which name is no element
    others = tuple(name for name in ATOMIC_NUMBER if name not in (*elements, "Ar"))
    return replace(settings, present=elements, absent=others)


@dataclass(frozen=True, eq=False)
class Judgement:
    """How the points fitted: per point, flat.

    `excess` is the largest excess over the model in standard deviations, `excess_kev` where it is.
    """

    chi2: NDArray[np.float32]
    excess: NDArray[np.float32]
    excess_kev: NDArray[np.float32]
    status: NDArray[np.uint8]
    n_bands: int

    @property
    def excess_limit(self) -> float:
        """Excess that noise reaches in `_CHANCE` points of the run."""
        trials = max(self.chi2.size * self.n_bands, 1)
        return float(norm.isf(_CHANCE / trials))

    def deviating(self) -> NDArray[np.int64]:
        """Points with an excess that is no noise, the largest first."""
        with np.errstate(invalid="ignore"):
            found = np.flatnonzero((self.excess > self.excess_limit) & (self.status == GOOD))
        return found[np.argsort(-self.excess[found], kind="stable")]

    def badly_fitted(self) -> NDArray[np.int64]:
        """Points that deviate, or whose chi-square lies far outside the run's own spread; the worst first."""
        good = self.chi2[self.status == GOOD]
        if not good.size:
            return np.zeros(0, np.int64)
        middle, upper = np.quantile(good, [0.5, 0.84])
        limit = max(float(middle), 1.0) + 8.0 * max(float(upper - middle), np.sqrt(2.0 / self.n_bands))
        with np.errstate(invalid="ignore"):
            bad = (self.chi2 > limit) | (self.excess > self.excess_limit)
        found = np.flatnonzero(bad & (self.status == GOOD))
        return found[np.argsort(-self.chi2[found], kind="stable")]


def hidden_elements(
    stack: Stack, judged: Judgement, holders: NDArray[np.int64], work: Work, known: frozenset[SeriesKey],
    instrument: Instrument, settings: Settings, progress: Progress,
) -> list[Hidden]:  # fmt: skip
    """Identify what only a few points show.

    Parameters
    ----------
    holders : ndarray of int
        Points that hold the maximum of some channel; -1 where none does.
    work : Work
        The search on the whole sum.
    known : frozenset of SeriesKey
        Series that are fitted already.
    """
    groups = list(_groups(judged, np.unique(holders[holders >= 0]), work))
    stricter = replace(settings, false_identification_level=settings.false_identification_level / max(len(groups), 1))
    found: dict[str, Hidden] = {}
    for i, (where, points) in enumerate(groups):
        progress("looking at points that stand out", i, len(groups))
        spectrum = sum_spectrum(stack, stack.spectra(points).sum(axis=0), where)
        try:
            seen = search(spectrum.with_scale(work.setting.scale), instrument, stricter)
        except Untrustworthy:
            continue  # too few counts to say anything
        fresh = {k.element for k in seen.fit.keys} - {k.element for k in known} - found.keys()
        for name in sorted(fresh & set(assemble(seen).identified) if fresh else ()):
            series = tuple(k for k in seen.fit.keys if k.element == name)
            found[name] = Hidden(name, series, where, tuple(int(p) for p in points))
    return list(found.values())


def _groups(judged: Judgement, holders: NDArray[np.int64], work: Work) -> Iterator[tuple[str, NDArray[np.int64]]]:
    """Points that stand out together: by the energy of their excess, then those that hold maxima."""
    left = judged.deviating()
    for _ in range(_MOST_CLUSTERS):
        if not left.size:
            break
        energy = float(judged.excess_kev[left[0]])
        reach = _REACH_FWHM * float(work.setting.shape.resolution.fwhm_kev(energy))
        near = np.abs(judged.excess_kev[left] - energy) < reach
        points = left[near]
        yield f"{points.size} points with an excess near {energy:.2f} keV", points[:_MOST_IN_CLUSTER]
        left = left[~near]
    if holders.size:
        yield f"{holders.size} points that hold the maximum of some channel", holders
