"""What is written comes back: counts to the last digit, scale, times and title."""

from __future__ import annotations

import tempfile
from pathlib import Path

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from hypothesis.extra.numpy import arrays
from made import COUNTS, OTHER, SCALE, spectrum
from shell import SAMPLES, refused, xrfid

from xrfid.errors import OutputError
from xrfid.formats import read_spectra, read_spectrum, write_spectrum
from xrfid.spectrum import EnergyScale, Spectrum

whole = arrays(np.int64, st.integers(64, 300), elements=st.integers(0, 10**9)).map(lambda a: a.astype(float))
broken = arrays(np.float64, st.integers(64, 200), elements=st.floats(0.0, 1e12, allow_subnormal=False))
times = st.none() | st.floats(1e-3, 1e6)
scales = st.builds(EnergyScale, st.floats(-2.0, 2.0), st.floats(1e-3, 0.2))
titles = st.text(st.characters(min_codepoint=32, max_codepoint=126), max_size=40).map(lambda t: " ".join(t.split()))
names = st.text(st.sampled_from('abKLM ,;"-()'), min_size=1, max_size=12).map(lambda t: f"x {t} y")

spectra = st.builds(
    Spectrum, counts=whole | broken, scale=st.none() | scales, live_time_s=times, real_time_s=times, title=titles
)


def through(written: list[Spectrum], ending: str) -> tuple[Spectrum, ...]:
    with tempfile.TemporaryDirectory() as folder:
        path = Path(folder) / f"a{ending}"
        write_spectrum(written, path)
        return read_spectra(path)


def check(found: Spectrum, written: Spectrum) -> None:
    assert np.array_equal(found.counts, written.counts)
    assert (found.live_time_s, found.real_time_s) == (written.live_time_s, written.real_time_s)
    assert (found.scale is None) == (written.scale is None)
    if written.scale is not None:
        assert found.energy_kev == pytest.approx(written.energy_kev, rel=1e-9, abs=1e-9)


@settings(max_examples=60, deadline=None)
@given(written=spectra, ending=st.sampled_from([".msa", ".emsa", ".csv", ".h5", ".hdf5", ".nxs"]))
def test_one_spectrum(written, ending):
    (found,) = through([written], ending)
    check(found, written)
    if ending != ".csv":
        assert found.scale == written.scale
        assert found.title == written.title


@settings(max_examples=30, deadline=None)
@given(st.lists(spectra, min_size=2, max_size=4))
def test_several_in_hdf5(written):
    for found, one in zip(through(written, ".h5"), written, strict=True):
        check(found, one)
        assert found.scale == one.scale


@settings(max_examples=40, deadline=None)
@given(st.lists(names, min_size=2, max_size=4, unique_by=lambda n: " ".join(n.split())), st.none() | scales, times)
def test_several_in_a_table(called, scale, live):
    written = [
        spectrum(counts=np.roll(COUNTS, i), scale=scale, live_time_s=live, title=n) for i, n in enumerate(called)
    ]
    for found, one in zip(through(written, ".csv"), written, strict=True):
        check(found, one)
        assert found.dataset == " ".join(one.title.split())


@settings(max_examples=30, deadline=None)
@given(
    gain=st.floats(0.005, 0.1),
    offset=st.floats(-1, 1),
    bend=st.floats(-2e-6, 2e-6),
    ending=st.sampled_from([".msa", ".csv"]),
)
def test_bent_scales(gain, offset, bend, ending):
    bent = EnergyScale(offset, gain, bend)
    (found,) = through([spectrum(scale=bent)], ending)
    assert found.scale is not None
    assert found.energy_kev == pytest.approx(spectrum(scale=bent).energy_kev, abs=0.02 * gain)


def test_a_table_as_a_person_sees_it(tmp_path):
    write_spectrum([spectrum(title="left"), spectrum(counts=OTHER, title="")], tmp_path / "a.csv")
    rows = (tmp_path / "a.csv").read_text().splitlines()
    assert rows[:3] == ["# Live time (s): 30.5", "# Real time (s): 33.25", "energy (keV),left,spectrum 2"]
    assert rows[3] == f"-0.12,{COUNTS[0]},{OTHER[0]}"
    write_spectrum(spectrum(scale=None), tmp_path / "b.csv")
    rows = (tmp_path / "b.csv").read_text().splitlines()
    assert rows[0] == "# Title: bench coupon"
    assert rows[3:5] == ["channel,counts", f"0,{COUNTS[0]}"]


@pytest.mark.parametrize(
    ("changed", "says"),
    [
        ({"scale": None}, "different length or energy scale do not fit one table; use .h5"),
        ({"counts": COUNTS[:100]}, "different length or energy scale"),
        ({"live_time_s": 4.0}, "different measuring times do not fit one table; use .h5"),
    ],
)
def test_what_no_table_holds(tmp_path, changed, says):
    with pytest.raises(OutputError, match=says):
        write_spectrum([spectrum(), spectrum(**changed)], tmp_path / "a.csv")
    assert not list(tmp_path.iterdir())


# ------------------------------------------------------------------ xrfid convert
@pytest.mark.parametrize("ending", [".msa", ".csv", ".h5"])
@pytest.mark.parametrize("source", ["nickel_alloy.n42", "coupon.msa", "brass_fitting.csv", "glazed_tile.h5"])
def test_convert(tmp_path, source, ending):
    target = tmp_path / f"a{ending}"
    said = xrfid("convert", SAMPLES / source, target)
    assert (said.status, said.out, said.err) == (0, "", "")
    check(read_spectrum(target), read_spectrum(SAMPLES / source))


def test_convert_one_point_of_a_run(tmp_path):
    said = xrfid("convert", SAMPLES / "panel_run.h5", tmp_path / "a.msa", "--dataset", "/entry/data/counts[3,7]")
    assert said.status == 0
    point = read_spectrum(SAMPLES / "panel_run.h5", dataset="/entry/data/counts[3,7]")
    assert np.array_equal(read_spectrum(tmp_path / "a.msa").counts, point.counts)


def test_convert_says_what_was_assumed(tmp_path):
    said = xrfid("convert", SAMPLES / "panel_run.h5", tmp_path / "a.msa")
    assert said.status == 0
    assert "is a stack of 2400 spectra: their sum is taken" in said.err


def test_convert_with_a_layout(tmp_path):
    odd = tmp_path / "odd.dat"
    odd.write_text("".join(f"{i}|{c}|#\n" for i, c in enumerate(COUNTS)))
    (tmp_path / "odd.toml").write_text('separator = "|"\ncounts_column = 2\ngain_kev = 0.08\noffset_kev = -0.12\n')
    said = xrfid("convert", odd, tmp_path / "a.msa", "--layout", tmp_path / "odd.toml")
    assert said.status == 0, said.err
    found = read_spectrum(tmp_path / "a.msa")
    assert np.array_equal(found.counts, COUNTS)
    assert found.scale == SCALE


def test_convert_refuses(tmp_path):
    source = tmp_path / "a.csv"
    write_spectrum([spectrum(), spectrum(counts=OTHER, title="other")], source)
    before = source.read_bytes()
    assert "holds one spectrum, not 2" in refused(xrfid("convert", source, tmp_path / "b.msa"))
    assert "no format has the ending" in refused(xrfid("convert", source, tmp_path / "b.doc"))
    assert "is the input as well as the output" in refused(xrfid("convert", source, source, "--overwrite"))
    there = tmp_path / "there.msa"
    there.write_text("mine")
    line = refused(xrfid("convert", source, there, "--dataset", "other"))
    assert "there.msa: exists; give --overwrite to replace it" in line
    assert there.read_text() == "mine"
    assert xrfid("convert", source, there, "--dataset", "other", "--overwrite").status == 0
    assert np.array_equal(read_spectrum(there).counts, OTHER)
    assert source.read_bytes() == before
    assert sorted(p.name for p in tmp_path.iterdir()) == ["a.csv", "there.msa"]
