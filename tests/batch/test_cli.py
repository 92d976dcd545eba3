"""``xrfid batch`` as it is typed."""

from __future__ import annotations

import subprocess
import sys
from pathlib import Path

import h5py
import numpy as np
import pytest
import simulated

from xrfid.batch.maps import read_maps


@pytest.fixture
def folder(model: simulated.Model, tmp_path: Path) -> Path:
    rng = np.random.default_rng(5)
    mean, _ = model.expected(simulated.mixtures(20, 30, rng), 1000.0)
    counts = rng.poisson(mean).astype(np.float32).reshape(20, 30, 1024)
    counts[3, 4, 5] = np.nan
    simulated.write_run(tmp_path / "run.h5", counts)
    (tmp_path / "in.toml").write_text(simulated.INSTRUMENT.to_toml())
    return tmp_path


def xrfid(folder: Path, *words: str) -> subprocess.CompletedProcess[str]:
    root = str(Path(__file__).parents[2])
    return subprocess.run([sys.executable, "-m", "xrfid", *words], cwd=folder, capture_output=True, text=True,
                          env={"PYTHONPATH": root, "PATH": "/usr/bin:/bin"}, check=False)  # fmt: skip


def test_a_run_becomes_a_result_and_a_picture(folder: Path) -> None:
    words = ("batch", "run.h5", "--out", "result.h5", "--instrument", "in.toml", "--elements", "Fe,Ca,Pb")
    done = xrfid(folder, *words, "--maps", "maps.png")
    assert done.returncode == 0, done.stderr
    assert "Fe K" in done.stdout
    assert done.stderr == "xrfid: 1 points have no result: not finite\n"  # no progress bar where nobody watches
    assert (folder / "maps.png").read_bytes().startswith(b"\x89PNG")
    with h5py.File(folder / "result.h5") as file:
        assert np.isnan(file["entry/series/Fe_K/area"][3, 4])
    again = xrfid(folder, *words)
    assert again.returncode == 3
    assert "result.h5: exists; give --overwrite" in again.stderr
    assert again.stderr.count("\n") == 1


@pytest.mark.parametrize(
    ("words", "status", "said"),
    [
        (("nothing.h5", "--out", "r.h5"), 3, "nothing.h5: does not exist"),
        (("run.h5",), 2, "Missing option '--out'"),
        (("run.h5", "--out", "r.h5", "--elements", "Fex"), 3, '"Fex" is no element symbol'),
        (("run.h5", "--out", "r.h5", "--detectors", "left"), 3, '"left" is no list of numbers'),
        (("run.h5", "--out", "r.h5", "--dataset", "/entry/none"), 3, 'has no dataset "/entry/none"'),
        (("run.h5", "--out", "r.h5", "--maps", "in.toml"), 3, "in.toml: exists"),
        (("run.h5", "--out", "r.h5", "--workers", "0"), 2, "0 is not in the range"),
    ],
)
def test_mistakes_are_one_line(folder: Path, words: tuple[str, ...], status: int, said: str) -> None:
    done = xrfid(folder, "batch", *words)
    assert done.returncode == status
    assert said in done.stderr
    assert "Traceback" not in done.stderr
    assert not (folder / "r.h5").exists()
    assert not (folder / "r.h5.part").exists()


def test_maps_of_lines_and_volumes_are_pictures(tmp_path: Path) -> None:
    for shape, picture in (((7,), (1, 7)), ((3, 4), (3, 4)), ((2, 3, 4), (3, 4)), ((2, 5000), (2, 1667))):
        with h5py.File(tmp_path / "r.h5", "w") as file:
            file["entry/series/Fe_K/area"] = np.ones(shape, np.float32)
        assert read_maps(tmp_path / "r.h5", ["Fe K"])["Fe K"].shape == picture
