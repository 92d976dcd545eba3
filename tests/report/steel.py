"""A simulated stainless steel with every kind of finding, to show and to write without running the engine."""

from __future__ import annotations

from collections.abc import Callable

import numpy as np
import pytest
from numpy.typing import NDArray

from xrfid.identify.result import (
    Artefact,
    ArtefactKind,
    Calibration,
    Curves,
    Evidence,
    Finding,
    Identification,
    Limit,
    LineEvidence,
    Rival,
    SeriesResult,
    Source,
    Unexplained,
    Verdict,
)
from xrfid.spectrum import EnergyScale, Resolution

SCALE = EnergyScale(0.0, 0.02)
RESOLUTION = Resolution.from_mn_ka(145.0)
CHANNELS = 2048
ENERGY = SCALE.energy_kev(np.arange(CHANNELS))

# Line energies (keV) and shares from memory, good enough to look at; tests/reference has the real ones.
LINES = {
    "Fe K": (800_000.0, [("Ka1", 6.404, 0.58), ("Ka2", 6.391, 0.29), ("Kb1", 7.058, 0.13)]),
    "Cr K": (240_000.0, [("Ka1", 5.415, 0.58), ("Ka2", 5.405, 0.29), ("Kb1", 5.947, 0.13)]),
    "Ni K": (52_000.0, [("Ka1", 7.478, 0.58), ("Ka2", 7.461, 0.29), ("Kb1", 8.265, 0.13)]),
    "Mo K": (
        21_000.0,
        [("Ka1", 17.479, 0.55), ("Ka2", 17.374, 0.29), ("Kb1", 19.608, 0.13), ("Kb2", 19.965, 0.03)],
    ),
    "Mo L": (900.0, [("La1", 2.293, 0.70), ("Lb1", 2.395, 0.30)]),
    "Mn K": (9_000.0, [("Ka1", 5.899, 0.58), ("Ka2", 5.888, 0.29), ("Kb1", 6.490, 0.13)]),
    "Si K": (700.0, [("Ka1", 1.740, 0.97), ("Kb1", 1.836, 0.03)]),
    "Cu K": (260.0, [("Ka1", 8.048, 0.58), ("Ka2", 8.028, 0.29), ("Kb1", 8.905, 0.13)]),
    "S K": (210.0, [("Ka1", 2.308, 0.94), ("Kb1", 2.464, 0.06)]),
    "Ar K": (640.0, [("Ka1", 2.957, 0.90), ("Kb1", 3.190, 0.10)]),
}
OTHERS = {
    "escape of Fe K": (3_100.0, 4.662, 1.0),
    "sum": (900.0, 12.80, 1.3),
    "coherent scatter": (6_500.0, 20.165, 1.0),
    "incoherent scatter": (19_000.0, 19.20, 2.6),
    "unassigned peaks": (700.0, 9.28, 1.0),
}
SIGNIFICANCE = {
    "Fe": 855.3,
    "Cr": 462.0,
    "Ni": 201.4,
    "Mo": 119.0,
    "Mn": 14.2,
    "Si": 9.31,
    "Cu": 3.4,
    "S": 5.2,
}
VERDICTS = {"Cu": Verdict.TENTATIVE, "S": Verdict.UNRESOLVED, "Ar": Verdict.INSTRUMENT}
REASONS = {
    "Cu": "Counts where Cu has its lines stand 3.4 sigma clear; 4.1 sigma are asked for before it is named.",
    "S": "Something is there (5.2 sigma), but Mo L would explain the same counts about as well as S.",
    "Ar": "Argon of the air between sample and detector.",
}


def peak(area: float, energy_kev: float, widen: float = 1.0) -> NDArray[np.float64]:
    """Return a Gaussian of `area` counts on `ENERGY`, shape (CHANNELS,)."""
    sigma = float(RESOLUTION.sigma_kev(energy_kev)) * widen
    shape = np.exp(-0.5 * ((ENERGY - energy_kev) / sigma) ** 2)
    return np.asarray(area * shape / shape.sum())


def curves() -> Curves:
    """Poisson counts of the simulated steel and the model they were drawn from."""
    parts = {
        name: np.sum([peak(area * share, e) for _, e, share in lines], axis=0)
        for name, (area, lines) in LINES.items()
    } | {name: peak(*of) for name, of in OTHERS.items()}
    hump = 60.0 * np.exp(-0.5 * ((ENERGY - 12.0) / 7.0) ** 2) + 160.0 * np.exp(-(((ENERGY - 4.0) / 4.0) ** 2))
    continuum = hump * (1.0 - np.exp(-((ENERGY / 1.2) ** 3))) * (ENERGY < 40.0) + 0.4
    parts["shape corrections"] = 0.004 * np.gradient(parts["Fe K"])
    model = continuum + np.sum(list(parts.values()), axis=0)
    counts = np.random.default_rng(20240611).poisson(np.maximum(model, 0.0)).astype(float)
    elements = {name.split()[0] for name in LINES}
    without = {
        e: model - np.sum([parts[n] for n in LINES if n.split()[0] == e], axis=0) for e in sorted(elements)
    }
    lines = tuple((name, line, e, share) for name, (_, rows) in LINES.items() for line, e, share in rows)
    return Curves(ENERGY, counts, model, continuum, parts, without, lines, (40, 2020))


def evidence(element: str) -> Evidence:
    """Evidence line by line, as the engine would give it."""
    lines = []
    for name, (area, rows) in LINES.items():
        if name.split()[0] == element:
            for group in sorted({row[0][:2] for row in rows}):
                members = [row for row in rows if row[0].startswith(group)]
                share = sum(row[2] for row in members)
                at = sum(row[1] * row[2] for row in members) / share
                lines.append(
                    LineEvidence(
                        name.split()[1],
                        group,
                        at,
                        area * share,
                        area * share * 1.01,
                        (area * share) ** 0.5,
                        0.93,
                    )
                )
    z = SIGNIFICANCE.get(element, 12.0)
    return Evidence(z, z * z, 4.1, 1.07, tuple(lines), lines[0].group, ("Kb",) if element == "Cu" else (), "")


def finding(element: str) -> Finding:
    """Return the finding on one element of the simulated steel."""
    proof = evidence(element)
    groups = " and ".join(f"{x.group} ({x.energy_kev:.2f} keV)" for x in proof.lines[:2])
    firm = (
        f"Without {element} the fit loses {proof.significance:.1f} sigma at {groups}; "
        "nothing else explains these counts."
    )
    series = tuple(
        SeriesResult(name.split()[1], area, 1.18 * area**0.5 + 12.0, 41.0, 84.0, area + 2.0 * area**0.5)
        for name, (area, _) in LINES.items()
        if name.split()[0] == element
    )
    rivals = (
        (Rival("Mo L", "element", 1.3), Rival("a sum of Si Ka", "artefact", 7.9)) if element == "S" else ()
    )
    return Finding(
        element, VERDICTS.get(element, Verdict.IDENTIFIED), REASONS.get(element, firm), series, proof, rivals
    )


def limits() -> tuple[Limit, ...]:
    """Limits of a few elements that are not there."""
    seen = [
        ("As", "K", 61.0),
        ("Hg", "L", 83.0),
        ("Pb", "L", 90.4),
        ("Pb", "M", 310.0),
        ("Cd", "K", 148.0),
        ("Tl", "L", 86.0),
        ("Br", "K", 57.0),
        ("Ti", "K", 420.0),
        ("V", "K", 1210.0),
        ("Co", "K", 3120.0),
        ("Zn", "K", 66.0),
        ("W", "L", 71.0),
        ("Nb", "K", 180.0),
        ("Sn", "K", 95.0),
        ("Al", "K", 230.0),
    ]
    reason = "even a sample made of it would stay below the detection limit here"
    return (
        *(Limit(e, s, Verdict.NOT_DETECTED, 0.48 * d, d, 0.9 * d) for e, s, d in seen),
        *(
            Limit(e, s, Verdict.OUT_OF_REACH, 20.0, 44.0, 40.0, reason)
            for e, s in (("U", "M"), ("Ba", "K"), ("F", "K"))
        ),
        Limit("Th", "K", Verdict.OUT_OF_REACH, reason="its edge lies above the tube's voltage"),
    )


def build(path: str | None = "coupon.msa", title: str = "Valve body, side A") -> Identification:
    """Return the whole simulated identification."""
    shown = curves()
    anode = Finding(
        "Rh",
        Verdict.INSTRUMENT,
        "Rh is the tube's own target: its scattered lines are in every spectrum; the sample may hold Rh too.",
        (SeriesResult("K", 6500.0, 130.0, 210.0, 430.0, 6700.0),),
        Evidence(50.0, 2500.0, 4.1, 1.0),
    )
    elements = ("Fe", "Cr", "Ni", "Mo", "Mn", "Si", "S", "Cu", "Ar")
    residuals = (
        ("Cr Ka", 5.412, 1.8, 0.9),
        ("Fe Ka", 6.399, -0.6, 0.5),
        ("Ni Ka", 7.472, -2.1, 1.6),
        ("Mo Ka", 17.444, 2.7, 2.9),
    )
    advice = "turn or shift the sample: a diffraction peak moves or changes, a line stays"
    return Identification(
        source=Source(path, None, title, CHANNELS, float(shown.counts.sum()), 60.0, 71.4),
        calibration=Calibration(SCALE, RESOLUTION, "file", 2.13, "", 0.0008, 1.1e-6, residuals),
        findings=(*(finding(e) for e in elements), anode),
        limits=limits(),
        artefacts=(
            Artefact(ArtefactKind.ESCAPE, 4.662, 3100.0, 620.0, "Fe K Ka"),
            Artefact(ArtefactKind.DIFFRACTION, 9.28, 700.0, 41.0, "a peak on no line of any element", advice),
            Artefact(ArtefactKind.SUM, 12.80, 900.0, 55.0, "Fe K Ka + Fe K Ka"),
            Artefact(ArtefactKind.INCOHERENT, 19.20, 19_000.0, 190.0, "Rh K lines of the source"),
            Artefact(ArtefactKind.COHERENT, 20.165, 6500.0, 130.0, "Rh K lines of the source"),
        ),
        unexplained=(Unexplained(11.31, 154.0, 31.0),),
        assumptions=(
            "tube voltage 40 kV (stated by nobody; the highest energy with counts)",
            "the sample is taken as thick, flat and homogeneous where the lines of one series are weighed",
        ),
        cautions=(
            "Elements lighter than sodium (carbon, nitrogen, oxygen, ...) are invisible to this measurement.",
            "A screening result is no clearance for handling, food contact, pressure parts or disposal.",
        ),
        provenance={"xrfid": "0.1.0", "numpy": "2.0.0", "python": "3.11.2"},
        curves=shown,
        reduced_deviance=1.04,
        false_identification_level=0.01,
        composition={"Fe": 0.66, "Cr": 0.17, "Ni": 0.11, "Mo": 0.025, "light matrix": 0.035},
    )


@pytest.fixture
def steel() -> Identification:
    """Return the simulated stainless steel."""
    return build()


@pytest.fixture
def make_steel() -> Callable[..., Identification]:
    """Return the builder, for another path or title."""
    return build
