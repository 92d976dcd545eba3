import numpy as np
import pytest

from xrfid.prepare.peaks import THRESHOLD, find_peaks, width_model


def _spectrum(n, peaks, level, seed=3):
    x = np.arange(n)
    mean = np.full(n, float(level))
    for centre, area, fwhm in peaks:
        sigma = fwhm / 2.3548
        mean += area * np.exp(-0.5 * ((x - centre) / sigma) ** 2) / (sigma * np.sqrt(2 * np.pi))
    return np.random.default_rng(seed).poisson(mean).astype(float)


@pytest.mark.parametrize("fwhm", [2.5, 7.0, 25.0, 90.0])
def test_position_area_and_width_of_a_peak_of_unknown_width(fwhm):
    n = int(60 * fwhm)
    counts = _spectrum(n, [(0.4 * n + 0.3, 50_000, fwhm)], 20)
    peak = find_peaks(counts)[0][0]
    assert peak.channel == pytest.approx(0.4 * n + 0.3, abs=max(6 * peak.channel_sigma, 0.02))
    assert peak.area == pytest.approx(50_000, rel=0.03)
    # a channel's own width adds 1/12 channel squared to the variance; here the mean is sampled, not integrated
    assert peak.fwhm == pytest.approx(fwhm, rel=0.05)


def test_two_peaks_of_very_different_height_are_both_found():
    counts = _spectrum(2000, [(600, 1e6, 8.0), (640, 5e3, 8.0), (1500, 2e3, 11.0)], 50)
    found = [p.channel for p in find_peaks(counts)[0]]
    for centre in (600, 640, 1500):
        assert min(abs(c - centre) for c in found) < 1.0


def test_flat_spectra_have_no_peaks():
    # Gaussian tails at 4.5 sigma: 1e-3 a spectrum of 2048 channels; four allowed in 40 spectra of several widths
    false = sum(len(find_peaks(_spectrum(2048, [], level, seed))[0]) for seed in range(20) for level in (0.5, 300))
    assert false <= 4


def test_few_counts_are_not_taken_for_gaussian():
    # a lone channel of 3 counts on an empty spectrum: Poisson, no peak
    counts = np.zeros(1000)
    counts[400] = 3
    assert find_peaks(counts)[0] == []


def test_widths_grow_as_the_root_of_a_line():
    counts = _spectrum(4000, [(c, 8e4, np.sqrt(40 + 0.05 * c)) for c in (300, 900, 1700, 2600, 3500)], 30)
    peaks, widths = find_peaks(counts)
    for c in (500.0, 2000.0, 3500.0):
        assert float(widths.fwhm(c)) == pytest.approx(np.sqrt(40 + 0.05 * c), rel=0.06)
    assert all(p.significance > THRESHOLD for p in peaks)


def test_no_peaks_give_a_usable_width():
    assert float(width_model([]).fwhm(10.0)) > 0
