import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from xrfid.fit.grouping import CHANNELS_PER_FWHM, Grouping
from xrfid.spectrum import EnergyScale, Resolution

SI = Resolution.from_mn_ka(140.0)


@settings(max_examples=40, deadline=None)
@given(gain=st.floats(0.002, 0.05), first=st.integers(0, 60), n=st.integers(64, 1500), seed=st.integers(0, 999))
def test_groups_tile_the_channels_and_keep_their_counts(gain, first, n, seed):
    g = Grouping.of(EnergyScale(-0.05, gain), SI, first, first + n)
    assert (g.starts[0], g.starts[-1]) == (first, first + n)
    assert np.all(np.diff(g.starts) >= 1)
    counts = np.random.default_rng(seed).poisson(5.0, first + n + 7).astype(float)
    assert g.sum(counts).sum() == pytest.approx(counts[first : first + n].sum())
    assert g.sum(counts).size == g.n == g.centres_kev.size


@settings(max_examples=40, deadline=None)
@given(gain=st.floats(0.004, 0.04), seed=st.integers(0, 999))
def test_spreading_keeps_every_groups_sum(gain, seed):
    g = Grouping.of(EnergyScale(0.0, gain), SI, 20, 900)
    rng = np.random.default_rng(seed)
    smooth = np.exp(np.interp(np.arange(g.n), np.linspace(0, g.n, 9), rng.normal(3, 1, 9))) * np.diff(g.starts)
    spread = g.spread(smooth, 1000)
    assert g.sum(spread) == pytest.approx(smooth)
    assert not spread[:20].any()
    assert not spread[900:].any()


def test_a_straight_line_is_spread_exactly():
    g = Grouping.of(EnergyScale(0.0, 0.005), SI, 0, 2000)
    line = 3.0 + 0.01 * np.arange(2000)
    assert g.spread(g.sum(line), 2000) == pytest.approx(line, rel=1e-9)


def test_stacks_are_summed_along_their_last_axis():
    g = Grouping.of(EnergyScale(0.0, 0.01), SI, 10, 200)
    stack = np.arange(3 * 4 * 256, dtype=float).reshape(3, 4, 256)
    assert g.sum(stack)[2, 1] == pytest.approx(g.sum(stack[2, 1]))


def test_coarse_channels_are_left_alone_and_fine_ones_grouped():
    coarse = Grouping.of(EnergyScale(0.0, 0.04), SI, 0, 500)
    assert coarse.n == 500
    fine = Grouping.of(EnergyScale(0.0, 0.0025), SI, 400, 8000)
    per_fwhm = SI.fwhm_kev(fine.centres_kev) / np.diff(fine.edges_kev)
    assert per_fwhm[:-1].min() > 0.99 * CHANNELS_PER_FWHM
    assert np.median(per_fwhm) < 1.4 * CHANNELS_PER_FWHM
