"""What there is to look at for one element: the counts around its lines, with and without it in the model."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from xrfid.identify.result import Identification
from xrfid.report import wording
from xrfid.report.marks import line_groups

_HALF_WINDOW_FWHM = 3.0
_SMALLEST_SHARE = 0.02


@dataclass(frozen=True, eq=False)
class ProofPanel:
    """Counts around one line group (or several close ones); arrays of shape (n,).

    `without` is the best model that lacks the element; `net` and `net_sigma` what the counts leave for
    it here, `expected` what its series as a whole demands.
    """

    title: str
    energies_kev: tuple[float, ...]
    energy_kev: NDArray[np.float64]
    counts: NDArray[np.float64]
    model: NDArray[np.float64]
    without: NDArray[np.float64]
    fwhm_kev: float
    net: str = ""
    expected: str = ""

    @property
    def residuals(self) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
        """Counts minus model, and minus the model without the element, in standard deviations."""
        with_it, without_it = (
            (self.counts - m) / np.sqrt(np.maximum(m, 1.0)) for m in (self.model, self.without)
        )
        return with_it, without_it

    @property
    def residual_reach(self) -> float:
        """How far up and down to show residuals: to the largest one, within 4 to 12 standard deviations."""
        return float(np.clip(1.1 * np.abs(np.concatenate(self.residuals)).max(), 4.0, 12.0))

    @property
    def counts_range(self) -> tuple[float, float]:
        """Range of counts to show: what lies on the lines; a high neighbour runs out of the picture."""
        low, high = self.energies_kev[0] - 1.2 * self.fwhm_kev, self.energies_kev[-1] + 1.2 * self.fwhm_kev
        near = (self.energy_kev > low) & (self.energy_kev < high)
        tops = np.maximum(self.counts, self.model)[near]
        bottoms = np.minimum(np.minimum(self.counts, self.without), self.model)
        top, bottom = float(tops.max(initial=1.0)), float(bottoms.min())
        margin = 0.12 * (top - bottom) + 1.0
        return max(0.0, bottom - margin), top + 1.3 * margin


def proof_panels(identification: Identification, element: str, at_most: int = 6) -> list[ProofPanel]:
    """Return the panels that prove or refute one element, by energy; none if the result holds no curves.

    Parameters
    ----------
    identification : Identification
    element : str
        Symbol of an element among the findings.
    at_most : int
        Number of panels; the groups with the most counts come first.
    """
    curves = identification.curves
    if curves.counts.size == 0 or element not in curves.without:
        return []
    areas = {f"{element} {s.series}": s.area for s in identification[element].series}
    groups = [
        (areas.get(name, 0.0) * share, name, group, energy)
        for name, group, energy, share in line_groups(curves, element)
        if share >= _SMALLEST_SHARE and curves.energy_kev[0] < energy < curves.energy_kev[-1]
    ]
    groups = sorted(sorted(groups, reverse=True)[: 2 * at_most], key=lambda g: g[3])
    merged: list[list[tuple[float, str, str, float]]] = []
    for group in groups:
        width = float(identification.calibration.resolution.fwhm_kev(group[3]))
        if merged and group[3] - merged[-1][-1][3] < 2.0 * width and group[1] == merged[-1][-1][1]:
            merged[-1].append(group)
        else:
            merged.append([group])
    strongest = sorted(merged, key=lambda m: -sum(g[0] for g in m))[:at_most]
    return [_panel(identification, element, m) for m in sorted(strongest, key=lambda m: m[0][3])]


def _panel(
    identification: Identification, element: str, groups: list[tuple[float, str, str, float]]
) -> ProofPanel:
    curves = identification.curves
    energies = tuple(g[3] for g in groups)
    fwhm = float(identification.calibration.resolution.fwhm_kev(float(np.mean(energies))))
    half = _HALF_WINDOW_FWHM * fwhm
    inside = slice(
        int(np.searchsorted(curves.energy_kev, energies[0] - half)),
        int(np.searchsorted(curves.energy_kev, energies[-1] + half)),
    )
    names = {g[2] for g in groups}
    series = groups[0][1].split()[-1]
    lines = [x for x in identification[element].evidence.lines if x.group in names and x.series == series]
    net = expected = ""
    if lines:
        sigma = float(np.sqrt(sum(x.sigma**2 for x in lines)))
        net = wording.with_sigma(sum(x.observed for x in lines), sigma, wording.GROUP_SPACE)
        expected = wording.grouped(sum(x.predicted for x in lines), 0, wording.GROUP_SPACE)
    return ProofPanel(
        title=f"{element} {', '.join(wording.line_name(g[2]) for g in groups)}",
        energies_kev=energies,
        energy_kev=curves.energy_kev[inside],
        counts=curves.counts[inside],
        model=curves.model[inside],
        without=curves.without[element][inside],
        fwhm_kev=fwhm,
        net=net,
        expected=expected,
    )
