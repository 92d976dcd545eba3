"""HDF5 and NeXus files in the layouts that beamlines and laboratories write."""

from __future__ import annotations

import os
import re
import subprocess
import sys
import tracemalloc
from collections.abc import Callable
from pathlib import Path

import h5py
import hdf5plugin
import numpy as np
import pytest
from made import COUNTS, ENERGY, OTHER, SCALE, N, spectrum

from xrfid.errors import InputError
from xrfid.formats import read_bytes, read_spectra, read_spectrum, write_spectrum
from xrfid.formats.hdf5 import _blocks
from xrfid.spectrum import EnergyScale

STACK = np.random.default_rng(5).poisson(COUNTS / 10.0, (3, 4, N)).astype(np.uint16)
File = h5py.File


def group(parent: h5py.Group, name: str, kind: str, **attributes: object) -> h5py.Group:
    made = parent.create_group(name)
    made.attrs.update({"NX_class": kind, **attributes})
    return made


def axis(parent: h5py.Group, values: object = ENERGY, units: str | None = "keV", name: str = "energy") -> None:
    parent[name] = np.asarray(values)
    if units is not None:
        parent[name].attrs["units"] = units


def nxfluo(file: File) -> None:
    """NXfluo of the NeXus definitions: the detector holds the data, NXdata links to them."""
    file.attrs["default"] = "entry"
    entry = group(file, "entry", "NXentry", default="data")
    entry["title"], entry["definition"] = "bench coupon", "NXfluo"
    detector = group(group(entry, "instrument", "NXinstrument"), "fluorescence", "NXdetector")
    detector["data"] = COUNTS
    axis(detector)
    data = group(entry, "data", "NXdata", signal="data", axes=["energy"])
    data["data"], data["energy"] = detector["data"], detector["energy"]


def without_defaults(file: File) -> None:
    entry = group(file, "scan", "NXentry")
    data = group(entry, "plot", "NXdata", signal="counts", axes="energy")
    data["counts"] = COUNTS
    axis(data)


def signal_on_the_dataset(file: File) -> None:
    """The older way: the dataset itself says ``signal = 1``."""
    data = group(group(file, "entry", "NXentry"), "data", "NXdata")
    data["mca"] = COUNTS
    data["mca"].attrs.update({"signal": 1, "axes": "energy"})
    axis(data)


def bare(file: File) -> None:
    file["mca"] = COUNTS
    axis(file)


def in_ev(file: File) -> None:
    bare(file)
    del file["energy"]
    axis(file, 1e3 * ENERGY, "eV")


def edges(file: File) -> None:
    bare(file)
    del file["energy"]
    axis(file, SCALE.edges_kev(N))


def calibrated(file: File) -> None:
    file["mca/counts"] = COUNTS
    file["mca/calibration"] = [SCALE.offset_kev, SCALE.gain_kev]


def calibrated_in_ev(file: File) -> None:
    file["mca/counts"] = COUNTS.astype(">f4")
    file["mca/calibration"] = [-120.0, 80.0, 0.0]
    file["mca/calibration"].attrs["units"] = "eV"


def packed(file: File) -> None:
    file.create_dataset("mca", data=COUNTS, chunks=(64,), **hdf5plugin.Bitshuffle())
    axis(file)


def linked(file: File) -> None:
    file["raw/spectrum"] = COUNTS
    axis(file["raw"])
    data = group(group(file, "entry", "NXentry", default="data"), "data", "NXdata", signal="c")
    data["c"], data["energy"] = h5py.SoftLink("/raw/spectrum"), h5py.SoftLink("/raw/energy")


@pytest.mark.parametrize(
    "layout",
    [nxfluo, without_defaults, signal_on_the_dataset, bare, in_ev, edges, calibrated, calibrated_in_ev, packed, linked],
)
def test_layout(tmp_path, layout):
    found = read_spectrum(make(tmp_path, layout))
    assert np.array_equal(found.counts, COUNTS)
    assert found.scale is not None
    assert found.energy_kev == pytest.approx(ENERGY, abs=1e-6)


def make(folder: Path, *steps: Callable[[File], object]) -> Path:
    path = folder / "run.h5"
    with h5py.File(path, "w") as file:
        for step in steps:
            step(file)
    return path


def stack(file: File, values: object = STACK, **keywords: object) -> None:
    file.attrs["default"] = "entry"
    entry = group(file, "entry", "NXentry", default="data")
    data = group(entry, "data", "NXdata", signal="counts", axes=["y", "x", "energy"])
    data.create_dataset("counts", data=values, **keywords)
    axis(data)


# ------------------------------------------------------------------ stacks
def test_a_stack_is_summed_and_that_is_said(tmp_path):
    found = read_spectrum(make(tmp_path, stack))
    assert np.array_equal(found.counts, STACK.sum(axis=(0, 1)))
    assert found.assumptions == (
        "/entry/data/counts is a stack of 12 spectra: their sum is taken (one point: /entry/data/counts[0,0])",
    )


@pytest.mark.parametrize("where", ["/entry/data/counts", "entry/data/counts", "counts", "/entry/data", "entry", ""])
@pytest.mark.parametrize("point", ["[2,3]", "[ 2, 3 ]"])
def test_one_point_by_index(tmp_path, where, point):
    found = read_spectrum(make(tmp_path, stack), dataset=where + point)
    assert np.array_equal(found.counts, STACK[2, 3])
    assert found.dataset == where + point
    assert found.assumptions == ()


@pytest.mark.parametrize("shape", [(1,), (5,), (2, 3, 2), (2, 1, 3, 2)])
def test_any_leading_dimensions(tmp_path, shape):
    values = np.random.default_rng(6).poisson(3.0, (*shape, N))
    found = read_spectrum(make(tmp_path, lambda file: file.create_dataset("mca", data=values)))
    assert np.array_equal(found.counts, values.reshape(-1, N).sum(axis=0))


@pytest.mark.parametrize("chunks", [None, (1, 1, N), (3, 4, N), (2, 2, 100), (1, 3, 7)])
def test_blocks_cover_every_point_once(chunks, monkeypatch):
    monkeypatch.setattr("xrfid.formats.hdf5._BLOCK_VALUES", 5 * N)
    seen = np.zeros(STACK.shape[:-1], dtype=int)
    for block in _blocks(STACK.shape, chunks):
        seen[block] += 1
        assert seen[block].size * N <= 5 * N
    assert np.all(seen == 1)


def test_summing_takes_little_memory(tmp_path):
    def large(file: File) -> None:
        file.create_dataset("mca", (64, 512, 1024), "u2", chunks=(8, 8, 1024), compression="gzip", fillvalue=1)
        file["mca"][0, 0] = 2

    path = make(tmp_path, large)
    read_spectrum(path, dataset="mca[0,0]")  # imports are not what is measured
    tracemalloc.start()
    found = read_spectrum(path)
    peak = tracemalloc.get_traced_memory()[1]
    tracemalloc.stop()
    assert np.all(found.counts == 64 * 512 + 1)
    assert peak < 64 * 2**20


def test_points_that_cannot_be_used_are_left_out_and_counted(tmp_path):
    values = STACK.astype(float)
    values[0, 1, 5], values[2, 2, 9] = np.nan, -1.0
    found = read_spectrum(make(tmp_path, lambda file: stack(file, values)))
    usable = np.ones((3, 4), dtype=bool)
    usable[0, 1] = usable[2, 2] = False
    assert np.array_equal(found.counts, STACK[usable].sum(axis=0))
    assert "2 of 12 points" in found.assumptions[1]


# ------------------------------------------------------------------ times, titles, names
def test_times(tmp_path):
    def step(file: File) -> None:
        file["entry/live_time"] = np.arange(12.0).reshape(3, 4)
        file["entry/real_time"] = 2.0

    path = make(tmp_path, stack, step)
    point = read_spectrum(path, dataset="counts[1,2]")
    assert (point.live_time_s, point.real_time_s) == (6.0, 2.0)
    both = read_spectrum(path)
    assert (both.live_time_s, both.real_time_s) == (66.0, 24.0)
    assert 'the one "real_time" of the file is taken as that of each point' in both.assumptions


def test_count_time_stands_in_for_live_time(tmp_path):
    found = read_spectrum(make(tmp_path, bare, lambda file: file.create_dataset("count_time", data=12.5)))
    assert found.live_time_s == 12.5
    assert found.assumptions == ('the time is the file\'s "count_time"',)


@pytest.mark.parametrize("value", [-1.0, np.nan, [1.0, 2.0, 3.0], b"long"])
def test_a_time_that_is_none(tmp_path, value):
    found = read_spectrum(make(tmp_path, bare, lambda file: file.create_dataset("live_time", data=value)))
    assert found.live_time_s is None


def test_title_and_facts(tmp_path):
    def step(file: File) -> None:
        file["title"], file["voltage_kv"], file["anode"] = "bench coupon", 40, "Rh"

    found = read_spectrum(make(tmp_path, bare, step))
    assert found.title == "bench coupon"
    assert dict(found.metadata) == {"voltage_kv": 40.0, "anode": "Rh"}


def two(file: File) -> None:
    for name, counts in (("front", COUNTS), ("back", OTHER)):
        entry = group(file, name, "NXentry", default="data")
        entry["title"] = f"the {name}"
        group(entry, "data", "NXdata", signal="counts")["counts"] = counts


def test_several_spectra(tmp_path):
    path = make(tmp_path, two)
    found = read_spectra(path)
    assert {s.dataset: s.title for s in found} == {"/back/data/counts": "the back", "/front/data/counts": "the front"}
    assert np.array_equal(read_spectrum(path, dataset="front").counts, COUNTS)
    assert np.array_equal(read_spectrum(path, dataset="the back").counts, OTHER)
    with pytest.raises(InputError, match=r"holds 2 spectra \(/back/data/counts, /front/data/counts\)"):
        read_spectrum(path)
    with pytest.raises(InputError, match='holds no dataset "counts"; known here: /back/data/counts, /front'):
        read_spectrum(path, dataset="counts")
    with pytest.raises(InputError, match="holds 2 datasets that can be spectra; known here"):
        read_spectrum(path, dataset="[0]")


# ------------------------------------------------------------------ scales
def test_a_bent_axis_has_a_quadratic_term(tmp_path):
    bent = EnergyScale(0.05, 0.08, 2e-5)
    found = read_spectrum(make(tmp_path, lambda f: f.create_dataset("mca", data=COUNTS),
                               lambda f: axis(f, bent.energy_kev(np.arange(N)))))  # fmt: skip
    assert found.scale.quadratic_kev == pytest.approx(2e-5)


@pytest.mark.parametrize(
    ("step", "kev", "says"),
    [
        (lambda f: axis(f, units=None), True, "the energy axis states no unit: taken as keV"),
        (lambda f: axis(f, 1e3 * ENERGY, None), True, "the energy axis states no unit: taken as eV"),
        (lambda f: axis(f, ENERGY[::-1].copy()), False, 'the axis "energy" does not rise throughout'),
        (lambda f: axis(f, np.exp(ENERGY / 5.0)), False, 'the axis "energy" is no polynomial'),
        (lambda f: f.create_dataset("calibration", data=[0.0, -1.0]), False, "the calibration .* is no rising line"),
        (lambda f: f.create_dataset("calibration", data=[-120.0, 80.0]), True, "states no unit: taken as eV"),
    ],
)
def test_what_was_assumed_of_the_scale_is_said(tmp_path, step, kev, says):
    found = read_spectrum(make(tmp_path, lambda f: f.create_dataset("mca", data=COUNTS), step))
    assert (found.scale is not None) is kev
    if kev:
        assert found.energy_kev == pytest.approx(ENERGY)
    assert re.search(says, " ".join(found.assumptions))


# ------------------------------------------------------------------ refused
def absurd(file: File) -> None:
    file.create_dataset("mca", (10**5, 10**5, 1024), "u2", chunks=(1, 1, 1024))


def hollow(file: File) -> None:
    file.create_dataset("mca", (10**4, 1024), "f8")


def heavy_chunks(file: File) -> None:
    file.create_dataset("mca", (2**20, 1024), "u2", chunks=(2**20, 1024), compression="gzip")


@pytest.mark.parametrize(
    ("step", "says"),
    [
        (lambda f: None, "holds no dataset of numbers with channels as its last axis; at least 64"),
        (lambda f: f.create_dataset("note", data="words"), "holds no dataset of numbers"),
        (lambda f: f.create_dataset("few", data=range(40)), r"\(/few is int64 of shape \(40,\)\)"),
        (lambda f: f.create_dataset("long", (10**13,), "f4"), r"\(/long is float32 of shape \(10000000000000,\)\)"),
        (lambda f: f.create_dataset("z", data=np.ones(N, complex)), r"/z is complex128"),
        (absurd, r"/mca: declares 1.02e\+13 values; use xrfid batch"),
        (hollow, "/mca: declares more values than the file holds"),
        (heavy_chunks, "/mca: is stored in chunks of 2048 MB; store it in chunks of at most 256 MB"),
        (lambda f: f.create_dataset("mca", (0, N), "u2"), "/mca: declares 0 values"),
        (lambda f: f.create_dataset("mca", data=np.full((2, N), -1)), "/mca: has no usable point"),
        (lambda f: f.create_dataset("mca", data=np.full(N, np.nan)), "the count is nan"),
        (lambda f: f.create_dataset("mca", data=np.full(N, -1)), "the count is -1"),
    ],
)
def test_refused(tmp_path, step, says):
    path = make(tmp_path, step)
    tracemalloc.start()
    with pytest.raises(InputError, match=says):
        read_spectrum(path)
    peak = tracemalloc.get_traced_memory()[1]
    tracemalloc.stop()
    assert peak < 16 * 2**20


@pytest.mark.parametrize(
    ("dataset", "says"),
    [
        ("/entry/data/count", 'holds no dataset "/entry/data/count"; did you mean "/entry/data/counts"'),
        ("elsewhere", 'holds no dataset "elsewhere"; known here: /entry/data/counts'),
        ("/entry/data/counts[3,0]", r"has no point \[3, 0\] \(leading shape \(3, 4\)\); counting begins at 0"),
        ("/entry/data/counts[1]", r"has no point \[1\]"),
        ("/entry/data/counts[1,1,1]", r"has no point \[1, 1, 1\]"),
        ("/entry/words", r"/entry/words: is no spectrum \(shape \(\)\); .*known here: /entry/data/counts"),
    ],
)
def test_a_name_that_leads_nowhere(tmp_path, dataset, says):
    path = make(tmp_path, stack, lambda file: file.create_dataset("entry/words", data="none"))
    with pytest.raises(InputError, match=says):
        read_spectrum(path, dataset=dataset)


def test_a_name_in_a_file_without_spectra(tmp_path):
    path = make(tmp_path, lambda file: file.create_dataset("few", data=range(9)))
    with pytest.raises(InputError, match="it holds none of numbers with at least 64 channels"):
        read_spectrum(path, dataset="few")


def test_broken_chunks(tmp_path):
    path = make(tmp_path, lambda file: stack(file, chunks=(1, 1, N), compression="gzip", fletcher32=True))
    with h5py.File(path) as file:
        info = file["entry/data/counts"].id.get_chunk_info(5)
    data = bytearray(path.read_bytes())
    data[info.byte_offset + 8 : info.byte_offset + 24] = b"\xff" * 16
    path.write_bytes(data)
    with pytest.raises(InputError, match=r"cannot be read as HDF5 \(.*\); the file is damaged or cut short"):
        read_spectrum(path)


def test_a_circle_of_defaults(tmp_path):
    def round_about(file: File) -> None:
        file.attrs["default"] = "a"
        file.create_group("a").attrs["default"] = "b"
        file["a/b"] = h5py.SoftLink("/a")
        file["mca"] = COUNTS

    assert np.array_equal(read_spectrum(make(tmp_path, round_about)).counts, COUNTS)


# ------------------------------------------------------------------ how it is opened
def test_a_file_that_is_being_written_is_read_without_a_lock(tmp_path):
    path = make(tmp_path, bare)
    with h5py.File(path, "a", locking=True) as file:
        file.flush()
        child = "import sys; from xrfid.formats import read_spectrum; print(read_spectrum(sys.argv[1]).total_counts)"
        said = subprocess.run([sys.executable, "-c", child, path], capture_output=True, text=True, check=False,
                              env={**os.environ, "PYTHONPATH": str(Path(__file__).parents[2])})  # fmt: skip
    assert said.stdout.strip() == str(float(COUNTS.sum())), said.stderr


def test_reading_changes_nothing(tmp_path):
    path = make(tmp_path, nxfluo)
    path.chmod(0o444)
    before = path.read_bytes()
    read_spectrum(path)
    assert path.read_bytes() == before


def test_from_memory(tmp_path):
    (found,) = read_bytes("dropped.h5", make(tmp_path, nxfluo).read_bytes())
    assert found.path == "dropped.h5"
    assert np.array_equal(found.counts, COUNTS)


@pytest.mark.parametrize(("layout", "needed"), [(bare, False), (packed, True)])
def test_filters_are_loaded_only_when_needed(tmp_path, layout, needed):
    path = make(tmp_path, layout)
    child = ("import sys; from xrfid.formats import read_spectrum; read_spectrum(sys.argv[1]); "
             "print('hdf5plugin' in sys.modules)")  # fmt: skip
    said = subprocess.run([sys.executable, "-c", child, path], capture_output=True, text=True, check=True,
                          env={**os.environ, "PYTHONPATH": str(Path(__file__).parents[2])})  # fmt: skip
    assert said.stdout.strip() == str(needed)


# ------------------------------------------------------------------ writing
def test_written_as_nexus(tmp_path):
    """NeXus: root and entry name their default, NXdata its signal and axes; units are attributes."""
    write_spectrum(spectrum(), tmp_path / "a.nxs")
    with h5py.File(tmp_path / "a.nxs") as file:
        entry = file[file.attrs["default"]]
        data = entry[entry.attrs["default"]]
        assert (file.attrs["NX_class"], entry.attrs["NX_class"], data.attrs["NX_class"]) == (
            "NXroot",
            "NXentry",
            "NXdata",
        )
        assert np.array_equal(data[data.attrs["signal"]], COUNTS)
        (name,) = data.attrs["axes"]
        assert data[name].attrs["units"] == "keV"
        assert np.array_equal(data[name], ENERGY)
        assert entry["live_time"][()] == 30.5


def test_several_written_are_several_entries(tmp_path):
    write_spectrum([spectrum(), spectrum(counts=OTHER, scale=None, title="b")], tmp_path / "a.h5")
    first, second = read_spectra(tmp_path / "a.h5")
    assert np.array_equal(first.counts, COUNTS)
    assert np.array_equal(second.counts, OTHER)
    assert (first.scale, second.scale) == (SCALE, None)
    assert (first.title, second.title) == ("bench coupon", "b")
