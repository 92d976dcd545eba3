"""One simulated case: spectrum, instrument file and truth.

``make_case(seed, index)`` is deterministic. `Case.mean` is the expected spectrum, `Case.truth` says per
element and series the mean counts in the full-energy peaks (`area`), the smallest uncertainty with which
they could be known (`sigma`, see `truth`) and their ratio `z`.
"""

from __future__ import annotations

import json
import math
import tomllib
from dataclasses import dataclass, field
from functools import cache
from pathlib import Path
from typing import Any

import numpy as np
import xraydb

from .atomic import Array, Composition
from .detector import exponential_tail, piled_up, respond, respond_to_continuum, survival
from .instrument import Setup, draw_setup
from .nature import Nature
from .sample import Emission, Sample, Scatter, argon, fluorescence, scatter
from .truth import cramer_rao, scale_freedom
from .tube import Beam, air, beam

_STRIDE = 20
"""Neighbouring cases come from different trades; prime to the number of materials, so that all are used."""
TRACE = 1e-6
"""Mass fraction at which an added element does not change the matrix."""


@cache
def materials() -> tuple[dict[str, Any], ...]:
    """The invented samples of `materials.toml`."""
    return tuple(tomllib.loads(Path(__file__).with_name("materials.toml").read_text(encoding="utf-8"))["material"])


@dataclass(frozen=True, eq=False)
class Case:
    """A simulated measurement with its truth. Components hold mean counts per channel without pile-up.

    Attributes
    ----------
    components : dict
        By series name ("Fe K"): mean counts, escape peaks included, shape (n,).
    instrument_parts : dict
        "scatter", "continuum", "diffraction": mean counts, shape (n,).
    mean, counts : ndarray, shape (n,)
        Expected and drawn counts.
    """

    index: int
    material: str
    kind: str
    sample: Sample
    setup: Setup
    live_s: float
    components: dict[str, Array]
    instrument_parts: dict[str, Array]
    mean: Array
    counts: Array
    truth: dict[str, dict[str, dict[str, float]]]
    diffraction_kev: tuple[float, ...]
    beam: Beam = field(repr=False)
    nature: Nature = field(repr=False)

    @property
    def per_pair(self) -> float:
        """Pulse-pair time over live time."""
        return self.setup.pulse_pair_s / self.live_s

    @property
    def present(self) -> set[str]:
        """Symbols of all elements in the sample, whether visible or not."""
        both = {**self.sample.composition, **(self.sample.substrate or {})}
        return {xraydb.atomic_symbol(z) for z in both}


def make_case(seed: int, index: int, detector_kind: str | None = None, counts: float | None = None) -> Case:
    """Draw case `index` of the panel `seed`.

    Parameters
    ----------
    detector_kind : str, optional
        "drift" or "PIN"; drawn by default.
    counts : float, optional
        Total counts; drawn between 5e4 and 5e6 by default.
    """
    rng = np.random.default_rng([seed, index])
    nature = Nature((seed, index))
    recipe = materials()[(_STRIDE * index + 17 * seed) % len(materials())]
    sample = draw_sample(rng, recipe)
    setup = draw_setup(rng, detector_kind)
    light = beam(setup.tube, nature)
    emissions = fluorescence(sample, light, setup.geometry, nature)
    emissions.append(argon(light, setup.air_mm * rng.uniform(0.5, 1.5), nature))
    parts, loose = _to_channels(emissions, setup)
    lines, continuum = _scattered(scatter(sample, light, setup.geometry), light, setup)
    raw = sum(p.shape for p in parts.values()) + lines + continuum
    peaks = tuple(sorted(rng.uniform(3.0, 14.0, rng.integers(1, 4)))) if _diffracts(rng, recipe) else ()
    diffraction = _diffraction(rng, peaks, float(raw.sum()), setup)
    total = counts or float(10.0 ** rng.uniform(math.log10(5e4), math.log10(5e6)))
    k = total / float((raw + diffraction).sum())
    live = max(float(rng.choice([30.0, 60.0, 120.0, 300.0])), total / 1.2e5)
    return _finish(
        rng,
        Drawn(index, recipe, sample, setup, light, nature, live, k),
        parts,
        {"scatter": lines, "continuum": continuum, "diffraction": diffraction},
        loose,
        peaks,
    )


@dataclass(frozen=True, eq=False)
class Drawn:
    """What is fixed before counts are drawn; `scale` turns the physics' units into counts."""

    index: int
    recipe: dict[str, Any]
    sample: Sample
    setup: Setup
    light: Beam
    nature: Nature
    live_s: float
    scale: float


@dataclass(frozen=True, eq=False)
class Part:
    """One series in the channels: its shape with escapes, and its full-energy sum."""

    shape: Array
    full: float


def _finish(
    rng: np.random.Generator,
    drawn: Drawn,
    parts: dict[str, Part],
    others: dict[str, Array],
    loose: list[Array],
    peaks: tuple[float, ...],
) -> Case:
    """Scale to counts, pile up, draw the noise and work out the truth."""
    k, setup = drawn.scale, drawn.setup
    components = {name: k * p.shape for name, p in parts.items()}
    others = {name: k * v for name, v in others.items()}
    raw = sum(components.values()) + sum(others.values())
    per_pair = setup.pulse_pair_s / drawn.live_s
    mean = piled_up(raw, setup.channels, per_pair)
    alive = survival(raw, per_pair)
    full = {name: k * p.full * alive for name, p in parts.items()}
    free = [others["scatter"], *([others["diffraction"]] if peaks else [])]
    energy = setup.channels.centres_kev
    width = setup.detector.sigma_kev(np.maximum(energy, 0.0))
    freedom = scale_freedom(sum(components.values()) + others["scatter"], energy, width)
    sigma = cramer_rao(components, free, [k * v for v in loose] + freedom, mean)
    truth: dict[str, dict[str, dict[str, float]]] = {}
    for name, area in full.items():
        element, series = name.split()
        if name in sigma:  # the others have no counts to speak of
            s = sigma[name] * area / float(components[name].sum())
            truth.setdefault(element, {})[series] = {"area": area, "sigma": s, "z": area / s}
    return Case(
        index=drawn.index, material=drawn.recipe["name"], kind=drawn.recipe["kind"], sample=drawn.sample, setup=setup,
        live_s=drawn.live_s, components=components, instrument_parts=others, mean=mean,
        counts=rng.poisson(mean).astype(float), truth=truth, diffraction_kev=peaks, beam=drawn.light,
        nature=drawn.nature,
    )  # fmt: skip


def draw_sample(rng: np.random.Generator, recipe: dict[str, Any]) -> Sample:
    """Vary a recipe: majors by 15 per cent, minor constituents by 25, traces by 40."""
    top = _varied(rng, recipe["weights"])
    if "on" not in recipe:
        return Sample(top)
    mass = recipe["layer_um"] * 1e-4 * recipe["density_g_cm3"] * math.exp(rng.normal(0.0, 0.2))
    return Sample(top, _varied(rng, recipe["on"]), mass)


def _varied(rng: np.random.Generator, weights: dict[str, float]) -> Composition:
    spread = {s: 0.15 if w > 5 else 0.25 if w > 0.3 else 0.4 for s, w in weights.items()}
    drawn = {xraydb.atomic_number(s): w * math.exp(rng.normal(0.0, spread[s])) for s, w in weights.items()}
    total = sum(drawn.values())
    return {z: w / total for z, w in drawn.items()}


def _to_channels(emissions: list[Emission], setup: Setup) -> tuple[dict[str, Part], list[Array]]:
    """Draw every series; also one change per line group whose share is known only to a tolerance."""
    parts, loose = {}, []
    top = setup.channels.centres_kev[-1]
    for e in emissions:
        keep = e.energy_kev < top
        if not np.any(keep):
            continue
        energy = e.energy_kev[keep]
        n = e.photons[keep] * air(setup.air_mm, energy) * setup.detector.efficiency(energy)
        response = n[:, None] * respond(setup.detector, setup.channels, energy, e.width_kev[keep])
        parts[f"{xraydb.atomic_symbol(e.z)} {e.series}"] = Part(response.sum(axis=0), float(n.sum()))
        groups = np.array(e.group)[keep]
        for g in sorted(set(groups)):
            if e.spread(g) > 0:
                loose.append(e.spread(g) * response[groups == g].sum(axis=0))
    return parts, loose


def _scattered(s: Scatter, light: Beam, setup: Setup) -> tuple[Array, Array]:
    """Counts from the tube's scattered lines and from its scattered continuum."""
    n, channels, detector = light.n_continuum, setup.channels, setup.detector

    def reach(energy: Array, photons: Array) -> Array:
        return setup.scatter_scale * photons * air(setup.air_mm, energy) * detector.efficiency(energy)

    coherent, incoherent = reach(s.rayleigh_kev, s.rayleigh), reach(s.compton_kev, s.compton)
    continuum = respond_to_continuum(detector, channels, s.rayleigh_kev[:n], coherent[:n] / light.bin_kev, np.zeros(n))
    squeezed = light.bin_kev * np.gradient(s.compton_kev[:n], s.rayleigh_kev[:n])
    continuum += respond_to_continuum(detector, channels, s.compton_kev[:n], incoherent[:n] / squeezed, s.width_kev[:n])
    lines = coherent[n:] @ respond(detector, channels, s.rayleigh_kev[n:], np.zeros(coherent.size - n))
    lines = lines + _compton_lines(s, incoherent, n, setup)
    return lines, continuum


def _compton_lines(s: Scatter, incoherent: Array, first: int, setup: Setup) -> Array:
    """Scattered lines with Doppler width, and a low-energy tail from photons that scattered twice.

    The tail's share follows that of scatter in the sample's attenuation, its length the energy that one
    more scatter takes, which grows with the square of the energy.
    """
    energy, n, blur = s.compton_kev[first:], incoherent[first:], s.width_kev[first:]
    single = n @ respond(setup.detector, setup.channels, energy, np.zeros(n.size), blur)
    sigma = np.sqrt(setup.detector.sigma_kev(energy) ** 2 + blur**2)
    x = setup.channels.centres_kev[None, :] - energy[:, None]
    decay = setup.multiple_kev * (energy / 20.0) ** 2
    again = setup.multiple_share * s.albedo[first:] * n
    long = decay > 0.2 * sigma  # shorter ones do not show
    twice = again[long] @ exponential_tail(x[long], sigma[long], decay[long, None])
    return (
        single
        + again[~long]
        @ respond(setup.detector, setup.channels, energy[~long], np.zeros(int(np.sum(~long))), blur[~long])
        + twice * setup.channels.gain_kev
    )


def _diffracts(rng: np.random.Generator, recipe: dict[str, Any]) -> bool:
    return bool(rng.random() < 0.35) and bool(recipe.get("crystals"))


def _diffraction(rng: np.random.Generator, peaks: tuple[float, ...], total: float, setup: Setup) -> Array:
    """Bragg peaks of the continuum: somewhat wider than a line, 0.03 to 0.3 per cent of all counts each."""
    out = np.zeros(setup.channels.n)
    for e in peaks:
        blur = rng.uniform(0.002, 0.008) * e
        share = math.exp(rng.uniform(math.log(3e-4), math.log(3e-3)))
        out += share * total * respond(setup.detector, setup.channels, np.array([e]), np.zeros(1), blur)[0]
    return out


def unit_response(case: Case, element: str) -> dict[str, Part]:
    """Channels of a trace of `element` in this case's sample, per series, at a mass fraction of `TRACE`."""
    z = xraydb.atomic_number(element)
    base = case.sample.substrate or case.sample.composition
    traced = Sample({**base, z: base.get(z, 0.0) + TRACE})
    wanted = [e for e in fluorescence(traced, case.beam, case.setup.geometry, case.nature) if e.z == z]
    return _to_channels(wanted, case.setup)[0]


def with_trace(case: Case, element: str, series: str, area: float, rng: np.random.Generator) -> Array:
    """Counts of the same measurement, repeated, with a trace of `element` of `area` counts in `series`."""
    parts = unit_response(case, element)
    raw = sum(case.components.values()) + sum(case.instrument_parts.values())
    k = area / (parts[f"{element} {series}"].full * survival(raw, case.per_pair))
    raw = raw + k * sum(p.shape for p in parts.values())
    return rng.poisson(piled_up(raw, case.setup.channels, case.per_pair)).astype(float)


def write_case(case: Case, folder: Path, counts: Array | None = None, stem: str | None = None) -> Path:
    """Write spectrum (ISO 22029), instrument file and truth; return the spectrum's path."""
    stem = stem or f"case-{case.index:03d}"
    path = folder / f"{stem}.msa"
    path.write_text(_emsa(case, case.counts if counts is None else counts, stem), encoding="ascii", newline="")
    path.with_suffix(".toml").write_text(case.setup.to_toml(), encoding="utf-8")
    truth = {
        "material": case.material,
        "kind": case.kind,
        "anode": case.setup.tube.anode,
        "detector": case.setup.kind,
        "voltage_kv": case.setup.stated_tube.voltage_kv,
        "total": float(case.counts.sum()),
        "live_s": case.live_s,
        "offset_kev": case.setup.channels.offset_kev,
        "gain_kev": case.setup.channels.gain_kev,
        "fwhm_mn_ka_ev": case.setup.true_fwhm_ev,
        "diffraction_kev": list(case.diffraction_kev),
        "present": sorted(case.present),
        "elements": case.truth,
    }
    path.with_suffix(".truth.json").write_text(json.dumps(truth, indent=1), encoding="utf-8")
    return path


def _emsa(case: Case, counts: Array, title: str) -> str:
    said = case.setup.stated_channels
    head = [
        ("FORMAT", "EMSA/MAS Spectral Data File"),
        ("VERSION", "1.0"),
        ("TITLE", title),
        ("DATE", "01-DEC-2025"),
        ("TIME", "10:00"),
        ("OWNER", "simulated"),
        ("NPOINTS", f"{said.n}."),
        ("NCOLUMNS", "1."),
        ("XUNITS", "keV"),
        ("YUNITS", "counts"),
        ("DATATYPE", "Y"),
        ("XPERCHAN", f"{said.gain_kev:.8g}"),
        ("OFFSET", f"{said.offset_kev:.8g}"),
        ("SIGNALTYPE", "XRF"),
        ("BEAMKV   -kV", f"{case.setup.stated_tube.voltage_kv:g}"),
        ("LIVETIME  -s", f"{case.live_s:.2f}"),
        ("REALTIME  -s", f"{1.06 * case.live_s:.2f}"),
        ("SPECTRUM", ""),
    ]
    text = "".join(f"#{k:<12s}: {v}\r\n" for k, v in head)
    rows = (counts[i : i + 4] for i in range(0, counts.size, 4))
    text += "".join(", ".join(f"{v:.0f}." for v in row) + ",\r\n" for row in rows)
    return text + "#ENDOFDATA   : \r\n"
