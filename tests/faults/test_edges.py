"""Spectra at the edges of what is sensible: a result with a caution, or one clear line; never a warning."""

from __future__ import annotations

import json
import os
import subprocess
import sys
import time

import numpy as np
import pytest
from shell import ROOT, SAMPLES, refused, xrfid

from xrfid import Instrument, Spectrum
from xrfid.errors import Untrustworthy
from xrfid.formats import read_spectrum
from xrfid.identify.pipeline import identify
from xrfid.spectrum import EnergyScale

BENCH = Instrument.load(SAMPLES / "workshop.toml")
COUPON = read_spectrum(SAMPLES / "coupon.msa")
SCALE = COUPON.scale


def thinned(share: float) -> np.ndarray:
    return np.random.default_rng(1).binomial(COUPON.counts.astype(int), share).astype(float)


def named(counts: np.ndarray, scale: EnergyScale | None = SCALE, **keywords) -> tuple[str, ...]:
    return identify(Spectrum(counts, scale, **keywords), BENCH).identified


def test_two_hundred_counts():
    counts = thinned(200 / COUPON.total_counts)
    result = identify(Spectrum(counts, SCALE), BENCH)
    assert set(result.identified) <= {"Fe", "Cr", "Ni"}
    assert "Fe" in result.identified
    assert any("weak elements cannot show" in c for c in result.cautions)


def test_a_thousand_million_counts():
    mean = 1000.0 * identify(COUPON, BENCH).curves.model
    counts = np.random.default_rng(2).poisson(mean).astype(float)
    assert set(named(counts)) == {"Fe", "Cr", "Ni", "Mo", "Mn", "Si"}


def test_nothing_but_zeros():
    result = identify(Spectrum(np.zeros(1024), SCALE), BENCH)
    assert result.identified == ()
    assert any("Only 0 counts" in c for c in result.cautions)


def test_zeros_without_a_scale(tmp_path):
    path = tmp_path / "zeros.txt"
    path.write_text("0\n" * 1024)
    line = refused(xrfid("identify", path), status=4)
    assert "zeros.txt" in line


def test_counts_without_any_line(tmp_path):
    """A smooth spectrum has no scale of its own; nothing is invented."""
    path = tmp_path / "smooth.txt"
    path.write_text("\n".join(map(str, np.random.default_rng(4).poisson(50, 1024))))
    line = refused(xrfid("identify", path), status=4)
    assert "scale" in line


def test_a_smooth_continuum_holds_no_element():
    energy = COUPON.energy_kev
    mean = 60.0 * np.exp(-energy / 15.0) / (1.0 + np.exp(-(energy - 2.0) / 0.4))
    assert named(np.random.default_rng(5).poisson(mean).astype(float)) == ()


def test_one_single_peak():
    channel = np.arange(2048)
    peak = 3000 * np.exp(-0.5 * ((SCALE.energy_kev(channel) - 6.40) / 0.06) ** 2)
    named(np.random.default_rng(6).poisson(peak + 2).astype(float))


def test_a_spike_in_the_first_channel():
    counts = COUPON.counts.copy()
    counts[0] = 5e6
    assert named(counts) == named(COUPON.counts)


def test_overflow_in_the_last_channel():
    counts = COUPON.counts.copy()
    counts[-1] = 1e5
    assert set(named(counts)) == set(named(COUPON.counts))


def test_a_strong_peak_cut_at_65535():
    """Counters of 16 bits that stop: the strong element stays, and the misfit is pointed out."""
    result = identify(Spectrum(np.minimum(COUPON.counts, 65_535.0), SCALE), BENCH)
    assert {"Fe", "Cr", "Ni"} <= {f.element for f in result.findings}
    assert any("misfit" in c or "times the expected scatter" in c for c in result.cautions)


def test_dead_channels():
    counts = COUPON.counts.copy()
    counts[1400:1440] = 0.0
    assert {"Fe", "Cr", "Ni", "Mo"} <= set(named(counts))


def test_fractional_counts(tmp_path):
    path = tmp_path / "rates.txt"
    path.write_text("# energy (keV) counts\n" + "".join(
        f"{e:.4f} {c:.3f}\n" for e, c in zip(COUPON.energy_kev, COUPON.counts * 0.37, strict=True)))  # fmt: skip
    said = xrfid("identify", path, "--instrument", SAMPLES / "workshop.toml", "--json", "-")
    assert any("not whole numbers" in a for a in json.loads(said.out)["assumptions"])


def split(parts: int) -> Spectrum:
    """The coupon with every channel split into `parts`."""
    rng = np.random.default_rng(7)
    fine = rng.multinomial(COUPON.counts.astype(int), np.full(parts, 1 / parts)).ravel().astype(float)
    return Spectrum(
        fine, EnergyScale(SCALE.offset_kev - SCALE.gain_kev * (parts - 1) / 2 / parts, SCALE.gain_kev / parts)
    )


def test_sixteen_thousand_channels():
    assert {"Fe", "Cr", "Ni", "Mo", "Mn"} <= set(identify(split(8), BENCH).identified)


def test_sixty_five_thousand_channels():
    """0.6 eV a channel is finer than any such detector's electronics: said, not fitted."""
    with pytest.raises(Untrustworthy, match=r"0\.000628125 keV a channel .* is impossible"):
        identify(split(32), BENCH)


def test_sixty_four_channels():
    """0.32 keV a channel: lines cannot be told apart, and that is said."""
    coarse = COUPON.counts[:1024].reshape(64, 16).sum(axis=1)
    scale = EnergyScale(SCALE.offset_kev + 7.5 * SCALE.gain_kev, 16 * SCALE.gain_kev)
    with pytest.raises(Untrustworthy, match="is impossible"):
        identify(Spectrum(coarse, scale), BENCH)


def test_heavy_dead_time_is_pointed_out():
    result = identify(Spectrum(COUPON.counts, SCALE, live_time_s=60.0, real_time_s=150.0), BENCH)
    assert any("Dead time 60 %" in c for c in result.cautions)


def test_a_scale_that_no_spectrum_can_have():
    """A gain a thousand times too small is not believed: the scale is found, and that is said."""
    used = identify(Spectrum(COUPON.counts, EnergyScale(0.0, 2.0e-5)), BENCH).calibration
    assert used.origin == "found"
    assert used.scale.gain_kev == pytest.approx(SCALE.gain_kev, rel=1e-3)
    assert used.stated == EnergyScale(0.0, 2.0e-5)


def test_the_same_input_gives_the_same_result():
    first, second = identify(COUPON, BENCH), identify(COUPON, BENCH)
    assert [(f.element, f.series) for f in first.findings] == [(f.element, f.series) for f in second.findings]


@pytest.mark.parametrize("threads", ["1", "2"])
def test_the_number_of_threads_does_not_matter(threads):
    environment = {**os.environ, "PYTHONPATH": str(ROOT), "OMP_NUM_THREADS": threads, "OPENBLAS_NUM_THREADS": threads}
    command = [sys.executable, "-m", "xrfid", "identify", str(SAMPLES / "coupon.msa"), "--json", "-", "--instrument",
               str(SAMPLES / "workshop.toml")]  # fmt: skip
    said = subprocess.run(command, env=environment, capture_output=True, text=True, check=True)
    here = {f.element: f.series[0].area for f in identify(COUPON, BENCH).findings}
    there = {f["element"]: f["series"][0]["area"] for f in json.loads(said.stdout)["findings"]}
    assert there == pytest.approx(here, rel=1e-6)


def test_an_endless_line(tmp_path):
    """Twenty million characters without a line end are read or refused within seconds."""
    path = tmp_path / "long.txt"
    path.write_bytes(b"7 " * 10_000_000)
    start = time.monotonic()
    refused(xrfid("identify", path))
    assert time.monotonic() - start < 20


def test_a_title_of_control_characters(tmp_path):
    path = tmp_path / "odd.msa"
    body = (SAMPLES / "coupon.msa").read_bytes()
    path.write_bytes(body.replace(b"stainless steel coupon", b"\x1b[31mred\x07 coupon\x1b[0m"))
    said = xrfid("identify", path, "--instrument", SAMPLES / "workshop.toml")
    assert said.status == 0
    assert "\x1b" not in said.out
    assert "\x07" not in said.out
