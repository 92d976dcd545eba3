"""Every layout of an HDF5 run gives the same spectra; what is damaged costs its own points only."""

from __future__ import annotations

import os
from pathlib import Path
from typing import Any

import h5py
import hdf5plugin
import numpy as np
import pytest

from xrfid.batch.locate import open_input
from xrfid.batch.stack import Place, Stack
from xrfid.errors import InputError
from xrfid.spectrum import EnergyScale

SHAPE = (6, 10, 64)
LAYOUTS: dict[str, dict[str, Any]] = {
    "contiguous": {},
    "chunked": {"chunks": (4, 3, 64)},
    "chunks across channels": {"chunks": (2, 5, 24)},
    "gzip": {"chunks": (4, 3, 64), "compression": "gzip"},
    "gzip, shuffle": {"chunks": (4, 3, 64), "compression": "gzip", "shuffle": True},
    "gzip, checksum": {"chunks": (4, 3, 64), "compression": "gzip", "fletcher32": True},
    "lzf": {"chunks": (4, 3, 64), "compression": "lzf"},
    "blosc": {"chunks": (4, 3, 64), **hdf5plugin.Blosc()},
    "bitshuffle": {"chunks": (4, 3, 64), **hdf5plugin.Bitshuffle()},
    "zstd": {"chunks": (4, 3, 64), **hdf5plugin.Zstd()},
}


def counts(dtype: str = "u2", shape: tuple[int, ...] = SHAPE) -> np.ndarray:
    return np.random.default_rng(0).integers(0, 100, shape).astype(dtype)


def write(path: Path, **datasets: Any) -> Path:
    with h5py.File(path, "w") as file:
        for name, (data, options) in datasets.items():
            file.create_dataset(name, data=data, **options)
    return path


def everything(stack: Stack) -> np.ndarray:
    """All points, put back into their places block by block."""
    out = np.full((stack.n_points, stack.n_channels), -1.0)
    for block in range(stack.n_blocks):
        layers, lost = stack.read(block)
        assert not lost.any()
        values = np.sum([layer.astype(float) for layer in layers], axis=0)
        out[stack.flat(block)] = values
        for first, target, length in stack.runs(block):
            np.testing.assert_array_equal(stack.flat(block)[first : first + length], np.arange(target, target + length))
    return out


@pytest.mark.parametrize("layout", LAYOUTS)
def test_every_layout_gives_the_same_spectra(layout: str, tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr("xrfid.batch.stack.BLOCK_BYTES", 14 * 64 * 4)  # so that there are several blocks
    path = write(tmp_path / "run.h5", counts=(counts(), LAYOUTS[layout]))
    with Stack(Place(str(path))) as stack:
        assert stack.n_blocks > 1
        np.testing.assert_array_equal(everything(stack), counts().reshape(-1, 64))
        np.testing.assert_array_equal(stack.spectra(np.array([7, 59, 0])), counts().reshape(-1, 64)[[7, 59, 0]])


@pytest.mark.parametrize("dtype", ["u1", "u2", ">u2", "u4", "i4", "i8", "f4", ">f8", "f8"])
def test_every_number_type_is_read(dtype: str, tmp_path: Path) -> None:
    path = write(tmp_path / "run.h5", counts=(counts(dtype), {}))
    with Stack(Place(str(path))) as stack:
        np.testing.assert_array_equal(everything(stack), counts().reshape(-1, 64))


@pytest.mark.parametrize("shape", [(1, 64), (37, 64), (2, 3, 4, 5, 64)])
def test_any_number_of_leading_axes(shape: tuple[int, ...], tmp_path: Path) -> None:
    path = write(tmp_path / "run.h5", counts=(counts(shape=shape), {}))
    with Stack(Place(str(path))) as stack:
        assert stack.shape == shape[:-1]
        np.testing.assert_array_equal(everything(stack), counts(shape=shape).reshape(-1, 64))


def test_chunks_too_large_to_hold_are_read_in_parts(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    for name in ("_MOST_BYTES", "BLOCK_BYTES"):
        monkeypatch.setattr(f"xrfid.batch.stack.{name}", 8 * 64 * 4)
    path = write(tmp_path / "run.h5", counts=(counts(), {"chunks": SHAPE, "compression": "gzip"}))
    with Stack(Place(str(path))) as stack:
        assert stack.points_per_block <= 8
        np.testing.assert_array_equal(everything(stack), counts().reshape(-1, 64))


def test_detectors_are_summed_or_chosen(tmp_path: Path) -> None:
    both = counts(shape=(3, 4, 5, 64))
    path = write(tmp_path / "run.h5", counts=(both, {"chunks": (2, 2, 5, 64), "compression": "gzip"}))
    with Stack(Place(str(path), detectors="all")) as stack:
        assert stack.shape == (4, 5)
        np.testing.assert_array_equal(everything(stack), both.sum(axis=0).reshape(-1, 64))
    with Stack(Place(str(path), detectors=(0, 2))) as stack:
        np.testing.assert_array_equal(everything(stack), (both[0] + both[2]).reshape(-1, 64))
        np.testing.assert_array_equal(stack.spectra(np.array([9])), (both[0] + both[2]).reshape(-1, 64)[[9]])


def test_several_datasets_are_summed(tmp_path: Path) -> None:
    path = write(tmp_path / "run.h5", a=(counts(), {}), b=(counts(), {}))
    with Stack(Place(str(path), "a,b")) as stack:
        np.testing.assert_array_equal(everything(stack), 2 * counts().reshape(-1, 64))


def test_a_chunk_that_was_never_written_holds_the_fill_value(tmp_path: Path) -> None:
    with h5py.File(tmp_path / "run.h5", "w") as file:
        data = file.create_dataset("counts", SHAPE, "u2", chunks=(1, 10, 64), compression="gzip", fillvalue=3)
        data[0] = counts()[0]
    with Stack(Place(str(tmp_path / "run.h5"))) as stack:
        found = everything(stack)
    np.testing.assert_array_equal(found[:10], counts()[0])
    assert (found[10:] == 3).all()


@pytest.mark.parametrize("layout", ["contiguous", "gzip", "lzf"])
def test_a_truncated_file_costs_what_is_missing(layout: str, tmp_path: Path) -> None:
    many = counts(shape=(400, 64))
    options = {**LAYOUTS[layout], **({} if layout == "contiguous" else {"chunks": (20, 64)})}
    path = write(tmp_path / "run.h5", counts=(many, options))
    os.truncate(path, int(path.stat().st_size * 0.6))
    with Stack(Place(str(path))) as stack:
        assert stack.truncated
        layers, lost = stack.read(0)
    assert 100 < lost.sum() < 250
    np.testing.assert_array_equal(layers[0][~lost], many[~lost])


@pytest.mark.parametrize("layout", ["gzip", "gzip, checksum", "zstd"])
def test_a_damaged_chunk_costs_its_own_points(layout: str, tmp_path: Path) -> None:
    many = counts(shape=(200, 64))
    path = write(tmp_path / "run.h5", counts=(many, {**LAYOUTS[layout], "chunks": (20, 64)}))
    with h5py.File(path) as file:
        info = file["counts"].id.get_chunk_info_by_coord((60, 0))
    with path.open("rb+") as file:
        file.seek(info.byte_offset)
        file.write(bytes(b ^ 0xFF for b in b"\x00" * info.size))
    with Stack(Place(str(path))) as stack:
        layers, lost = stack.read(0)
    np.testing.assert_array_equal(np.flatnonzero(lost), np.arange(60, 80))
    np.testing.assert_array_equal(layers[0][~lost], many[~lost])


def test_the_energy_axis_is_read_in_either_unit(tmp_path: Path) -> None:
    for units, factor in (("eV", 1e3), ("keV", 1.0)):
        with h5py.File(tmp_path / f"{units}.h5", "w") as file:
            file["counts"], file["energy"] = counts(), (0.1 + 0.02 * np.arange(64)) * factor
            file["energy"].attrs["units"] = units
        with Stack(Place(str(tmp_path / f"{units}.h5"))) as stack:
            assert isinstance(stack.scale, EnergyScale)
            assert stack.scale.offset_kev == pytest.approx(0.1)
            assert stack.scale.gain_kev == pytest.approx(0.02)


def test_an_axis_that_is_no_scale_is_left_alone(tmp_path: Path) -> None:
    with h5py.File(tmp_path / "run.h5", "w") as file:
        file["counts"], file["energy"] = counts(), np.random.default_rng(0).random(64)
        file["energy"].attrs["units"] = "keV"
    with Stack(Place(str(tmp_path / "run.h5"))) as stack:
        assert stack.scale is None


def test_what_cannot_be_the_run_is_said(tmp_path: Path) -> None:
    two = write(tmp_path / "two.h5", a=(counts(), {}), b=(counts(), {}))
    with pytest.raises(InputError, match="2 datasets could be the run: /a, /b"):
        Stack(Place(str(two)))
    with pytest.raises(InputError, match='has no dataset "c"'):
        Stack(Place(str(two), "c"))
    mixed = write(tmp_path / "mixed.h5", a=(counts(), {}), b=(counts()[:3], {}))
    with pytest.raises(InputError, match="differ in shape"):
        Stack(Place(str(mixed), "a,b"))
    nothing = write(tmp_path / "nothing.h5", a=(np.zeros(100), {}))
    with pytest.raises(InputError, match="holds no stack of spectra"):
        Stack(Place(str(nothing)))
    with pytest.raises(InputError, match="is no stack of spectra"):
        Stack(Place(str(nothing), "a"))
    with pytest.raises(InputError, match="has no detector 9"):
        Stack(Place(str(two), "a", detectors=(9,)))
    flat = write(tmp_path / "flat.h5", a=(counts(shape=(5, 64)), {}))
    with pytest.raises(InputError, match="has no axis of detectors"):
        Stack(Place(str(flat), detectors="all"))


def test_files_that_cannot_be_opened_are_named(tmp_path: Path) -> None:
    with pytest.raises(InputError, match="does not exist"):
        open_input(tmp_path / "none.h5")
    (tmp_path / "text.h5").write_text("no HDF5 at all")
    with pytest.raises(InputError, match="cannot be read as HDF5"):
        open_input(tmp_path / "text.h5")
    whole = write(tmp_path / "cut.h5", a=(counts(), {}))
    os.truncate(whole, 600)
    with pytest.raises(InputError, match=r"was cut off|is damaged|holds no stack"):
        Stack(Place(str(whole)))
