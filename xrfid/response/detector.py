"""What the detector does to a photon: efficiency, escape, and the shape of a line.

Shape after Phillips & Marlow, Nucl. Instrum. Methods 137 (1976) 525, and Campbell & Wang, X-Ray
Spectrom. 20 (1991) 191: a Gaussian core integrated over the channel, an exponential tail and a flat
shelf on the low side, each a fraction of the line's area that falls with energy.
"""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import dataclass, field, replace
from functools import lru_cache

import numpy as np
from numpy.typing import NDArray
from scipy.special import dawsn, erfcx, ndtr

from xrfid.atoms.absorption import layer_transmission, mass_attenuation
from xrfid.atoms.elements import ATOMIC_NUMBER
from xrfid.atoms.library import xraylib
from xrfid.instrument import Detector
from xrfid.spectrum import Resolution

DENSITY_G_CM3 = {"Si": 2.33, "Ge": 5.32, "CdTe": 5.85}
ELEMENTS = {"Si": {14: 1.0}, "Ge": {32: 1.0}, "CdTe": {48: 0.468, 52: 0.532}}


def efficiency(detector: Detector, energy_kev: NDArray[np.float64]) -> NDArray[np.float64]:
    """Share of photons at the window that is fully absorbed in the detector, shape of `energy_kev`."""
    window = detector.window
    passed = layer_transmission(window.material, window.thickness_um, energy_kev, window.density_g_cm3)
    mu = mass_attenuation(ELEMENTS[detector.material], energy_kev) * DENSITY_G_CM3[detector.material] * 1e-4
    dead = np.exp(-mu * detector.dead_layer_um)
    return np.asarray(passed * dead * -np.expm1(-mu * detector.thickness_um))


@dataclass(frozen=True, slots=True)
class EscapeLine:
    """A fluorescence line of the detector itself that can leave through its front."""

    name: str
    loss_kev: float
    edge_kev: float
    yield_: float
    jump: float
    share: float
    mass_fraction: float


@lru_cache(maxsize=3)
def escape_lines(material: str) -> tuple[EscapeLine, ...]:
    """Escape lines of a detector material; energies and shares from the line table's source."""
    lines = []
    for z, fraction in ELEMENTS[material].items():
        # methods differ by 17 % for silicon; 0.050 is nearest to measurements (Krause 1979: 0.050)
        omega = 0.050 if z == 14 else float(xraylib.FluorYield(z, xraylib.K_SHELL))
        jump = float(xraylib.JumpFactor(z, xraylib.K_SHELL))
        edge = float(xraylib.EdgeEnergy(z, xraylib.K_SHELL))
        for name, macro in (("Ka", xraylib.KA_LINE), ("Kb", xraylib.KB_LINE)):
            share = float(xraylib.RadRate(z, macro))
            symbol = next(s for s, n in ATOMIC_NUMBER.items() if n == z)
            lines.append(
                EscapeLine(f"{symbol} {name}", float(xraylib.LineEnergy(z, macro)), edge, omega, jump, share, fraction)
            )
    return tuple(line for line in lines if line.share > 0.01)


def escape_fraction(material: str, line: EscapeLine, energy_kev: NDArray[np.float64]) -> NDArray[np.float64]:
    """Escape events per event of the incident line, for photons arriving along the normal.

    Reed & Ware, J. Phys. E 5 (1972) 582; 0 below the edge; shape of `energy_kev`.
    """
    energy = np.asarray(energy_kev, dtype=float)
    mu_in = mass_attenuation(ELEMENTS[material], np.maximum(energy, line.edge_kev * (1.0 + 1e-6)))
    mu_out = float(mass_attenuation(ELEMENTS[material], line.loss_kev)[0])
    z_share = line.mass_fraction
    if z_share < 1.0:  # only photons absorbed by this element of the compound can make its line
        z = {"Cd": 48, "Te": 52}[line.name[:2]]
        z_share = (
            z_share
            * float(xraylib.CS_Photo(z, line.edge_kev * 1.1))
            / float(mass_attenuation(ELEMENTS[material], line.edge_kev * 1.1)[0])
        )
    geometry = 1.0 - (mu_out / mu_in) * np.log1p(mu_in / mu_out)
    made = line.yield_ * (1.0 - 1.0 / line.jump) * line.share * z_share
    return np.where(energy > line.edge_kev, 0.5 * made * geometry, 0.0)


TAIL_NODES_KEV = np.array([1.0, 2.5, 5.0, 10.0, 20.0])
SHELF_NODES_KEV = np.array([1.5, 5.0, 15.0])
# Order of magnitude for good Si drift detectors (from memory; the fit refines them)
_TAIL = {"Si": (0.03, 0.02, 0.008, 0.003, 0.002), "Ge": (0.05, 0.03, 0.015, 0.01, 0.01), "CdTe": (0.1,) * 5}
_SHELF = {"Si": (0.010, 0.006, 0.002), "Ge": (0.02, 0.01, 0.005), "CdTe": (0.02, 0.02, 0.02)}
_REACH_SIGMA = 5.5
"""The Gaussian core is drawn out to this many standard deviations."""


@dataclass(frozen=True, eq=False)
class LineShape:
    """The detector's line shape: widths, tail and shelf.

    `tail` and `shelf` are fractions of a line's area at `TAIL_NODES_KEV` and `SHELF_NODES_KEV`,
    interpolated in the logarithm of the energy; `tail_slope` is the tail's decay length in units of
    the line's Gaussian sigma.
    """

    resolution: Resolution
    tail: NDArray[np.float64] = field(default_factory=lambda: np.array(_TAIL["Si"]))
    shelf: NDArray[np.float64] = field(default_factory=lambda: np.array(_SHELF["Si"]))
    tail_slope: float = 2.5

    @classmethod
    def of(cls, detector: Detector) -> LineShape:
        """Return the usual shape of a detector before anything is fitted."""
        material = detector.material
        return cls(detector.resolution, np.array(_TAIL[material]), np.array(_SHELF[material]))

    def with_resolution(self, resolution: Resolution) -> LineShape:
        """Return the same tail and shelf with other widths."""
        return replace(self, resolution=resolution)

    def tail_at(self, energy_kev: NDArray[np.float64]) -> NDArray[np.float64]:
        """Tail fraction at energies in keV."""
        return np.interp(np.log(energy_kev), np.log(TAIL_NODES_KEV), self.tail)

    def shelf_at(self, energy_kev: NDArray[np.float64]) -> NDArray[np.float64]:
        """Shelf fraction at energies in keV."""
        return np.interp(np.log(energy_kev), np.log(SHELF_NODES_KEV), self.shelf)


@dataclass(frozen=True, eq=False)
class DrawnLines:
    """Lines to be drawn: energies (keV), weights (counts) and the column each goes to; shape (n_lines,)."""

    energy_kev: NDArray[np.float64]
    weight: NDArray[np.float64]
    column: NDArray[np.intp]

    def with_escapes(self, material: str, scale: float = 1.0) -> DrawnLines:
        """Return the same lines followed by their escape peaks."""
        return joined(self, self.escapes(material, scale))

    def escapes(self, material: str, scale: float = 1.0) -> DrawnLines:
        """Return only the escape peaks of these lines."""
        parts = []
        for line in escape_lines(material):
            share = scale * escape_fraction(material, line, self.energy_kev)
            keep = (share > 1e-6) & (self.energy_kev - line.loss_kev > 0.1)
            parts.append(
                DrawnLines(self.energy_kev[keep] - line.loss_kev, self.weight[keep] * share[keep], self.column[keep])
            )
        return joined(*parts)


def joined(*parts: DrawnLines) -> DrawnLines:
    """Return all lines of several sets as one."""
    return DrawnLines(
        np.concatenate([p.energy_kev for p in parts]),
        np.concatenate([p.weight for p in parts]),
        np.concatenate([p.column for p in parts]),
    )


def draw(lines: DrawnLines, shape: LineShape, edges_kev: NDArray[np.float64], n_columns: int) -> NDArray[np.float64]:
    """Draw lines with their full shape: core, tail and shelf.

    Parameters
    ----------
    lines : DrawnLines
    shape : LineShape
    edges_kev : ndarray, shape (n_channels + 1,)
        Channel boundaries, increasing.
    n_columns : int

    Returns
    -------
    ndarray, shape (n_columns, n_channels)
        Counts; what falls outside the channels is lost, as it is in the instrument.
    """
    tail, shelf = shape.tail_at(lines.energy_kev), shape.shelf_at(lines.energy_kev)
    core = DrawnLines(lines.energy_kev, lines.weight * (1.0 - tail - shelf), lines.column)
    out = draw_core(core, shape.resolution, edges_kev, n_columns)
    out += draw_tail(DrawnLines(lines.energy_kev, lines.weight * tail, lines.column), shape, edges_kev, n_columns)
    out += draw_shelf(DrawnLines(lines.energy_kev, lines.weight * shelf, lines.column), edges_kev, n_columns)
    return out


def draw_core(
    lines: DrawnLines, resolution: Resolution, edges_kev: NDArray[np.float64], n_columns: int
) -> NDArray[np.float64]:
    """Draw Gaussian cores of unit area times weight, integrated over each channel."""
    sigma = resolution.sigma_kev(lines.energy_kev)
    reach = _REACH_SIGMA * sigma
    return _scatter(lines, sigma, reach, reach, edges_kev, n_columns, ndtr)


def draw_tail(
    lines: DrawnLines, shape: LineShape, edges_kev: NDArray[np.float64], n_columns: int
) -> NDArray[np.float64]:
    """Draw exponential tails, folded with the Gaussian, of unit area times weight."""
    sigma = shape.resolution.sigma_kev(lines.energy_kev)
    table_u, table_cdf = _tail_table(shape.tail_slope)
    keep = lines.weight != 0.0
    some = DrawnLines(lines.energy_kev[keep], lines.weight[keep], lines.column[keep])
    below = (_REACH_SIGMA + 8.0 * shape.tail_slope) * sigma[keep]
    return _scatter(some, sigma[keep], below, _REACH_SIGMA * sigma[keep], edges_kev, n_columns,
                    lambda u: np.interp(u, table_u, table_cdf))  # fmt: skip


@lru_cache(maxsize=16)
def _tail_table(slope: float) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    """Cumulative distribution of Gaussian minus exponential (decay `slope` sigma), tabulated in sigma."""
    u = np.linspace(-_REACH_SIGMA - 9.0 * slope, _REACH_SIGMA, 4000)
    k = 1.0 / slope
    # exp(u k + k^2/2) * ndtr(-u - k), written with erfcx so that nothing overflows
    near = np.maximum(u, -8.0)
    folded = 0.5 * np.exp(-0.5 * near**2) * erfcx((near + k) / math.sqrt(2.0))
    return u, ndtr(u) + np.where(u < -8.0, np.exp(u * k + 0.5 * k**2), folded)


def _scatter(
    lines: DrawnLines, sigma: NDArray[np.float64], below: NDArray[np.float64], above: NDArray[np.float64],
    edges_kev: NDArray[np.float64], n_columns: int, cdf: Callable[[NDArray[np.float64]], NDArray[np.float64]],
) -> NDArray[np.float64]:  # fmt: skip
    """Integrate a unit profile over the channels near each line and add it to the line's column."""
    n = edges_kev.size - 1
    first = np.clip(np.searchsorted(edges_kev, lines.energy_kev - below) - 1, 0, n)
    last = np.clip(np.searchsorted(edges_kev, lines.energy_kev + above), 0, n)
    count = np.maximum(last - first, 0)
    points = np.where(count > 0, count + 1, 0)  # a window of k channels has k + 1 boundaries
    total = int(points.sum())
    if total == 0:
        return np.zeros((n_columns, n))
    owner = np.repeat(np.arange(lines.energy_kev.size), points)
    start = np.cumsum(points) - points
    place = np.arange(total) - np.repeat(start, points) + np.repeat(first, points)
    value = cdf((edges_kev[place] - lines.energy_kev[owner]) / sigma[owner])
    step = np.diff(value)
    inside = owner[1:] == owner[:-1]
    owner, place, step = owner[:-1][inside], place[:-1][inside], step[inside]
    flat = lines.column[owner] * n + place
    drawn = np.bincount(flat, step * lines.weight[owner], minlength=n_columns * n)
    return np.asarray(drawn, dtype=float).reshape(n_columns, n)


def draw_shelf(lines: DrawnLines, edges_kev: NDArray[np.float64], n_columns: int) -> NDArray[np.float64]:
    """Draw flat shelves from 0 to each line's energy, of unit area times weight.

    The shelf's rounded end lies under the line's own core and is drawn as a step.
    """
    n = edges_kev.size - 1
    width = np.diff(edges_kev)
    per_kev = lines.weight / lines.energy_kev
    channel = np.clip(np.searchsorted(edges_kev, lines.energy_kev) - 1, -1, n - 1)
    seen = channel >= 0
    part = (lines.energy_kev[seen] - edges_kev[channel[seen]]) / width[channel[seen]]
    part = np.minimum(part, 1.0)  # a line above the range fills the last channel
    flat = lines.column[seen] * n + channel[seen]
    ends = np.bincount(flat, per_kev[seen], minlength=n_columns * n).reshape(n_columns, n)
    partial = np.bincount(flat, per_kev[seen] * part, minlength=n_columns * n).reshape(n_columns, n)
    above = np.cumsum(ends[:, ::-1], axis=1)[:, ::-1] - ends
    positive = np.clip(edges_kev[1:], 0.0, None) - np.clip(edges_kev[:-1], 0.0, None)
    return np.asarray((above + partial) * positive)


def draw_wings(
    lines: DrawnLines,
    width_kev: NDArray[np.float64],
    resolution: Resolution,
    edges_kev: NDArray[np.float64],
    n_columns: int,
) -> NDArray[np.float64]:
    """Change of the line profile that natural (Lorentzian) widths bring, to first order in the width.

    The Voigt profile's derivative with respect to its Lorentzian half-width, at zero width, is
    ``-D'(z) / (pi sigma^2)`` with Dawson's integral D and ``z = x / (sqrt(2) sigma)``: a dip in the
    core and wings that fall as ``1 / (pi x^2)``. Good while the natural width is well below the
    detector's, i.e. for all lines below about 60 keV.

    Parameters
    ----------
    width_kev : ndarray, shape (n_lines,)
        Natural FWHM of each line.
    """
    sigma = resolution.sigma_kev(lines.energy_kev)
    scaled = DrawnLines(lines.energy_kev, lines.weight * 0.5 * width_kev / sigma, lines.column)
    reach = 25.0 * sigma
    return _scatter(scaled, sigma, reach, reach, edges_kev, n_columns,
                    lambda u: -math.sqrt(2.0) / math.pi * dawsn(u / math.sqrt(2.0)))  # fmt: skip
