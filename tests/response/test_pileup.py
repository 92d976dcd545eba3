import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from xrfid.response.pileup import PARTS, pair_spectrum, partial_overlaps, primary_spectrum
from xrfid.spectrum import EnergyScale


@settings(max_examples=25, deadline=None)
@given(seed=st.integers(0, 10**6), offset=st.floats(-0.3, 0.3))
def test_every_pair_is_counted_once_and_energy_adds(seed, offset):
    rng = np.random.default_rng(seed)
    counts = np.zeros(400)
    counts[60:150] = rng.poisson(20.0, 90)
    scale = EnergyScale(offset, 0.02)
    pairs = pair_spectrum(counts, scale)
    energy = scale.energy_kev(np.arange(400))
    assert pairs.sum() == pytest.approx(counts.sum() ** 2, rel=1e-6)
    assert (pairs @ energy) / pairs.sum() == pytest.approx(2.0 * (counts @ energy) / counts.sum(), rel=1e-6)


def test_a_bent_scale_puts_the_sum_where_it_belongs():
    scale = EnergyScale(0.05, 0.02, 2e-7)
    counts = np.zeros(1024)
    energy = scale.energy_kev(np.arange(1024))
    at = round(float(scale.channel(6.4)))
    counts[at] = 1e4
    assert energy[np.argmax(pair_spectrum(counts, scale))] == pytest.approx(2.0 * energy[at], abs=0.011)


def test_channels_below_zero_energy_make_no_pairs():
    counts = np.zeros(200)
    counts[3] = 1e6  # a noise peak at -0.44 keV
    assert not pair_spectrum(counts, EnergyScale(-0.5, 0.02)).any()


def test_what_would_lie_beyond_the_range_is_lost():
    counts = np.zeros(200)
    counts[150] = 100.0
    assert pair_spectrum(counts, EnergyScale(0.0, 0.02)).sum() < 1e-9


def test_the_primary_spectrum_lacks_the_pairs_and_is_never_negative():
    scale = EnergyScale(0.0, 0.02)
    counts = np.zeros(800)
    counts[320] = 1e5
    per_pair = 1e-8
    recorded = counts + per_pair * pair_spectrum(counts, scale)
    cleaned = primary_spectrum(recorded, scale, per_pair)
    assert cleaned == pytest.approx(counts, abs=1.0)
    assert primary_spectrum(counts, scale, 1.0).min() >= 0.0
    assert primary_spectrum(recorded, scale, 0.0) is recorded


def test_partial_overlaps_lie_between_the_line_and_its_sum():
    scale = EnergyScale(0.0, 0.02)
    counts = np.zeros(1024)
    counts[320] = 1e3  # 6.4 keV
    rows = partial_overlaps(counts, scale)
    energy = scale.energy_kev(np.arange(1024))
    assert rows.shape == (PARTS.size, 1024)
    for part, row in zip(PARTS, rows, strict=True):
        assert (row @ energy) / row.sum() == pytest.approx(6.4 * (1.0 + part), rel=0.02)
        assert row[(energy < 6.3) | (energy > 12.9)].sum() < 1e-6 * row.sum()
        # the smallest part's triangle is cut off where the second pulse would add nothing
        assert row.sum() == pytest.approx(1e6 if part > PARTS[0] else 8e6 / 9, rel=1e-6)


def test_partial_overlaps_know_the_offset():
    scale = EnergyScale(0.4, 0.02)
    counts = np.zeros(1024)
    counts[round(float(scale.channel(6.4)))] = 1e3
    row = partial_overlaps(counts, scale)[3]
    energy = scale.energy_kev(np.arange(1024))
    assert (row @ energy) / row.sum() == pytest.approx(6.4 * (1.0 + PARTS[3]), abs=0.05)
