"""What the sample sends towards the detector: fluorescence and scatter.

Thick, flat samples after Sherman, Spectrochim. Acta 7 (1955) 283, with secondary enhancement by every
line of the sample after Shiraiwa & Fujino, Jpn. J. Appl. Phys. 5 (1966) 886. A layer on a substrate gets
primary fluorescence only. Everything is per steradian and per unit area of the same beam.
"""

from __future__ import annotations

import math
from dataclasses import dataclass, replace

import numpy as np
import xraydb

from . import tables
from .atomic import Array, Composition, attenuation, cross_section, production
from .nature import Nature, share_spread
from .tube import AIR, AIR_G_CM3, Beam

ELECTRON_REST_KEV = 510.999
CLASSICAL_RADIUS_CM = 2.8179403e-13
AVOGADRO = 6.02214076e23
FIRST_ELEMENT = 11
_ENHANCING = 40
"""So many of the sample's strongest lines excite others."""


@dataclass(frozen=True)
class Geometry:
    """Angles in degrees: beam to surface, surface to detector, turn of the scattered radiation."""

    incidence_deg: float
    takeoff_deg: float
    scatter_deg: float

    @property
    def sines(self) -> tuple[float, float]:
        """Sines of incidence and take-off."""
        return math.sin(math.radians(self.incidence_deg)), math.sin(math.radians(self.takeoff_deg))


@dataclass(frozen=True)
class Sample:
    """A thick sample, or a layer (`layer_g_cm2`) of `composition` on a thick `substrate`."""

    composition: Composition
    substrate: Composition | None = None
    layer_g_cm2: float = math.inf


@dataclass(frozen=True, eq=False)
class Emission:
    """Photons of one series leaving the sample; arrays and tuples of shape (n_lines,)."""

    z: int
    series: str
    energy_kev: Array
    photons: Array
    width_kev: Array
    group: tuple[str, ...]

    def spread(self, group: str) -> float:
        """How far the share of `group` may differ from any table (logarithm)."""
        return share_spread(self.z, group)


def fluorescence(sample: Sample, beam: Beam, geometry: Geometry, nature: Nature) -> list[Emission]:
    """All series of all elements of the sample."""
    if sample.substrate is None:
        return _thick(sample.composition, beam, geometry, nature)
    mass = sample.layer_g_cm2
    top = _layer(sample.composition, mass, beam, geometry, nature)
    mu = attenuation(sample.composition, beam.energy_kev) / geometry.sines[0]
    below = _thick(sample.substrate, replace(beam, photons=beam.photons * np.exp(-mu * mass)), geometry, nature)
    return _merged(top + [_through(e, sample.composition, mass / geometry.sines[1]) for e in below])


def _through(emission: Emission, composition: Composition, mass: float) -> Emission:
    return replace(emission, photons=emission.photons * np.exp(-attenuation(composition, emission.energy_kev) * mass))


def _merged(emissions: list[Emission]) -> list[Emission]:
    """Add up the same series coming from layer and substrate."""
    found: dict[tuple[int, str], Emission] = {}
    for e in emissions:
        same = found.get((e.z, e.series))
        found[e.z, e.series] = e if same is None else replace(e, photons=e.photons + same.photons)
    return list(found.values())


def _sources(composition: Composition, beam: Beam, nature: Nature):  # type: ignore[no-untyped-def]
    """Per series of the sample: lines, mass fraction and production by the beam, (n_lines, n_beam)."""
    for z, weight in composition.items():
        if z < FIRST_ELEMENT:
            continue
        for lines in nature.lines(z):
            made = production(lines, beam.energy_kev) * (beam.energy_kev > lines.energy_kev[:, None])
            if np.any(made > 0):
                yield lines, weight, made


def _layer(composition: Composition, mass: float, beam: Beam, geometry: Geometry, nature: Nature) -> list[Emission]:
    """Primary fluorescence of a layer of `mass` g/cm2."""
    s1, s2 = geometry.sines
    a = attenuation(composition, beam.energy_kev) / s1
    out = []
    for lines, weight, made in _sources(composition, beam, nature):
        chi = a[None, :] + (attenuation(composition, lines.energy_kev) / s2)[:, None]
        n = weight * (made * -np.expm1(-chi * mass) / chi) @ beam.photons / (4.0 * math.pi)
        out.append(Emission(lines.z, lines.series, lines.energy_kev, n, lines.width_kev, lines.group))
    return out


def _thick(composition: Composition, beam: Beam, geometry: Geometry, nature: Nature) -> list[Emission]:
    """Primary and secondary fluorescence of a sample that absorbs everything."""
    s1, s2 = geometry.sines
    sources = list(_sources(composition, beam, nature))
    if not sources:
        return []
    a = attenuation(composition, beam.energy_kev) / s1
    energy_j, made_j = _strongest(sources, beam)
    mu_j = attenuation(composition, energy_j)
    grown = np.log1p(a[None, :] / mu_j[:, None]) / a[None, :]  # (n_j, n_beam)
    out = []
    for lines, weight, made in sources:
        b = attenuation(composition, lines.energy_kev) / s2
        seen = beam.photons[:, None] / (a[:, None] + b[None, :])  # (n_beam, n_lines)
        primary = weight * np.einsum("ie,ei->i", made, seen)
        ways = (made_j * grown) @ seen + (np.log1p(b[None, :] / mu_j[:, None]) / b[None, :]) * (made_j @ seen)
        by_j = production(lines, energy_j).T * (energy_j[:, None] > lines.energy_kev[None, :])
        secondary = 0.5 * weight * np.einsum("ji,ji->i", by_j, ways)
        n = (primary + secondary) / (4.0 * math.pi)
        out.append(Emission(lines.z, lines.series, lines.energy_kev, n, lines.width_kev, lines.group))
    return out


def _strongest(sources, beam: Beam) -> tuple[Array, Array]:  # type: ignore[no-untyped-def]
    """Energies and production, (n_j, n_beam), of the lines that can enhance others."""
    energy = np.concatenate([lines.energy_kev for lines, _, _ in sources])
    made = np.concatenate([weight * m for _, weight, m in sources])
    order = np.argsort(-(made @ beam.photons))[:_ENHANCING]
    return energy[order], made[order]


@dataclass(frozen=True, eq=False)
class Scatter:
    """Scattered photons, entry by entry of the beam.

    `width_kev` is the Compton peak's Doppler sigma, `albedo` the share of scatter in the attenuation.
    """

    rayleigh_kev: Array
    rayleigh: Array
    compton_kev: Array
    compton: Array
    width_kev: Array
    albedo: Array


def scatter(sample: Sample, beam: Beam, geometry: Geometry) -> Scatter:
    """Single scatter of the beam; a layer is taken to scatter as its substrate seen through it."""
    s1, s2 = geometry.sines
    base = sample.substrate or sample.composition
    energy = beam.energy_kev
    cosine = math.cos(math.radians(geometry.scatter_deg))
    shifted = energy / (1.0 + energy / ELECTRON_REST_KEV * (1.0 - cosine))
    a, b, b_shifted = (
        attenuation(base, energy) / s1,
        attenuation(base, energy) / s2,
        attenuation(base, shifted) / s2,
    )
    coherent = sum(w * rayleigh_per_steradian(z, energy, geometry.scatter_deg) for z, w in base.items())
    klein_nishina = _incoherent_shape(energy, cosine)
    incoherent = sum(w * cross_section("incoherent", z, energy) for z, w in base.items()) * klein_nishina
    through, through_shifted = np.ones(energy.size), np.ones(energy.size)
    if sample.substrate is not None:
        mass = sample.layer_g_cm2
        into = attenuation(sample.composition, energy) * mass / s1
        through = np.exp(-into - attenuation(sample.composition, energy) * mass / s2)
        through_shifted = np.exp(-into - attenuation(sample.composition, shifted) * mass / s2)
    return Scatter(
        rayleigh_kev=energy,
        rayleigh=beam.photons * coherent / (a + b) * through,
        compton_kev=shifted,
        compton=beam.photons * incoherent / (a + b_shifted) * through_shifted,
        width_kev=_doppler(base, energy, geometry.scatter_deg),
        albedo=1.0 - sum(w * cross_section("photo", z, energy) for z, w in base.items()) / (a * s1),
    )


def rayleigh_per_steradian(z: int, energy_kev: Array, scatter_deg: float) -> Array:
    """Coherent scatter cross section, cm2/g/sr: Thomson times squared form factor (Waasmaier & Kirfel)."""
    q = energy_kev / 12.398420 * math.sin(math.radians(scatter_deg) / 2.0)
    form = np.asarray(xraydb.f0(z, np.minimum(q, 6.0)))
    thomson = CLASSICAL_RADIUS_CM**2 * 0.5 * (1.0 + math.cos(math.radians(scatter_deg)) ** 2)
    return thomson * form**2 * AVOGADRO / xraydb.atomic_mass(z)


def _incoherent_shape(energy_kev: Array, cosine: float) -> Array:
    """Klein-Nishina probability per steradian of an incoherent scatter through the angle."""
    k = energy_kev / ELECTRON_REST_KEV

    def per_steradian(c: Array | float) -> Array:
        p = 1.0 / (1.0 + k * (1.0 - c))
        return 0.5 * p**2 * (p + 1.0 / p - (1.0 - c**2))

    grid, weight = np.polynomial.legendre.leggauss(24)
    total = 2.0 * math.pi * sum(w * per_steradian(c) for c, w in zip(grid, weight, strict=True))
    return per_steradian(cosine) / total


def _doppler(composition: Composition, energy_kev: Array, scatter_deg: float) -> Array:
    """Standard deviation (keV) of the Compton energy from the electrons' motion."""
    scattering = {z: w * float(cross_section("incoherent", z, np.array([20.0]))[0]) for z, w in composition.items()}
    known = tables.COMPTON_MOMENTUM
    momentum = sum(n * np.interp(z, list(known), list(known.values())) for z, n in scattering.items())
    momentum /= sum(scattering.values())
    fwhm = 2.0 * energy_kev * math.sin(math.radians(scatter_deg) / 2.0) * momentum / 137.036
    return fwhm / 2.3548


def argon(beam: Beam, length_mm: float, nature: Nature) -> Emission:
    """Fluorescence of the argon in `length_mm` of air that the beam crosses in view of the detector."""
    lines = nature.lines(18)[0]
    made = production(lines, beam.energy_kev) * (beam.energy_kev > lines.energy_kev[:, None])
    n = AIR[18] * AIR_G_CM3 * 0.1 * length_mm * (made @ beam.photons) / (4.0 * math.pi)
    return Emission(18, "K", lines.energy_kev, n, lines.width_kev, lines.group)
