"""The command resumed: by the same call, and by no other."""

from __future__ import annotations

from pathlib import Path

import h5py
import numpy as np
import pytest
import simulated

from xrfid.batch import run
from xrfid.errors import OutputError
from xrfid.instrument import Instrument
from xrfid.report.document import to_json

ELEMENTS = ("Fe", "Ca", "Pb")


class Stopped(Exception):
    """The power went off."""


def call(source: Path, out: Path, *, stop_at: int | None = None, instrument: Instrument = simulated.INSTRUMENT,
         elements: tuple[str, ...] = ELEMENTS, overwrite: bool = False):  # type: ignore[no-untyped-def]  # fmt: skip
    def progress(what: str, done: int, of: int) -> None:
        if stop_at is not None and what == "fitting" and done >= stop_at:
            raise Stopped

    return run(source, out, document=to_json, instrument=instrument, elements=elements, overwrite=overwrite,
               progress=progress)  # fmt: skip


@pytest.fixture
def stack(model: simulated.Model, monkeypatch: pytest.MonkeyPatch) -> np.ndarray:
    monkeypatch.setattr("xrfid.batch.stack.BLOCK_BYTES", 50 * 1024 * 4)
    monkeypatch.setattr("xrfid.batch.work._CHECKPOINT_S", 0.0)
    rng = np.random.default_rng(9)
    mean, _ = model.expected(simulated.mixtures(20, 50, rng), 500.0)
    return rng.poisson(mean).astype(np.uint16).reshape(20, 50, 1024)


@pytest.fixture
def source(stack: np.ndarray, tmp_path: Path) -> Path:
    return simulated.write_run(tmp_path / "run.h5", stack)


def test_the_same_call_goes_on_and_ends_with_the_same_arrays(source: Path, tmp_path: Path) -> None:
    whole, parts = tmp_path / "whole.h5", tmp_path / "parts.h5"
    call(source, whole)
    with pytest.raises(Stopped):
        call(source, parts, stop_at=400)
    assert not parts.exists()
    assert parts.with_name("parts.h5.part").exists()
    assert call(source, parts).resumed_at >= 7
    assert not parts.with_name("parts.h5.part").exists()
    with h5py.File(whole) as a, h5py.File(parts) as b:
        for name in ("series/Fe_K/area", "series/Fe_K/sigma", "series/Pb_L/area", "fit/reduced_chi2", "fit/drift",
                     "sum_spectrum/counts", "sum_spectrum/maximum", "strongest/area"):  # fmt: skip
            assert a["entry"][name][()].tobytes() == b["entry"][name][()].tobytes(), name


def test_another_input_or_other_settings_are_refused(source: Path, stack: np.ndarray, tmp_path: Path) -> None:
    out = tmp_path / "out.h5"
    with pytest.raises(Stopped):
        call(source, out, stop_at=400)
    with pytest.raises(OutputError, match="unfinished result of another settings"):
        call(source, out, elements=("Fe", "Ca"))
    with pytest.raises(OutputError, match="unfinished result of another instrument"):
        call(source, out, instrument=Instrument.from_table({"detector": {"thickness_um": 400}}))
    changed = stack.copy()
    changed[3, 4, 5] += 1
    other = simulated.write_run(tmp_path / "other.h5", changed)
    with pytest.raises(OutputError, match="unfinished result of another input"):
        call(other, out)
    summary = call(other, out, overwrite=True)
    assert summary.resumed_at == 0


def test_what_is_no_unfinished_result_is_not_overwritten(source: Path, tmp_path: Path) -> None:
    with h5py.File(tmp_path / "out.h5.part", "w") as file:
        file["something"] = 1
    with pytest.raises(OutputError, match="is no unfinished result"):
        call(source, tmp_path / "out.h5")
    (tmp_path / "out.h5.part").write_text("a letter")
    with pytest.raises(OutputError, match="is no unfinished result"):
        call(source, tmp_path / "out.h5")
