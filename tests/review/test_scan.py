"""A batch result under review: maps for the screen, and the sum of any region read from the run itself."""

from __future__ import annotations

import shutil
import time
from pathlib import Path

import h5py
import numpy as np
import pytest

from xrfid.errors import InputError
from xrfid.review import scan as scanning
from xrfid.review.scan import Region, Scan, averaged_down, is_batch_result
from xrfid.review.session import Desk

SAMPLES = Path(__file__).parents[2] / "sample_spectra"


@pytest.fixture
def result(batch_result):
    return batch_result


@pytest.fixture
def counts(result):
    """All counts of the run, shape (40, 60, 1024)."""
    found = []
    with h5py.File(result.parent / "run.h5") as file:
        file.visititems(lambda name, item: found.append(item[()]) if getattr(item, "ndim", 0) == 3 else None)
    assert found[0].shape[:2] == (40, 60)
    return found[0].astype(float)


def test_a_result_is_told_from_a_run(result):
    assert is_batch_result(result)
    assert not is_batch_result(result.parent / "run.h5")
    assert not is_batch_result(SAMPLES / "coupon.msa")


def test_it_knows_the_instrument_the_series_and_the_scale(result):
    found = Scan(result)
    assert found.instrument.name == "museum tripod"
    assert {"Fe K", "Zn K", "Hg L", "Pb L"} <= set(found.series)
    assert found.shape == (40, 60)
    with h5py.File(result) as file:
        energy = file["entry/sum_spectrum/energy"][()]
    np.testing.assert_allclose(found.scale.energy_kev(np.arange(energy.size)), energy, rtol=0, atol=1e-9)


def test_a_map_shows_where_the_nail_is(result):
    """The scenario (sample_spectra/scenario.toml) puts the iron nail at row 33, column 5."""
    row, column = np.unravel_index(np.nanargmax(Scan(result).map("Fe K")), (40, 60))
    assert abs(row - 33) <= 2
    assert abs(column - 5) <= 2


@pytest.mark.parametrize(
    ("region", "few"),
    [
        (Region(33, 33, 5, 5), 256),
        (Region(4, 25, 8, 27), 256),
        (Region(4, 25, 8, 27), 10**6),
        (Region(0, 39, 0, 59), 256),
    ],
)
def test_a_region_is_the_sum_of_its_points(result, counts, region, few, monkeypatch):
    monkeypatch.setattr(scanning, "_FEW", few)
    spectrum = Scan(result).region(region)
    part = counts[region.first_row : region.last_row + 1, region.first_column : region.last_column + 1]
    np.testing.assert_array_equal(spectrum.counts, part.sum(axis=(0, 1)))
    assert str(region) in spectrum.name


def test_the_whole_is_the_sum_that_the_batch_made(result, counts):
    np.testing.assert_allclose(Scan(result).whole().counts, counts.sum(axis=(0, 1)))


def test_the_nail_is_identified_as_iron(result, tmp_path):
    found = Scan(result)
    desk = Desk(tmp_path)
    case = desk.add(found.region(Region(32, 34, 4, 6)), found.instrument)
    desk.identify(case)
    assert "Fe" in case.identification.identified
    assert "Hg" not in case.identification.identified


def test_a_dragged_rectangle_stays_on_the_map():
    assert Region.around((-5.0, 3.2), (58.9, 99.0), (40, 60)) == Region(0, 3, 58, 59)
    assert Region.around((7.4, 7.4), (2.0, 2.0), (40, 60)) == Region(7, 7, 2, 2)
    assert Region.around((9.0, 2.0), (5.0, 1.0), (40, 60)) == Region(2, 9, 1, 5)
    assert str(Region(7, 7, 2, 2)) == "row 7, column 2"


def test_a_region_of_nothing_is_refused(result):
    with pytest.raises(InputError, match="holds no point"):
        Scan(result).region(Region(50, 60, 0, 3))


def test_a_series_without_a_map_is_refused(result):
    with pytest.raises(InputError, match='no map of "U L"'):
        Scan(result).map("U L")


def test_a_run_beside_its_result_is_found_after_both_moved(result, tmp_path):
    for name in ("run.h5", "result.h5"):
        shutil.copy(result.parent / name, tmp_path / name)
    with h5py.File(tmp_path / "result.h5", "r+") as file:
        del file["entry/provenance/input_path"]
        file["entry/provenance/input_path"] = "/long/gone/run.h5"
    moved = Scan(tmp_path / "result.h5").region(Region(0, 1, 0, 1))
    assert moved.total_counts == Scan(result).region(Region(0, 1, 0, 1)).total_counts
    (tmp_path / "run.h5").unlink()
    with pytest.raises(InputError, match="not there any more"):
        Scan(tmp_path / "result.h5").region(Region(0, 1, 0, 1))


def test_another_run_in_its_place_is_noticed(result, tmp_path):
    shutil.copy(result, tmp_path / "result.h5")
    with h5py.File(tmp_path / "result.h5", "r+") as file:
        del file["entry/provenance/input_path"]
        file["entry/provenance/input_path"] = str(tmp_path / "other.h5")
    with h5py.File(tmp_path / "other.h5", "w") as other, h5py.File(result.parent / "run.h5") as first:
        for name in first:
            first.copy(name, other)
        found = []
        other.visititems(lambda name, item: found.append(item) if getattr(item, "ndim", 0) == 3 else None)
        found[0][0, 0, 0] = found[0][0, 0, 0] + 1
    with pytest.raises(InputError, match="is not the run that this result was made of"):
        Scan(tmp_path / "result.h5").region(Region(0, 1, 0, 1))


def test_half_a_result_is_named(result, tmp_path):
    shutil.copy(result, tmp_path / "half.h5")
    with h5py.File(tmp_path / "half.h5", "r+") as file:
        del file["entry/sum_spectrum"]
    with pytest.raises(InputError, match="no whole batch result"):
        Scan(tmp_path / "half.h5")
    with h5py.File(tmp_path / "half.h5", "w") as file, h5py.File(result) as whole:
        whole.copy("entry", file)
        del file["entry/provenance/input"]
        file["entry/provenance/input"] = "{}"
    with pytest.raises(InputError, match="does not say what run it is of"):
        Scan(tmp_path / "half.h5").region(Region(0, 1, 0, 1))


def test_large_maps_are_averaged_down_quickly():
    large = np.arange(3000 * 2500, dtype=np.float32).reshape(3000, 2500)
    large[:3, :3] = np.nan
    start = time.perf_counter()
    small = averaged_down(large, 1000)
    assert time.perf_counter() - start < 2.0
    assert small.shape == (1000, 834)
    assert small.dtype == np.float32
    assert np.isnan(small[0, 0])
    assert small[10, 10] == pytest.approx(large[30:33, 30:33].mean(), rel=1e-6)
    small_already = np.ones((1000, 1000), np.float32)
    assert averaged_down(small_already, 1000) is small_already
