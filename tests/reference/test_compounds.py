"""Compounds that automatic identification is published to have got wrong, each under three excitations.

Newbury, Microsc. Microanal. 11 (2005) 545 lists them for electron excitation: major constituents were
misnamed, most often where an element's higher-energy lines are not excited.
"""

import pytest

import xrfid
from xrfid.fit.simulate import Recipe, simulate
from xrfid.instrument import Instrument

pytestmark = pytest.mark.reference

COMPOUNDS = {
    "ZnS": {"Zn": 67.1, "S": 32.9}, "KBr": {"K": 32.9, "Br": 67.1}, "FeS2": {"Fe": 46.6, "S": 53.4},
    "Ta-Nb": {"Ta": 66, "Nb": 34}, "Au-Cu": {"Au": 60, "Cu": 40}, "Bi2Te3": {"Bi": 52.2, "Te": 47.8},
    "U-Rh": {"U": 70, "Rh": 30}, "Pt-Cr": {"Pt": 79, "Cr": 21}, "GaAs": {"Ga": 48.2, "As": 51.8},
    "GaP": {"Ga": 69.2, "P": 30.8},
}  # fmt: skip
EXCITATIONS = {"W 15 kV": ("W", 15), "Ag 40 kV": ("Ag", 40), "Mo 30 kV": ("Mo", 30)}


@pytest.mark.parametrize("excitation", EXCITATIONS)
@pytest.mark.parametrize("compound", COMPOUNDS)
def test_the_major_constituents_are_named_and_nothing_else(compound, excitation):
    anode, voltage = EXCITATIONS[excitation]
    table = {"tube": {"anode": anode, "voltage_kv": voltage}, "detector": {"fwhm_mn_ka_ev": 140}}
    instrument = Instrument.from_table(table)
    made = simulate(Recipe(sample=COMPOUNDS[compound], total_counts=2e5, gain_kev=0.02, seed=7), instrument)
    found = xrfid.identify(made.spectrum, instrument)
    assert set(found.identified) == set(COMPOUNDS[compound])
