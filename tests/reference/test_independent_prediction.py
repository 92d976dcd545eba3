"""Whole predictions against a plain recomputation with other atomic data, and worked tables.

The recomputation reads xraydb only: total and photo-absorption, jump ratios, yields, Coster-Kronig
probabilities and line strengths of Elam, Ravel & Sieber 2002, put together by Sherman's equation.
"""

import math
from functools import cache

import numpy as np
import pytest
import xraydb

from xrfid.atoms.absorption import layer_transmission
from xrfid.atoms.elements import ATOMIC_NUMBER
from xrfid.instrument import Instrument
from xrfid.response.excitation import excitation
from xrfid.response.sample import mass_fractions
from xrfid.response.series import Prediction, SeriesKey
from xrfid.spectrum import FWHM_PER_SIGMA, Resolution

pytestmark = pytest.mark.reference

BARE = {"path": {"atmosphere": "vacuum", "length_mm": 0},
        "detector": {"window": {"material": "Be", "thickness_um": 0}, "dead_layer_um": 0, "thickness_um": 1e6},
        }  # fmt: skip


def beam(energy_kev, photons):
    """Prediction for a beam of many lines, seen by a detector that records everything."""
    source = {"lines_kev": energy_kev.tolist(), "weights": photons.tolist()}
    return Prediction(Instrument.from_table({"source": source, **BARE}))


@cache
def rhodium_tube():
    """Energies and photons of a Rh tube at 40 kV: continuum and lines."""
    made = excitation(Instrument.from_table({"tube": {"anode": "Rh", "voltage_kv": 40}}))
    keep = made.photons > 1e-5 * made.photons.max()
    return made.energy_kev[keep], made.photons[keep] / made.photons[keep].sum()


@cache
def rhodium_prediction():
    return beam(*rhodium_tube())


def absorption(fractions, kev):
    return sum(w * xraydb.mu_elam(s, np.atleast_1d(kev) * 1e3) for s, w in fractions.items())


def vacancies(element, kev):
    """Vacancies of each sub-shell per photon absorbed, at energies (n,), after Coster-Kronig transfer."""
    edges, left, made = xraydb.xray_edges(element), np.ones_like(kev), {}
    for shell in ("K", "L1", "L2", "L3"):
        if shell in edges:
            above, jump = kev * 1e3 > edges[shell].energy, edges[shell].jump_ratio
            made[shell] = np.where(above, left * (1.0 - 1.0 / jump), 0.0)
            left = np.where(above, left / jump, left)
    for origin, to in (("L1", "L2"), ("L1", "L3"), ("L2", "L3")):
        if to in made:
            made[to] = made[to] + made[origin] * (xraydb.ck_probability(element, origin, to, total=False) or 0.0)
    return made


def recomputed(fractions):
    """Photons of each series in all directions, 45 degrees in and out, thick sample, no enhancement."""
    kev, photons = rhodium_tube()
    sine = math.sin(math.radians(45.0))
    inward, out = absorption(fractions, kev) / sine, {}
    for element, weight in fractions.items():
        edges, tau = xraydb.xray_edges(element), xraydb.mu_elam(element, kev * 1e3, kind="photo")
        made = vacancies(element, kev)
        for name, line in xraydb.xray_lines(element).items():
            if line.initial_level in made and line.energy > 500.0:
                outward = float(absorption(fractions, line.energy * 1e-3)[0]) / sine
                total = weight * np.sum(photons * tau * made[line.initial_level] / (inward + outward))
                total *= edges[line.initial_level].fyield * line.intensity
                out[element, name[0]] = out.get((element, name[0]), 0.0) + float(total)
    return out


SAMPLES = {
    "stainless steel": {"Fe": 70, "Cr": 18, "Ni": 10, "Mo": 2}, "leaded brass": {"Cu": 61, "Zn": 36, "Pb": 3},
    "solder": {"Sn": 60, "Pb": 40}, "silver coin": {"Ag": 90, "Cu": 10},
    "gold alloy": {"Au": 75, "Ag": 12.5, "Cu": 12.5},
    "tool steel": {"Fe": 82, "W": 6, "Mo": 5, "Cr": 4, "V": 2, "Co": 1},
    "lead glaze": {"O": 45, "Si": 25, "Pb": 20, "Sn": 5, "Ba": 3, "Ca": 2},
    "rock": {"O": 47, "Si": 30, "Al": 7, "Ca": 5, "Fe": 5, "K": 3, "Ti": 1, "Zr": 1, "Sr": 1},
}  # fmt: skip


@pytest.mark.parametrize("sample", SAMPLES)
def test_areas_of_all_series_agree_with_a_plain_recomputation(sample):
    """In absolute terms: K within 10 %, L within 15 %, above 2 keV.

    Up to calcium the second set's K yields (Hubbell et al. 1994) lie up to 15 % below ours (Krause 1979):
    20 % there.
    """
    fractions = {s: w / sum(SAMPLES[sample].values()) for s, w in SAMPLES[sample].items()}
    prediction, weights = rhodium_prediction(), mass_fractions(fractions)
    made = prediction.line_intensities(weights, enhanced=False) * weights[prediction.line_z - 1] * 4.0 * math.pi
    area = np.bincount(prediction.line_series, made, minlength=len(prediction.keys))
    centre = np.bincount(prediction.line_series, made * prediction.line_energy_kev, minlength=len(prediction.keys))
    compared = 0
    for (element, series), expected in recomputed(fractions).items():
        key = SeriesKey(ATOMIC_NUMBER[element], series)
        if key not in prediction.keys:
            continue
        i = prediction.keys.index(key)
        light = series == "K" and key.z <= 20
        if light or centre[i] / area[i] > 2.0:
            assert area[i] == pytest.approx(expected, rel=0.2 if light else 0.15 if series == "L" else 0.1), str(key)
            compared += 1
    assert compared >= 3


# Intensity ratios alloy / pure metal, K-alpha, 45/45 degrees, thick, worked from Sherman 1955 with secondary
# fluorescence (Shiraiwa & Fujino 1966) and xraydb: at 20.216 keV, and for Kramers' continuum of 40 kV behind 125 um Be
SHERMAN = [
    ({"Fe": 0.72, "Cr": 0.185, "Ni": 0.095}, {"Fe": (0.4098, 0.5435), "Cr": (0.2567, 0.2833), "Ni": (0.0247, 0.0418)}),
    ({"Fe": 0.63, "Cr": 0.21, "Ni": 0.16}, {"Fe": (0.3455, 0.4701), "Cr": (0.2726, 0.3070), "Ni": (0.0443, 0.0735)}),
    ({"Fe": 0.5, "Ni": 0.5}, {"Fe": (0.5836, 0.6077), "Ni": (0.1905, 0.2826)}),
    ({"Cu": 0.7, "Zn": 0.3}, {"Cu": (0.6909, 0.7146), "Zn": (0.3224, 0.3201)}),
]


@cache
def exciting(kind):
    if kind == "mono":
        return beam(np.array([20.216]), np.ones(1))
    kev = np.linspace(1.0, 39.9, 240)
    return beam(kev, (40.0 / kev - 1.0) * layer_transmission("Be", 125.0, kev))


def k_alpha(prediction, composition, element, enhanced=True):
    own = np.flatnonzero(prediction.line_z == ATOMIC_NUMBER[element])
    rows = [i for i in own if prediction.line_names[i] == "Ka1"]
    made = prediction.line_intensities(mass_fractions(composition), enhanced=enhanced, rows=np.array(rows))
    return float(made[0]) * composition[element]


@pytest.mark.parametrize(("column", "kind"), [(0, "mono"), (1, "Kramers 40 kV")])
@pytest.mark.parametrize(("alloy", "ratios"), SHERMAN)
def test_shermans_equation_within_3_per_cent(alloy, ratios, column, kind):
    """Chromium within 4 %: most of its gain comes from iron's lines just above its edge, where the cross sections
    of the two data sets differ by 3 %.
    """
    prediction = exciting(kind)
    for element, expected in ratios.items():
        ratio = k_alpha(prediction, alloy, element) / k_alpha(prediction, {element: 1.0}, element)
        assert ratio == pytest.approx(expected[column], rel=0.04 if element == "Cr" else 0.01)


def test_enhancement_of_chromium_in_steel():
    """Worked with the same equations: +76 % (20.216 keV) and +33 % (continuum) in Fe 72 Cr 18.5 Ni 9.5."""
    alloy = SHERMAN[0][0]
    for kind, gain in (("mono", 0.76), ("Kramers 40 kV", 0.33)):
        p = exciting(kind)
        assert k_alpha(p, alloy, "Cr") / k_alpha(p, alloy, "Cr", False) - 1.0 == pytest.approx(gain, rel=0.09)
        assert k_alpha(p, alloy, "Ni") == k_alpha(p, alloy, "Ni", False)  # nothing above nickel's edge


# FWHM of a silicon detector, eV, by electronic noise (rows) and line: FWHM^2 = N^2 + 2.355^2 F eps E,
# F = 0.115, eps = 3.65 eV, worked by hand
WIDTHS = {30: (66, 79, 97, 121, 140, 204, 229), 50: (77, 89, 105, 127, 146, 208, 233),
          80: (99, 109, 122, 142, 159, 217, 241), 120: (134, 141, 152, 168, 182, 235, 257)}  # fmt: skip


@pytest.mark.parametrize("noise", WIDTHS)
def test_widths_of_silicon_detectors(noise):
    found = 1e3 * Resolution(float(noise)).fwhm_kev([1.487, 2.308, 3.692, 5.899, 8.048, 17.48, 22.16])
    assert found == pytest.approx(np.array(WIDTHS[noise], float), abs=0.8)


@pytest.mark.parametrize(("material", "limit"), [("Si", 117.0), ("Ge", 101.0), ("CdTe", 120.0)])
def test_fano_limit(material, limit):
    """No detector is better at Mn K-alpha: 2.355 sqrt(F eps E) with the usual F and eps (from memory), by hand."""
    found = Resolution.from_mn_ka(400.0, material)
    assert FWHM_PER_SIGMA * math.sqrt(found.fano * found.pair_energy_ev * 5898.8) == pytest.approx(limit, rel=0.04)


# Escape area, per cent of escape + parent (Reed & Ware 1972), front face, silicon K yield 0.0504: worked by hand
ESCAPE = {2.014: 1.63, 2.308: 1.51, 2.622: 1.36, 2.957: 1.20, 3.313: 1.04, 3.691: 0.91, 4.509: 0.66, 5.412: 0.46,
          5.895: 0.38, 6.399: 0.32, 7.472: 0.22, 8.041: 0.18, 8.631: 0.15, 10.53: 0.09, 11.91: 0.06,
          17.44: 0.02}  # fmt: skip


def test_escape_fractions_of_silicon():
    from xrfid.response.detector import escape_fraction, escape_lines

    kev = np.array(list(ESCAPE))
    total = sum(escape_fraction("Si", line, kev) for line in escape_lines("Si"))
    assert 100 * total / (1 + total) == pytest.approx(np.array(list(ESCAPE.values())), rel=0.03, abs=0.006)


# The same for the K-alpha escape of germanium, worked by hand
def test_escape_fractions_of_germanium():
    from xrfid.response.detector import escape_fraction, escape_lines

    kev = np.array([11.2, 11.91, 15.75, 17.44, 22.1, 32.1, 59.5])
    percent = np.array([12.6, 12.0, 9.0, 7.8, 5.3, 2.4, 0.5])
    alpha = escape_fraction("Ge", escape_lines("Ge")[0], kev)
    assert 100 * alpha / (1 + alpha) == pytest.approx(percent, rel=0.08, abs=0.1)
