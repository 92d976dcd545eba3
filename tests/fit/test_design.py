"""Columns: unit areas, shares and escapes."""

import numpy as np
import pytest

from xrfid.fit.design import SeriesColumns, scatter_columns, scattered_continuum, smooth_functions
from xrfid.fit.grouping import Grouping
from xrfid.instrument import Instrument
from xrfid.response.detector import LineShape, escape_fraction, escape_lines
from xrfid.response.sample import mass_fractions
from xrfid.response.series import Prediction, SeriesKey
from xrfid.spectrum import EnergyScale

INSTRUMENT = Instrument.from_table({"tube": {"anode": "Rh", "voltage_kv": 40}, "detector": {"fwhm_mn_ka_ev": 140}})
SHAPE = LineShape.of(INSTRUMENT.detector)
GROUPING = Grouping.of(EnergyScale(0.0, 0.02), SHAPE.resolution, 40, 2048)
LIGHT = mass_fractions({"C": 1, "O": 1})


@pytest.fixture(scope="module")
def columns():
    return SeriesColumns(Prediction(INSTRUMENT), LIGHT, SHAPE, GROUPING)


def key(name):
    from xrfid.atoms.elements import ATOMIC_NUMBER

    element, series = name.split()
    return SeriesKey(ATOMIC_NUMBER[element], series)


def test_a_column_is_one_count_and_its_escapes(columns):
    """What the range cuts off, tail and shelf below 0.8 keV, is less than two per cent."""
    for name in ("Ti K", "Fe K", "Cu K", "Zr K", "Pb L"):
        lines = columns.line_list(key(name))
        escaped = sum(share * float(np.sum([escape_fraction("Si", x, np.array([e]))[0] for x in escape_lines("Si")]))
                      for _, e, share in lines)  # fmt: skip
        total = columns.unit[columns.index(key(name))].sum()
        assert total == pytest.approx(1.0 + escaped, abs=0.004)
        assert sum(share for _, _, share in lines) == pytest.approx(1.0)


def test_the_columns_mean_energy_is_that_of_its_lines(columns):
    """Tails and shelf pull it down a little."""
    column = columns.unit[columns.index(key("Zr K"))]
    lines = columns.line_list(key("Zr K"))
    expected = sum(e * share for _, e, share in lines)
    assert (column @ GROUPING.centres_kev) / column.sum() == pytest.approx(expected, rel=0.005)


def test_line_groups_add_up_to_the_series(columns):
    for name in ("Fe K", "Pb L", "Sn L", "Au M"):
        groups = columns.groups(key(name))
        assert groups[0].tolerance == 0
        assert sum(g.share for g in groups) == pytest.approx(1.0)
        whole = sum(g.share * g.column for g in groups)
        assert whole == pytest.approx(columns.unit[columns.index(key(name))], abs=1e-12)
        assert all(g.column.sum() == pytest.approx(1.0, abs=0.05) for g in groups)


def test_weighted_lines_are_the_sum_of_their_series(columns):
    lines, width, rows = columns.lines({key("Fe K"): 1000.0, key("Cu K"): 500.0})
    assert lines.weight.sum() == pytest.approx(1500.0)
    assert lines.weight.size == width.size == rows.size
    assert set(columns.prediction.line_z[rows]) == {26, 29}


def test_series_outside_the_channels_have_no_column():
    narrow = Grouping.of(EnergyScale(0.0, 0.02), SHAPE.resolution, 40, 400)  # up to 8 keV
    some = SeriesColumns(Prediction(INSTRUMENT), LIGHT, SHAPE, narrow)
    assert key("Fe K") in some
    assert key("Zr K") not in some


def test_scattered_lines_have_unit_columns_at_their_energies():
    prediction = Prediction(INSTRUMENT)
    found = {(c.kind, c.of, i): c for i, c in enumerate(scatter_columns(prediction, LIGHT, SHAPE, GROUPING))}
    kinds = {(kind, of) for kind, of, _ in found}
    assert kinds >= {("coherent scatter", "Rh K"), ("coherent scatter", "Rh L"), ("incoherent scatter", "Rh K")}
    for (kind, of, _), c in found.items():
        assert c.column.sum() == pytest.approx(1.0, abs=0.03), (kind, of)
        if of == "Rh K":
            assert c.energy_kev == pytest.approx(20.216 if kind == "coherent scatter" else 19.447, abs=0.005)
        if c.groups:
            assert sum(share for _, share, _ in c.groups) == pytest.approx(1.0)
    assert sum(c.predicted for c in found.values() if "incoherent" in c.kind) > 0


def test_no_scattered_line_is_lost_between_the_columns():
    """Below 5 keV, where the Compton shift is a small part of the width, one column stands for both kinds."""
    prediction = Prediction(INSTRUMENT)
    scattered = prediction.scattered(LIGHT)
    lines = np.arange(prediction.source.n_continuum, prediction.source.energy_kev.size)
    inside = scattered.incoherent_kev[lines] > GROUPING.edges_kev[0]
    expected = float((scattered.coherent[lines] + scattered.incoherent[lines])[inside].sum())
    found = sum(c.predicted for c in scatter_columns(prediction, LIGHT, SHAPE, GROUPING))
    assert found == pytest.approx(expected, rel=1e-3)


def test_a_source_without_continuum_scatters_none():
    source = Prediction(Instrument.from_table({"source": {"lines_kev": [22.163]}}))
    assert not scattered_continuum(source, LIGHT, SHAPE, GROUPING).any()
    made = scatter_columns(source, LIGHT, SHAPE, GROUPING)
    assert {c.of for c in made} == {"source"}


def test_the_scattered_continuum_ends_with_the_voltage():
    made = scattered_continuum(Prediction(INSTRUMENT), LIGHT, SHAPE, GROUPING)
    assert made[GROUPING.centres_kev > 40.4].sum() < 1e-4 * made.sum()
    assert made.min() >= 0.0


def test_smooth_functions_add_up_to_one():
    made = smooth_functions(GROUPING, SHAPE, 8.0, 0.8)
    assert made.sum(axis=0) == pytest.approx(np.ones(GROUPING.n))
    assert made.min() >= 0.0
    assert 15 < made.shape[0] < 60
