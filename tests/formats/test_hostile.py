"""Damaged files of every format: they are read, or refused in one line; nothing else happens."""

from __future__ import annotations

import io
import time
from functools import cache

import h5py
import numpy as np
import pytest
from hypothesis import example, given, settings
from hypothesis import strategies as st
from made import COUNTS, ENERGY, columns, fixed, lines, spectrum

from xrfid.errors import InputError
from xrfid.formats import read_bytes, write_spectrum
from xrfid.spectrum import Spectrum


@cache
def valid(kind: str) -> bytes:
    """A whole file of a kind."""
    if kind == "hdf5":
        return _hdf5()
    if kind == "emsa":
        return _emsa()
    return {
        "n42": _n42, "column": lambda: lines("Live time: 30", *COUNTS),
        "table": lambda: lines("keV;N", *columns(fixed(ENERGY, 2, ","), COUNTS, by=";")),
        "sections": lambda: lines("<<CALIBRATION>>", "81 6.36", "90 7.08", "<<DATA>>", *COUNTS, "<<END>>", "a=b"),
    }[kind]().encode()  # fmt: skip


def _hdf5() -> bytes:
    memory = io.BytesIO()
    with h5py.File(memory, "w") as file:
        file.attrs["default"] = "entry"
        data = file.create_group("entry/data")
        file["entry"].attrs.update({"NX_class": "NXentry", "default": "data"})
        data.attrs.update({"NX_class": "NXdata", "signal": "counts", "axes": ["x", "energy"]})
        stack = np.stack([COUNTS, COUNTS, COUNTS])
        data.create_dataset("counts", data=stack, chunks=(1, 64), compression="gzip", fletcher32=True)
        data.create_dataset("energy", data=ENERGY).attrs["units"] = "keV"
        file["entry/live_time"], file["entry/title"] = np.ones(3), "bench coupon"
    return memory.getvalue()


def _emsa() -> bytes:
    import tempfile
    from pathlib import Path

    with tempfile.TemporaryDirectory() as folder:
        write_spectrum(spectrum(), Path(folder) / "a.msa")
        return (Path(folder) / "a.msa").read_bytes()


def _n42() -> str:
    return (
        '<?xml version="1.0"?><RadInstrumentData><EnergyCalibration id="c"><CoefficientValues>-0.12 0.08 0'
        '</CoefficientValues></EnergyCalibration><RadMeasurement><Spectrum id="s" energyCalibrationReference="c">'
        '<LiveTimeDuration>PT30.5S</LiveTimeDuration><ChannelData compressionCode="CountedZeroes">0 8 '
        f"{' '.join(str(max(c, 1)) for c in COUNTS[8:])}</ChannelData></Spectrum></RadMeasurement></RadInstrumentData>"
    )


STRANGE = ["nan", "inf", "-inf", "1e308", "-1e308", "1e-320", "9" * 400, "1_0", "0x10", "٣", "--4", "1e", "."]
TEXTS = ["emsa", "n42", "column", "table", "sections"]
KINDS = [*TEXTS, "hdf5"]


def read_or_refused(data: bytes) -> None:
    """Read; a refusal is one line with the file's name, a spectrum is one that can be worked with."""
    found: tuple[Spectrum, ...] = ()
    said = "bench"
    try:
        found = read_bytes("bench", data)
    except InputError as error:
        said = str(error)
    assert said.startswith("bench")
    assert "\n" not in said
    for one in found:
        assert 64 <= one.n_channels <= 65_536
        assert np.all(np.isfinite(one.counts) & (one.counts >= 0))
        if one.scale is not None:
            assert np.all(np.isfinite(one.energy_kev))


@pytest.mark.parametrize("kind", KINDS)
def test_whole_files_are_read(kind):
    (found,) = read_bytes("bench", valid(kind))
    assert found.n_channels == 256


@pytest.mark.parametrize("kind", TEXTS)
@settings(max_examples=60, deadline=None)
@given(places=st.lists(st.tuples(st.floats(0, 1, exclude_max=True), st.integers(0, 7)), min_size=1, max_size=8))
def test_flipped_bits(kind, places):
    data = bytearray(valid(kind))
    for share, bit in places:
        data[int(share * len(data))] ^= 1 << bit
    read_or_refused(bytes(data))


@settings(max_examples=60, deadline=None)
@given(places=st.lists(st.tuples(st.floats(0, 1, exclude_max=True), st.integers(0, 7)), min_size=1, max_size=8))
def test_flipped_bits_in_hdf5_counts(places):
    """Not in its tables of contents: there the HDF5 library itself can crash or hang before we hear of it."""
    data = bytearray(valid("hdf5"))
    with h5py.File(io.BytesIO(bytes(data))) as file:
        counts = file["entry/data/counts"].id
        chunks = [counts.get_chunk_info(i) for i in range(counts.get_num_chunks())]
        spans = [(chunk.byte_offset, chunk.size) for chunk in chunks]
        spans.append((file["entry/data/energy"].id.get_offset(), 8 * 256))
    inside = [offset + i for offset, size in spans for i in range(size)]
    for share, bit in places:
        data[inside[int(share * len(inside))]] ^= 1 << bit
    read_or_refused(bytes(data))


@pytest.mark.parametrize("kind", KINDS)
def test_cut_short_anywhere(kind):
    data = valid(kind)
    for size in np.linspace(0, len(data), 60, dtype=int):
        read_or_refused(data[:size])


@pytest.mark.parametrize("kind", TEXTS)
@settings(max_examples=40, deadline=None)
@given(share=st.floats(0, 1), junk=st.binary(min_size=1, max_size=40))
@example(share=0.5, junk=b"1e308")
@example(share=0.5, junk=b"\n-inf 1e400 nan\n")
def test_junk_put_in(kind, share, junk):
    data = valid(kind)
    at = int(share * len(data))
    read_or_refused(data[:at] + junk + data[at:])


@pytest.mark.parametrize("kind", TEXTS)
@settings(max_examples=40, deadline=None)
@given(number=st.sampled_from(STRANGE), which=st.integers(0, 10**6))
def test_strange_numbers(kind, number, which):
    between = " " if kind == "n42" else "\n"
    words = valid(kind).decode().split(between)
    words[which % len(words)] = number
    read_or_refused(between.join(words).encode())


@settings(max_examples=150, deadline=None)
@given(st.binary(max_size=2000))
def test_any_bytes(data):
    read_or_refused(data)


@settings(max_examples=150, deadline=None)
@given(st.lists(st.text(st.sampled_from('0123456789.,;\t -+eE#<>[]$:=nN"'), max_size=30), max_size=120).map("\n".join))
def test_any_text(text):
    read_or_refused(text.encode())


LONG = {
    "deep elements": b"<RadInstrumentData>" + b"<a>" * 20_000 + b"</a>" * 20_000 + b"</RadInstrumentData>",
    "many spectra without data": b"<N42>" + b"<Spectrum>" * 500 + b"</Spectrum>" * 500 + b"</N42>",
    "hashes": b"#" * 100_000,
    "marks": b"<<" * 50_000,
    "a long name": b"a" * 100_000 + b": 5\n" + b"5\n" * 100,
    "quotation marks": b'"' * 100_001 + b"\n" + b"1,2\n" * 100,
    "rules": b"-" * 100_000 + b"\n" + b"*" * 100_000,
    "blanks": b" " * 100_000 + b"x",
    "words": b"a b" * 50_000,
    "one long line of numbers": b"1 " * 300_000,
    "zeros": b"0 0\n" * 100,
    "huge": b"1e308 1e308\n" * 100,
}


@pytest.mark.parametrize("data", LONG.values(), ids=LONG)
def test_text_made_to_take_long(data):
    started = time.process_time()
    read_or_refused(data)
    assert time.process_time() - started < 5.0
