"""The scanning run: maps that show what was painted where."""

from __future__ import annotations

import json

import h5py
import numpy as np
import pytest
from shell import SAMPLES, xrfid

TRUTH = json.loads((SAMPLES / "truth.json").read_text(encoding="utf-8"))["panel_run.h5"]
WHERE = np.array([[int(c) for c in row] for row in TRUTH["map"]])
MATERIALS = list(TRUTH["materials"])


@pytest.fixture(scope="module")
def maps(tmp_path_factory):
    """Result of the whole run: {series: (area, sigma)}."""
    folder = tmp_path_factory.mktemp("run")
    said = xrfid("batch", SAMPLES / "panel_run.h5", "--instrument", SAMPLES / "museum.toml", "--out", folder / "r.h5",
                 "--maps", folder / "maps.png")  # fmt: skip
    assert said.status == 0, said.err
    assert (folder / "maps.png").read_bytes()[:4] == b"\x89PNG"
    with h5py.File(folder / "r.h5") as file:
        group = file["entry/series"]
        return {name: (group[name]["area"][()], group[name]["sigma"][()]) for name in group}


def test_the_shape_is_the_runs(maps):
    assert all(area.shape == WHERE.shape for area, _ in maps.values())


@pytest.mark.parametrize(
    ("series", "material"),
    [
        ("Hg_L", "cloak"),
        ("Cu_K", "meadow"),
        ("As_K", "meadow"),
        ("Zn_K", "retouch"),
        ("Ti_K", "retouch"),
        ("Fe_K", "nail"),
    ],
)
def test_each_material_lies_where_it_was_painted(maps, series, material):
    area, sigma = maps[series]
    inside = MATERIALS.index(material) == WHERE
    assert area[inside].mean() > 20 * np.abs(area[~inside]).mean()
    assert np.median(area[inside] / sigma[inside]) > 5


def test_what_covers_few_points_is_not_lost_in_the_sum(maps):
    """The nail covers 5 of 2400 points."""
    assert TRUTH["points"]["nail"] <= 5
    assert "Fe_K" in maps


def test_nothing_is_named_that_nobody_painted(maps):
    painted = {e for m in TRUTH["materials"].values() for e in m} | {"Zr", "Ar", "Mo"}
    assert {name.partition("_")[0] for name in maps} <= painted
