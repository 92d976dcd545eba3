"""The unfinished result: killed at any moment it goes on and ends with the same bytes; nothing gets mixed."""

from __future__ import annotations

import os
import signal
import subprocess
import sys
import time
from dataclasses import replace
from pathlib import Path

import h5py
import numpy as np
import pytest
import simulated

from xrfid.batch.plan import Plan
from xrfid.batch.stack import Place, Stack
from xrfid.batch.store import Part, Sums, create_part
from xrfid.batch.work import Threads, fit_blocks
from xrfid.errors import OutputError

COUNTS = 500.0
SLOW = """
import sys, time, h5py
sys.path[:0] = {path!r}
import xrfid.batch.work as work, xrfid.batch.stack as stacks
from xrfid.batch.store import Part
from xrfid.batch.engine import one_blas_thread
from pathlib import Path
stacks.BLOCK_BYTES, work._CHECKPOINT_S = 50 * 1024 * 4, 0.01
fit = work.fit_stack_block
work.fit_stack_block = lambda *a: (time.sleep(0.004), fit(*a))[1]
with stacks.Stack(stacks.Place({run!r})) as stack, one_blas_thread():
    part = Part(Path({part!r}))
    print(part.sums.count, flush=True)
    work.fit_blocks(stack, part, work.Threads(stack, 2), lambda *a: None)
"""


@pytest.fixture
def run_file(model: simulated.Model, tmp_path: Path) -> Path:
    rng = np.random.default_rng(2)
    mean, _ = model.expected(simulated.mixtures(40, 50, rng), COUNTS)
    return simulated.write_run(tmp_path / "run.h5", rng.poisson(mean).astype(np.uint16).reshape(40, 50, 1024))


@pytest.fixture
def small_blocks(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr("xrfid.batch.stack.BLOCK_BYTES", 50 * 1024 * 4)


def laid_out(run_file: Path, plan: Plan, name: str) -> Path:
    path = run_file.with_name(name)
    with Stack(Place(str(run_file))) as stack:
        create_part(path, {"stage": "final"}, plan, stack.shape, stack.n_blocks).close()
    return path


def complete(run_file: Path, path: Path, workers: int = 2) -> None:
    with Stack(Place(str(run_file))) as stack:
        part, team = Part(path), Threads(stack, workers)
        fit_blocks(stack, part, team, lambda what, done, of: None)
        team.close()
        part.close()


def arrays(path: Path) -> dict[str, bytes]:
    found: dict[str, bytes] = {}
    with h5py.File(path) as file:
        file.visititems(
            lambda name, item: found.update({name: item[()].tobytes()})
            if isinstance(item, h5py.Dataset) and name != "state" and not name.startswith("plan") else None
        )  # fmt: skip
    return found


@pytest.mark.usefixtures("small_blocks")
def test_killed_at_random_moments_it_ends_with_the_same_bytes(run_file: Path, plan: Plan) -> None:
    undisturbed, killed = laid_out(run_file, plan, "a.part"), laid_out(run_file, plan, "b.part")
    complete(run_file, undisturbed)
    here = [str(Path(__file__).parents[2]), str(Path(__file__).parent)]
    code = SLOW.format(path=here, run=str(run_file), part=str(killed))
    rng = np.random.default_rng(4)
    begun_at = []
    for attempt in range(40):
        if attempt >= 5 and begun_at[-1] > 0:
            break
        worker = subprocess.Popen([sys.executable, "-c", code], stdout=subprocess.PIPE, text=True)
        assert worker.stdout is not None
        begun_at.append(int(worker.stdout.readline()))
        time.sleep(rng.uniform(0.01, 0.06) * (1 + attempt / 5))  # a slow machine gets further later
        worker.send_signal(signal.SIGKILL)
        worker.wait()
        worker.stdout.close()
        with h5py.File(killed) as file:  # whole at any moment, and honest about what is done
            done = file["entry/fit/done"][()].astype(bool)
            area = file["entry/series/Fe_K/area"][()].reshape(len(done), -1)
            assert (area[done] != 0).any(axis=1).all()
    assert sorted(begun_at) == begun_at
    assert begun_at[-1] > 0
    complete(run_file, killed)
    assert arrays(undisturbed) == arrays(killed)


@pytest.mark.usefixtures("small_blocks")
def test_the_number_of_workers_does_not_change_a_bit(run_file: Path, plan: Plan) -> None:
    one, three = laid_out(run_file, plan, "one.part"), laid_out(run_file, plan, "three.part")
    complete(run_file, one, 1)
    complete(run_file, three, 3)
    assert arrays(one) == arrays(three)


@pytest.mark.usefixtures("small_blocks")
def test_a_torn_record_falls_back_on_the_one_before(run_file: Path, plan: Plan) -> None:
    path = laid_out(run_file, plan, "torn.part")
    complete(run_file, path)
    reference = arrays(path)
    part = Part(path)
    newest, size = part._turn ^ 1, len(part.sums.packed())
    offset = part._slots + newest * size + 100
    part.close()
    with path.open("rb+") as file:
        file.seek(offset)
        file.write(b"torn")
    part = Part(path)
    assert part.sums.count < 40
    part.close()
    complete(run_file, path)
    assert arrays(path) == reference


def test_sums_survive_packing() -> None:
    rng = np.random.default_rng(0)
    sums = Sums(3, rng.random(64), rng.random(64).astype(np.float32), rng.integers(0, 9, 64))
    back = Sums.unpacked(sums.packed(), 64)
    assert back is not None
    assert back.packed() == sums.packed()
    assert Sums.unpacked(b"x" + sums.packed()[1:], 64) is None


def test_two_processes_do_not_write_the_same_result(run_file: Path, plan: Plan) -> None:
    path = laid_out(run_file, plan, "once.part")
    first = Part(path)
    with pytest.raises(OutputError, match="another run is writing it"):
        Part(path)
    first.close()
    Part(path).close()


def test_the_plan_reads_back_as_it_was(run_file: Path, plan: Plan) -> None:
    part = Part(laid_out(run_file, plan, "plan.part"))
    part.close()
    assert part.plan.names == plan.names
    np.testing.assert_array_equal(part.plan.projection, plan.projection)
    assert (part.plan.band, part.plan.n_channels, part.plan.n_continuum) == (plan.band, 1024, 3)


def test_a_full_disk_is_said_and_leaves_nothing_half(
    run_file: Path, plan: Plan, monkeypatch: pytest.MonkeyPatch
) -> None:
    path = laid_out(run_file, plan, "full.part")

    def full(*_: object) -> int:
        raise OSError(28, "No space left on device")

    with Stack(Place(str(run_file))) as stack:
        part, team = Part(path), Threads(stack, 1)
        with monkeypatch.context() as patched:
            patched.setattr(os, "pwrite", full)
            with pytest.raises(OutputError, match="the disk is full; make room and give the same command again"):
                fit_blocks(stack, part, team, lambda what, done, of: None)
        team.close()
        part.close()
    complete(run_file, path)
    with h5py.File(path) as file:
        assert file["entry/fit/done"][()].all()


def test_a_place_that_cannot_be_written_is_said(plan: Plan, tmp_path: Path) -> None:
    with pytest.raises(OutputError, match="cannot be written"):
        create_part(tmp_path / "none" / "x.part", {}, replace(plan), (2, 2), 1)
