"""Counts, and what a channel means: `Spectrum`, `EnergyScale`, `Resolution`."""

from __future__ import annotations

import math
from collections.abc import Mapping
from dataclasses import dataclass, field, replace
from types import MappingProxyType
from typing import Any

import numpy as np
from numpy.typing import ArrayLike, NDArray

FWHM_PER_SIGMA = 2.0 * math.sqrt(2.0 * math.log(2.0))
MN_KA_KEV = 5.8951
"""Energy at which a detector's resolution is quoted (ISO 15632), mean of Mn K-alpha 1 and 2."""

PAIR_ENERGY_EV = {"Si": 3.65, "Ge": 2.96, "CdTe": 4.43}
"""Mean energy to make an electron-hole pair, eV (from memory; Si 3.62-3.66 in the literature)."""
FANO_FACTOR = {"Si": 0.115, "Ge": 0.11, "CdTe": 0.10}
"""Fano factors (from memory; Si 0.11-0.12; CdTe poorly known)."""


@dataclass(frozen=True, slots=True)
class EnergyScale:
    """Energy of channel ``i`` (0-based, channel centre): ``offset + gain*i + quadratic*i**2``, in keV."""

    offset_kev: float
    gain_kev: float
    quadratic_kev: float = 0.0

    def __post_init__(self) -> None:
        if not (math.isfinite(self.offset_kev) and math.isfinite(self.quadratic_kev)):
            raise ValueError(f"an energy scale needs finite coefficients; got {self!r}")
        if not self.gain_kev > 0 or not math.isfinite(self.gain_kev):
            raise ValueError(f"gain_kev must be > 0; got {self.gain_kev!r}")

    def energy_kev(self, channel: ArrayLike) -> NDArray[np.float64]:
        """Energy in keV of (fractional) channels, any shape."""
        c = np.asarray(channel, dtype=float)
        return self.offset_kev + c * (self.gain_kev + c * self.quadratic_kev)

    def edges_kev(self, n_channels: int) -> NDArray[np.float64]:
        """Energies of the ``n_channels + 1`` channel boundaries, keV."""
        return self.energy_kev(np.arange(n_channels + 1) - 0.5)

    def channel(self, energy_kev: ArrayLike) -> NDArray[np.float64]:
        """(Fractional) channel of energies in keV, any shape; the inverse of `energy_kev`."""
        e = np.asarray(energy_kev, dtype=float) - self.offset_kev
        if self.quadratic_kev == 0.0:
            return np.asarray(e / self.gain_kev)
        root = np.sqrt(np.maximum(self.gain_kev**2 + 4.0 * self.quadratic_kev * e, 0.0))
        return np.asarray(2.0 * e / (self.gain_kev + root))


@dataclass(frozen=True, slots=True)
class Resolution:
    """Width of a line: ``FWHM(E)**2 = noise**2 + FWHM_PER_SIGMA**2 * fano * pair_energy * E``.

    `noise_ev` is the electronic contribution as a FWHM in eV, `fano` the Fano factor,
    `pair_energy_ev` the mean energy per electron-hole pair.
    """

    noise_ev: float
    fano: float = FANO_FACTOR["Si"]
    pair_energy_ev: float = PAIR_ENERGY_EV["Si"]

    @classmethod
    def from_mn_ka(cls, fwhm_ev: float, material: str = "Si") -> Resolution:
        """Resolution of a detector of `material` whose width at Mn K-alpha is `fwhm_ev`.

        A width below the Fano limit is taken as a Fano factor smaller than the usual one.
        """
        fano, pair = FANO_FACTOR[material], PAIR_ENERGY_EV[material]
        statistical = FWHM_PER_SIGMA**2 * fano * pair * MN_KA_KEV * 1e3
        if fwhm_ev**2 > statistical:
            return cls(math.sqrt(fwhm_ev**2 - statistical), fano, pair)
        return cls(0.0, fano * fwhm_ev**2 / statistical, pair)

    def fwhm_kev(self, energy_kev: ArrayLike) -> NDArray[np.float64]:
        """Full width at half maximum, keV, at energies in keV, any shape."""
        e_ev = np.maximum(np.asarray(energy_kev, dtype=float), 0.0) * 1e3
        variance = self.noise_ev**2 + FWHM_PER_SIGMA**2 * self.fano * self.pair_energy_ev * e_ev
        return np.asarray(np.sqrt(variance) * 1e-3)

    def sigma_kev(self, energy_kev: ArrayLike) -> NDArray[np.float64]:
        """Gaussian standard deviation, keV, at energies in keV, any shape."""
        return self.fwhm_kev(energy_kev) / FWHM_PER_SIGMA

    @property
    def fwhm_mn_ka_ev(self) -> float:
        """Width at Mn K-alpha in eV, the figure by which detectors are compared."""
        return float(self.fwhm_kev(MN_KA_KEV)) * 1e3


@dataclass(frozen=True, eq=False)
class Spectrum:
    """Counts per channel and what the file says about them.

    Attributes
    ----------
    counts : ndarray of float64, shape (n_channels,)
        Counts, >= 0 and finite; read-only.
    scale : EnergyScale or None
        The energy scale that the file states; None if it states none.
    live_time_s, real_time_s : float or None
        Measuring times in seconds.
    title : str
        The file's own title or the spectrum's name in it.
    path, dataset : str or None
        The file it came from and the name or HDF5 path inside it.
    metadata : mapping
        Further statements of the file, as read (`voltage_kv`, `anode`, `fwhm_mn_ka_ev`, ... where given).
    assumptions : tuple of str
        What the reader had to assume, in words.
    """

    counts: NDArray[np.float64]
    scale: EnergyScale | None = None
    live_time_s: float | None = None
    real_time_s: float | None = None
    title: str = ""
    path: str | None = None
    dataset: str | None = None
    metadata: Mapping[str, Any] = field(default_factory=dict)
    assumptions: tuple[str, ...] = ()

    def __post_init__(self) -> None:
        counts = np.array(self.counts, dtype=np.float64)
        if counts.ndim != 1:
            raise ValueError(f"counts must have shape (n_channels,); got shape {counts.shape}")
        if not np.all(np.isfinite(counts)):
            raise ValueError(f"counts must be finite; channel {int(np.argmin(np.isfinite(counts)))} is not")
        if np.any(counts < 0):
            bad = int(np.argmax(counts < 0))
            raise ValueError(f"counts must be >= 0; channel {bad} holds {counts[bad]:g}")
        counts.setflags(write=False)
        object.__setattr__(self, "counts", counts)
        object.__setattr__(self, "metadata", MappingProxyType(dict(self.metadata)))

    @property
    def n_channels(self) -> int:
        """Number of channels."""
        return int(self.counts.size)

    @property
    def total_counts(self) -> float:
        """Sum of all channels."""
        return float(self.counts.sum())

    @property
    def energy_kev(self) -> NDArray[np.float64]:
        """Energies of the channel centres, keV, shape (n_channels,).

        Raises
        ------
        ValueError
            If the spectrum has no energy scale.
        """
        if self.scale is None:
            raise ValueError("this spectrum has no energy scale")
        return self.scale.energy_kev(np.arange(self.n_channels))

    @property
    def name(self) -> str:
        """What to call it in a table: its name inside the file, or the file, or the title."""
        if self.path and self.dataset:
            return f"{self.path}:{self.dataset}"
        return self.path or self.title or "spectrum"

    def with_scale(self, scale: EnergyScale | None) -> Spectrum:
        """Return a copy with another energy scale."""
        return replace(self, scale=scale)

    def __repr__(self) -> str:
        scale = "no energy scale"
        if self.scale is not None:
            e = self.energy_kev
            scale = f"{e[0]:.3f} to {e[-1]:.3f} keV"
        live = "" if self.live_time_s is None else f", live {self.live_time_s:g} s"
        return f"<Spectrum {self.name}: {self.n_channels} channels, {self.total_counts:.0f} counts, {scale}{live}>"
