"""What detector and electronics make of photons: efficiency, line shape, escape, pile-up, energy scale.

The shape differs on purpose from what a fit would assume: the tail's share follows the absorption
in silicon (photons stopped in a thin layer under the contact lose part of their charge), its decay
length is fixed in eV, lines have their natural Lorentzian width, and the shelf is a share that grows
with the same shallow absorption.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
from scipy.ndimage import gaussian_filter1d
from scipy.special import erfcx, ndtr, voigt_profile

from .atomic import Array, cross_section
from .tube import sheet

SI_DENSITY = 2.329
SI_EDGE_KEV, SI_KA_KEV, SI_KB_KEV = 1.8390, 1.7398, 1.8359
SI_YIELD, SI_JUMP, SI_KB_SHARE = 0.050, 10.3, 0.028
PAIR_ENERGY_KEV = 3.64e-3
_VOIGT_REACH_KEV = 1.5


@dataclass(frozen=True)
class Channels:
    """The true energy scale: channel i has its centre at offset + gain i, keV."""

    offset_kev: float
    gain_kev: float
    n: int

    @property
    def centres_kev(self) -> Array:
        """Energies of the channel centres, shape (n,)."""
        return self.offset_kev + self.gain_kev * np.arange(self.n)

    @property
    def edges_kev(self) -> Array:
        """Energies of the channel boundaries, shape (n + 1,)."""
        return self.offset_kev + self.gain_kev * (np.arange(self.n + 1) - 0.5)


@dataclass(frozen=True)
class SiliconDetector:
    """A silicon detector as it truly is.

    `noise_kev` is the electronic noise (sigma); `shallow_um` the layer with incomplete charge
    collection; `tail_kev` the tail's decay length; `shelf` the shelf's share at high energies;
    `cut_kev` the electronic threshold.
    """

    noise_kev: float
    fano: float
    thickness_um: float
    window_um: float
    dead_um: float
    shallow_um: float
    tail_kev: float
    tail_floor: float
    shelf: float
    escape_scale: float
    cut_kev: float

    def sigma_kev(self, energy_kev: Array) -> Array:
        """Standard deviation of the Gaussian core."""
        return np.sqrt(self.noise_kev**2 + PAIR_ENERGY_KEV * self.fano * np.asarray(energy_kev))

    def efficiency(self, energy_kev: Array) -> Array:
        """Share of photons that pass the window and stop in the detector."""
        mu = cross_section("photo", 14, energy_kev) * SI_DENSITY * 1e-4
        return sheet("Be", self.window_um, energy_kev) * np.exp(-mu * self.dead_um) * -np.expm1(-mu * self.thickness_um)

    def _shallow(self, energy_kev: Array, depth_um: float) -> Array:
        return -np.expm1(-cross_section("photo", 14, energy_kev) * SI_DENSITY * 1e-4 * depth_um)

    def tail_share(self, energy_kev: Array) -> Array:
        """Share of a line's counts in its exponential tail."""
        return self.tail_floor + self._shallow(energy_kev, self.shallow_um)

    def shelf_share(self, energy_kev: Array) -> Array:
        """Share of a line's counts in its flat shelf."""
        return self.shelf + 0.3 * self._shallow(energy_kev, self.shallow_um)

    def escape_share(self, energy_kev: Array) -> Array:
        """Escape events per full-energy event (Reed & Ware, J. Phys. E 5 (1972) 582)."""
        above = energy_kev > SI_EDGE_KEV
        mu_in = cross_section("photo", 14, np.maximum(energy_kev, SI_EDGE_KEV + 0.01))
        mu_out = float(cross_section("photo", 14, np.array([SI_KA_KEV]))[0])
        inside = 1.0 - mu_out / mu_in * np.log1p(mu_in / mu_out)
        f = 0.5 * SI_YIELD * self.escape_scale * (1.0 - 1.0 / SI_JUMP) * inside
        return np.where(above, f / (1.0 - f), 0.0)


def respond(
    detector: SiliconDetector,
    channels: Channels,
    energy_kev: Array,
    width_kev: Array,
    blur_kev: Array | float = 0.0,
) -> Array:
    """Response to one full-energy event of each line, its escape peaks included.

    Parameters
    ----------
    energy_kev, width_kev : ndarray, shape (n_lines,)
        Energies and natural (Lorentzian) FWHM.
    blur_kev : float or ndarray
        Further Gaussian standard deviation, such as a Compton peak's.

    Returns
    -------
    ndarray, shape (n_lines, n_channels)
    """
    out = _profile(detector, channels, energy_kev, width_kev, blur_kev)
    share = detector.escape_share(energy_kev)
    for loss, part in ((SI_KA_KEV, 1.0 - SI_KB_SHARE), (SI_KB_KEV, SI_KB_SHARE)):
        some = (share > 1e-5) & (energy_kev > loss + 0.1)
        if np.any(some):
            blur = np.broadcast_to(blur_kev, energy_kev.shape)[some]
            escaped = _profile(detector, channels, energy_kev[some] - loss, width_kev[some], blur)
            out[some] += (part * share[some])[:, None] * escaped
    return out * _threshold(detector, channels)


def _threshold(detector: SiliconDetector, channels: Channels) -> Array:
    """Share of pulses that the electronics accept."""
    return ndtr((channels.centres_kev - detector.cut_kev) / 0.03)


def _profile(
    detector: SiliconDetector,
    channels: Channels,
    energy_kev: Array,
    width_kev: Array,
    blur_kev: Array | float,
) -> Array:
    """Core, tail and shelf of unit area, shape (n_lines, n_channels)."""
    sigma = np.sqrt(detector.sigma_kev(energy_kev) ** 2 + np.asarray(blur_kev) ** 2)
    tail, shelf = detector.tail_share(energy_kev), detector.shelf_share(energy_kev)
    x = channels.centres_kev[None, :] - energy_kev[:, None]
    core = _core(x, sigma, width_kev, channels.gain_kev)
    skirt = exponential_tail(x, sigma, detector.tail_kev) * channels.gain_kev
    flat = ndtr(-x / sigma[:, None]) * (channels.centres_kev > 0) * channels.gain_kev / energy_kev[:, None]
    return (1.0 - tail - shelf)[:, None] * core + tail[:, None] * skirt + shelf[:, None] * flat


def _core(x: Array, sigma: Array, width_kev: Array, gain_kev: float) -> Array:
    """Voigt profile per channel near the line, nothing beyond `_VOIGT_REACH_KEV`."""
    wide = np.sqrt(sigma**2 + gain_kev**2 / 12.0)  # a channel averages over its width
    near = np.abs(x) < np.maximum(_VOIGT_REACH_KEV, 8.0 * wide)[:, None]
    row = np.nonzero(near)[0]
    core = np.zeros(x.shape)
    core[near] = voigt_profile(x[near], wide[row], 0.5 * width_kev[row]) * gain_kev
    return core


def exponential_tail(x: Array, sigma: Array, decay_kev: Array | float) -> Array:
    """Exponential towards low energy, folded with the Gaussian: per keV, unit area, in the shape of `x`."""
    s = sigma[:, None]
    u = x / s
    k = s / decay_kev
    z = (u + k) / math.sqrt(2.0)
    near = np.exp(-0.5 * u**2) * erfcx(np.maximum(z, -5.0)) / (2.0 * decay_kev)
    far = np.exp(np.minimum(x / decay_kev + 0.5 * k**2, 0.0)) / decay_kev
    return np.where(z < -5.0, far, near)


def respond_to_continuum(
    detector: SiliconDetector, channels: Channels, energy_kev: Array, density: Array, blur_kev: Array
) -> Array:
    """Response to a continuum with its shelf and escapes; tails are lost in its slope.

    Parameters
    ----------
    energy_kev, density, blur_kev : ndarray, shape (n_points,)
        Photons per keV at increasing energies, and further Gaussian standard deviation there.

    Returns
    -------
    ndarray, shape (n_channels,)
    """
    x = channels.centres_kev
    per_channel = channels.gain_kev * np.interp(x, energy_kev, density, left=0.0, right=0.0)
    escaping = density * detector.escape_share(energy_kev)
    per_channel += channels.gain_kev * np.interp(x, energy_kev - SI_KA_KEV, escaping, left=0.0, right=0.0)
    positive = np.maximum(x, 0.3)
    blur = np.interp(x, energy_kev, blur_kev)
    folded = _blurred(per_channel, np.sqrt(detector.sigma_kev(positive) ** 2 + blur**2) / channels.gain_kev)
    shelf = detector.shelf_share(positive)
    level = np.cumsum((shelf * per_channel / positive)[::-1])[::-1] * (x > 0) * channels.gain_kev
    return ((1.0 - shelf) * folded + level) * _threshold(detector, channels)


def _blurred(values: Array, sigma: Array) -> Array:
    """Fold with a Gaussian whose width (channels) varies slowly: a blend of a few fixed widths."""
    nodes = np.geomspace(sigma.min(), max(sigma.max(), 1.01 * sigma.min()), 6)
    fixed = np.array([gaussian_filter1d(values, s, mode="nearest") for s in nodes])
    place = np.interp(sigma, nodes, np.arange(nodes.size))
    lower = np.minimum(place.astype(int), nodes.size - 2)
    share, i = place - lower, np.arange(values.size)
    return (1.0 - share) * fixed[lower, i] + share * fixed[lower + 1, i]


def piled_up(mean: Array, channels: Channels, per_pair: float) -> Array:
    """Counts lost to and gained by pulses that arrive within the pulse-pair time.

    Parameters
    ----------
    mean : ndarray, shape (n,)
        Counts without pile-up.
    per_pair : float
        Pulse-pair time over live time.

    Returns
    -------
    ndarray, shape (n,)
        Counts as recorded.
    """
    size = 2 * channels.n
    both = np.fft.irfft(np.fft.rfft(mean, size) ** 2, size)
    sums = 2.0 * channels.offset_kev + channels.gain_kev * np.arange(size)
    gained = np.interp(channels.centres_kev, sums, np.maximum(both, 0.0), left=0.0)
    return mean * survival(mean, per_pair) + per_pair * gained


def survival(mean: Array, per_pair: float) -> float:
    """Share of pulses that stay single."""
    return 1.0 - 2.0 * per_pair * float(mean.sum())
